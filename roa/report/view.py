"""How the figures look at a run: which pair of states, where the others are held."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.errors import UserError
from roa.loop.model import Loop
from roa.loop.wording import hint, listed

Array = NDArray[np.float64]


@dataclass(frozen=True)
class View:
    """What is asked of the figures beyond the run itself.

    Attributes
    ----------
    pair : indices of the two states that are shown, horizontal first; None where it was not asked for
    held : values of some of the other states, by index; those that are not named stay at the equilibrium
    rising : whether the region with V̇ >= 0 is hatched
    """

    pair: tuple[int, int] | None = None
    held: tuple[tuple[int, float], ...] = ()
    rising: bool = False

    def at(self, equilibrium: Array) -> Array | None:
        """Where the other states are held, float64 (n,); None for the equilibrium."""
        if not self.held:
            return None
        where = equilibrium.copy()
        for k, value in self.held:
            where[k] = value
        return where

    def suffix(self, loop: Loop) -> str:
        """What the names of the files say of the view; empty for the run's own figures."""
        parts = ["-".join(loop.states[k] for k in self.pair)] if self.pair else []
        parts += [f"{loop.states[k]}={value:g}" for k, value in self.held]
        parts += ["rising"] if self.rising else []
        return "".join(f"-{part}" for part in parts)


def read_view(loop: Loop, states: str | None = None, at: str | None = None, rising: bool = False) -> View:
    """Read "a,b" and "state=value,…" as they stand on the command line.

    Raises
    ------
    UserError
        A sentence for each state that does not exist, value that is no number, or slice outside the domain.
    """
    faults: list[str] = []
    pair = None if states is None else _pair(states, loop, faults)
    held = [] if at is None else _held(at, loop, faults)
    for k, _ in held:
        if pair is not None and k in pair:
            faults.append(f"--at: {loop.states[k]} varies in the slice; leave it out, or show another pair by --states")
    if faults:
        raise UserError(faults)
    if held and pair is None and loop.n == 2:
        raise UserError("--at: a loop of two states has none to hold; leave it out")
    return View(pair, tuple(held), rising)


def _pair(text: str, loop: Loop, faults: list[str]) -> tuple[int, int] | None:
    names = [name.strip() for name in text.split(",")]
    unknown = [name for name in names if name not in loop.states]
    faults += [f"--states: {_no_state(name, loop)}" for name in unknown]
    if not unknown and (len(names) != 2 or names[0] == names[1]):
        faults.append(
            f"--states: found {text!r}; give two different states, as in --states {','.join(loop.states[:2])}"
        )
    elif not unknown:
        return loop.states.index(names[0]), loop.states.index(names[1])
    return None


def _held(text: str, loop: Loop, faults: list[str]) -> list[tuple[int, float]]:
    held = []
    for part in text.split(","):
        name, _, number = (piece.strip() for piece in part.partition("="))
        if name not in loop.states:
            faults.append(f"--at: {_no_state(name, loop)}")
            continue
        k = loop.states.index(name)
        try:
            value = float(number)
        except ValueError:
            faults.append(f"--at: found {part.strip()!r}; give a number, as in --at {name}=0.1")
            continue
        low, high = loop.box[k]
        if not low <= value <= high:
            faults.append(f"--at: {name} = {value:g} lies outside the domain; give a number from {low:g} to {high:g}")
        else:
            held.append((k, value))
    return held


def _no_state(name: str, loop: Loop) -> str:
    return f"there is no state {name!r}; the states are {listed(loop.states)}{hint(name, loop.states)}"
