"""Figures as files: PNG, SVG and PDF, the same bytes whenever the same figure is saved."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from io import BytesIO
from pathlib import Path

from matplotlib.figure import Figure

from roa.errors import UserError
from roa.report.style import settings
from roa.sweep.run_folder import write_atomically

DOTS_PER_INCH = 200

# What every run writes; PDF on request.
FORMATS = ("png", "svg")

# Neither date nor name of software, which would make the bytes differ; letters in SVG are paths, so that it looks
# alike on every machine.
METADATA: Mapping[str, dict[str, None]] = {
    "png": {"Software": None},
    "svg": {"Date": None, "Creator": None},
    "pdf": {"CreationDate": None, "Creator": None, "Producer": None},
}


def figure_bytes(figure: Figure, kind: str, dots_per_inch: int = DOTS_PER_INCH) -> bytes:
    """The figure as a file of the given kind: "png", "svg" or "pdf"."""
    target = BytesIO()
    with settings():
        figure.savefig(target, format=kind, dpi=dots_per_inch, metadata=METADATA[kind])
    return target.getvalue()


def save(
    figure: Figure, folder: Path, name: str, formats: Sequence[str] = FORMATS, dots_per_inch: int | None = None
) -> tuple[Path, ...]:
    """Write the figure into the folder in each format, whole or not at all, and return the paths."""
    paths = tuple(folder / f"{name}.{kind}" for kind in formats)
    for kind, path in zip(formats, paths, strict=True):
        write_atomically(path, figure_bytes(figure, kind, dots_per_inch or DOTS_PER_INCH))
    return paths


def read_formats(text: str | None) -> tuple[str, ...]:
    """Read "png,svg,pdf" as it stands on the command line; what every run writes where None.

    Raises
    ------
    UserError
        There is no such format.
    """
    if text is None:
        return FORMATS
    kinds = tuple(part.strip().lower() for part in text.split(","))
    for kind in kinds:
        if kind not in METADATA:
            raise UserError(f"--format: found {kind!r}; give some of {', '.join(METADATA)}, separated by commas")
    return kinds
