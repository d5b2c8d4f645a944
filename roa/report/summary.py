"""The text summary on standard output: plain text of 80 columns that leads with the answer."""

from __future__ import annotations

from collections.abc import Sequence
from textwrap import wrap

from roa.report.answer import Verdict, answer, next_steps
from roa.report.findings import (
    attractor_rows,
    audit_sentence,
    bracket_sentence,
    found_starts,
    safe_sentence,
    sensitivity_sentence,
    slack_sentence,
)
from roa.report.tables import bound_rows, outcome_rows

WIDTH = 80


def summary(verdict: Verdict, files: Sequence[str] = (), folder: str = "") -> str:
    """Text of at most 80 columns, but for the name of the folder; every line of numbers says its strength.

    Parameters
    ----------
    verdict : as in `verdict.json`
    files : names of the files that were written, in `folder`
    """
    parts = [
        _paragraph(" ".join(answer(verdict))),
        _paragraph(f"Loop: {verdict['title']}"),
        _bounds(verdict),
        _outcomes(verdict),
        _attractors(verdict),
        _replay(verdict),
        _weak(verdict),
        _audit(verdict),
        _list("What next", next_steps(verdict)),
        _files(files, folder),
        _list("Cautions", verdict["cautions"]),
    ]
    return "\n\n".join(part for part in parts if part) + "\n"


def _bounds(verdict: Verdict) -> str:
    rows = bound_rows(verdict)
    if not rows:
        return ""
    lines = [f"{'Bounds {V ≤ c}':<19}{'level c':>13}{'volume':>12}{'radius':>12}   strength of the level"]
    lines += [f"  {row.name:<17}{row.level:>13}{row.volume:>12}{row.radius:>12}   {row.strength}" for row in rows]
    for bound in verdict["bounds"]:
        if bound.get("inner"):
            words = f"{bound['name']}: what starts in V ≤ {bound['level']:.6g} ends in V ≤ {bound['inner']:.6g}"
            lines += wrap(f"{words} ({bound['strength']})", WIDTH, initial_indent="  ", subsequent_indent="    ")
    if verdict["basin"]:
        lines.append("  Volume and radius in parts of those of the simulated basin (simulated).")
    for sentence in (bracket_sentence(verdict), slack_sentence(verdict), verdict["bounds_note"]):
        lines += _indented(sentence)
    return "\n".join(lines)


def _outcomes(verdict: Verdict) -> str:
    rows = outcome_rows(verdict)
    if not rows:
        return ""
    lines = [f"{'Outcomes':<22}{'starts':>14}{'share':>12}"]
    lines += [f"  {row.word:<20}{row.count:>14}{row.share:>12}   simulated" for row in rows]
    for sentence in (sensitivity_sentence(verdict), safe_sentence(verdict)):
        lines += _indented(sentence)
    return "\n".join(lines)


def _attractors(verdict: Verdict) -> str:
    """What trajectories end at; left out where that is the equilibrium alone."""
    rows = attractor_rows(verdict)
    if not rows:
        return ""
    lines = [f"{'Attractors':<50}{'share':>12}"]
    for row in rows:
        words = wrap(f"{row.name} at {row.place}" if row.place else row.name, 46)
        lines.append(f"  {words[0]:<48}{row.share:>12}   simulated")
        lines += [f"    {more}" for more in words[1:]]
    return "\n".join(lines)


def _weak(verdict: Verdict) -> str:
    """The command that shows the start of lowest V that does not converge."""
    found = found_starts(verdict)
    return f"{found[0].what} (simulated)\n{_command(found[0].replay)}" if verdict.get("weakest") else ""


def _audit(verdict: Verdict) -> str:
    return _paragraph(audit_sentence(verdict))


def _replay(verdict: Verdict) -> str:
    """The command that shows the counterexample again, fit to be copied: broken as a shell allows it."""
    found = verdict["claim"] and verdict["claim"]["counterexample"]
    if not found:
        return ""
    return "See the counterexample again (simulated)\n" + _command(found["replay"])


def _command(command: str) -> str:
    """A command line, broken as a shell allows it."""
    lines = [command] if "'" in command else wrap(command, WIDTH - 6, break_long_words=False, break_on_hyphens=False)
    return "  " + " \\\n    ".join(lines)


def _indented(sentence: str) -> list[str]:
    return wrap(sentence, WIDTH, initial_indent="  ", subsequent_indent="  ")


def _files(files: Sequence[str], folder: str) -> str:
    if not files:
        return ""
    return "\n".join(
        [f"Files in {folder}", *wrap(", ".join(files), WIDTH, initial_indent="  ", subsequent_indent="  ")]
    )


def _list(heading: str, sentences: Sequence[str]) -> str:
    lines = [line for one in sentences for line in wrap(one, WIDTH, initial_indent="  - ", subsequent_indent="    ")]
    return "\n".join([heading, *lines]) if lines else ""


def _paragraph(text: str) -> str:
    return "\n".join(wrap(text, WIDTH))
