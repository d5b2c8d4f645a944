"""All figures of a run, written into its folder."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from matplotlib.figure import Figure

from roa.errors import UserError
from roa.report import figures
from roa.report.answer import partial_sentence
from roa.report.difference import Difference, difference_figure
from roa.report.evidence import Evidence
from roa.report.save import FORMATS, save
from roa.report.style import settings


def draw_figures(
    folder: Path,
    evidence: Evidence,
    only: Sequence[str] = (),
    formats: Sequence[str] = FORMATS,
    dots_per_inch: int | None = None,
    suffix: str = "",
) -> tuple[Path, ...]:
    """Draw and write the figures that the run has something to show in; return the paths of all files.

    Parameters
    ----------
    folder : where they go
    evidence : of the run
    only : names of the figures that are wanted; all where empty
    formats : endings of the files
    dots_per_inch : of the pixels; that of the house where None
    suffix : behind the name of every file, so that another view does not replace the run's own figures

    Raises
    ------
    UserError
        There is no figure of that name, or a figure that is wanted has nothing to show.
    """
    written: list[Path] = []
    with settings():
        for name in only or figures.names():
            one = figures.load(name)
            if one.applies(evidence):
                figure = _marked(one.figure(evidence), evidence)
                written += save(figure, folder, f"{name}{suffix}", formats, dots_per_inch)
            elif only:
                raise UserError(f"figure {name!r}: this run has nothing to show in it")
    return tuple(written)


def _marked(figure: Figure, evidence: Evidence) -> Figure:
    """Write on a figure of a partial sweep that it is one."""
    if sentence := partial_sentence(evidence.verdict):
        figure.text(0.005, 0.002, sentence, fontsize=6, ha="left", va="bottom")
    return figure


def draw_difference(
    folder: Path,
    first: Evidence,
    second: Evidence,
    names: tuple[str, str],
    formats: Sequence[str] = FORMATS,
    dots_per_inch: int | None = None,
) -> tuple[Path, ...]:
    """Draw two runs, which are called by their names, in one picture; return the paths of its files.

    Raises
    ------
    UserError
        The two loops have not the same states, or their domains nothing in common.
    """
    with settings():
        figure = difference_figure(Difference(first, second), names)
        return save(figure, folder, f"difference-{names[1]}", formats, dots_per_inch)
