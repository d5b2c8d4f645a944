"""The text summary on standard output: plain text of 80 columns that leads with the answer."""

from __future__ import annotations

from collections.abc import Sequence
from textwrap import wrap

from roa.report.answer import Verdict, answer, next_steps
from roa.report.tables import bound_rows, outcome_rows
from roa.report.wording import number, percent, share_with_interval

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
    lines += [*_bracket(verdict), *_slack(verdict)]
    lines += wrap(verdict["bounds_note"], WIDTH, initial_indent="  ", subsequent_indent="  ")
    return "\n".join(lines)


def _bracket(verdict: Verdict) -> list[str]:
    found = verdict.get("bracket")
    if not found:
        return []
    words = (
        f"Bracket: proved to converge {percent(found['inside']['share'], 2)}, proved not to converge without leaving "
        f"the domain {percent(found['outside']['share'], 2)} (volumes estimated)"
    )
    if found["simulated"] is not None:
        words += (
            f", simulated basin {percent(found['simulated'], 2)} of the domain; the gap is "
            f"{percent(max(found['gap_inside'], 0.0), 2)} inside the simulated edge and "
            f"{percent(max(found['gap_outside'], 0.0), 2)} outside"
        )
    return wrap(f"{words}.", WIDTH, initial_indent="  ", subsequent_indent="  ")


def _slack(verdict: Verdict) -> list[str]:
    found = verdict.get("ladder")
    sentence = found["costs_most"] if found else ""
    return wrap(f"{sentence} (simulated)", WIDTH, initial_indent="  ", subsequent_indent="  ") if sentence else []


def _outcomes(verdict: Verdict) -> str:
    rows = outcome_rows(verdict)
    if not rows:
        return ""
    lines = [f"{'Outcomes':<22}{'starts':>14}{'share':>12}"]
    lines += [f"  {row.word:<20}{row.count:>14}{row.share:>12}   simulated" for row in rows]
    if tried := verdict.get("sensitivity"):
        lines += wrap(
            f"Step-sensitive: of the first {tried['tried']:,} starts a tolerance ten times tighter changes the outcome "
            f"of {tried['changed']:,} (simulated).",
            WIDTH,
            initial_indent="  ",
            subsequent_indent="  ",
        )
    if safe := verdict["basin"].get("safe"):
        share = share_with_interval(
            safe["fraction"], tuple(safe["interval"]), verdict["basin"]["confidence"], "simulated"
        )
        lines += wrap(
            f"Safe, converged within the limits: {share} of the domain, volume {number(safe['volume'])} "
            f"{verdict['basin']['volume_unit']} (simulated).",
            WIDTH,
            initial_indent="  ",
            subsequent_indent="  ",
        )
    return "\n".join(lines)


def _attractors(verdict: Verdict) -> str:
    """What trajectories end at; left out where that is the equilibrium alone."""
    found = verdict.get("attractors") or []
    if len(found) < 2:
        return ""
    lines = [f"{'Attractors':<50}{'share':>12}"]
    for one in found:
        place = "" if one["at"] is None else f" at {', '.join(number(x, 5) for x in one['at'])}"
        words = wrap(f"{one['name']}{place}", 46)
        share = percent(one["share"], 2) if one["interval"] else "–"
        lines.append(f"  {words[0]:<48}{share:>12}   simulated")
        lines += [f"    {more}" for more in words[1:]]
    return "\n".join(lines)


def _weak(verdict: Verdict) -> str:
    """The command that shows the start of lowest V that does not converge."""
    found = verdict.get("weakest")
    if not found:
        return ""
    command: str = found["replay"]
    lines = [command] if "'" in command else wrap(command, WIDTH - 6, break_long_words=False, break_on_hyphens=False)
    return "The start of lowest V that was found not to converge (simulated)\n  " + " \\\n    ".join(lines)


def _audit(verdict: Verdict) -> str:
    found = verdict.get("audit")
    if not found:
        return ""
    differ, starts = len(found["disagreements"]), found["at_random"] + found["near_the_edge"]
    return _paragraph(
        f"Audit: {differ or 'none'} of {starts} stored starts ended otherwise when integrated again, independently "
        "and at tight tolerance (simulated)."
    )


def _replay(verdict: Verdict) -> str:
    """The command that shows the counterexample again, fit to be copied: broken as a shell allows it."""
    found = verdict["claim"] and verdict["claim"]["counterexample"]
    if not found:
        return ""
    command: str = found["replay"]
    lines = [command] if "'" in command else wrap(command, WIDTH - 6, break_long_words=False, break_on_hyphens=False)
    return "See the counterexample again (simulated)\n  " + " \\\n    ".join(lines)


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
