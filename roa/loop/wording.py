"""Pieces of the sentences that faults are made of."""

from __future__ import annotations

import json
from collections.abc import Iterable
from difflib import get_close_matches


def hint(word: str, known: Iterable[str]) -> str:
    """Return ' (did you mean "…"?)' with the known word nearest to `word`, or nothing where none is near."""
    candidates = list(known)
    by_lower = {candidate.lower(): candidate for candidate in reversed(candidates)}
    close = get_close_matches(word.lower(), by_lower, n=1, cutoff=0.6)
    return f' (did you mean "{by_lower[close[0]]}"?)' if close else ""


def listed(words: Iterable[str]) -> str:
    """Return the words as they stand in a sentence: a, b, c."""
    return ", ".join(words)


def shortened(text: str, longest: int = 20) -> str:
    """Cut a text to at most `longest` characters, with … for what is left out."""
    return text if len(text) <= longest else text[: longest - 1] + "…"


def quoted(text: str) -> str:
    """Return the text in quotes on one line, line breaks escaped."""
    return json.dumps(text, ensure_ascii=False)


def point_text(states: Iterable[str], units: Iterable[str], x: Iterable[float]) -> str:
    """A state as `tilt = 0.31 rad, rate = -1.2 rad/s`."""
    each = zip(states, units, x, strict=True)
    return ", ".join(f"{name} = {value:.6g} {unit}".rstrip() for name, unit, value in each)
