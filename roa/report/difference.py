"""Two runs in one picture: what of the basin one loop has gained over the other, and what it has lost."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, PathPatch
from numpy.typing import NDArray

from roa.errors import UserError
from roa.report import layers
from roa.report.evidence import ONE, Evidence
from roa.report.plane import Plane, Region, converged, outline
from roa.report.style import GAINED, KEPT, LOST, new_figure, title_lines
from roa.report.wording import percent

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Difference:
    """Two runs of loops with the same states, seen in the part of the plane that both domains hold.

    Attributes
    ----------
    first, second : Evidence
    """

    first: Evidence
    second: Evidence

    def __post_init__(self) -> None:
        one, two = self.first.loop, self.second.loop
        if (one.states, one.units) != (two.states, two.units):
            raise UserError(
                f"the runs cannot be drawn together: the states are {_named(self.first)} and "
                f"{_named(self.second)}; give two runs whose states have the same names, units and order"
            )
        low, high = self._ends
        if not np.all(low < high):
            raise UserError("the runs cannot be drawn together: their domains have nothing in common")

    @property
    def _ends(self) -> tuple[Array, Array]:
        one, two = self.first.loop.box, self.second.loop.box
        return np.maximum(one[:, 0], two[:, 0]), np.minimum(one[:, 1], two[:, 1])

    @cached_property
    def plane(self) -> Plane:
        """The plane of the first run's pair within both domains, the other states where the first run holds them."""
        seen = self.first.plane(*self.first.first_pair)
        box = np.column_stack(self._ends)
        return Plane(seen.states, seen.units, box, seen.equilibrium, seen.i, seen.j, seen.at)

    @cached_property
    def regions(self) -> dict[str, Region]:
        """The regions *kept* (of both basins), *lost* (of the first alone) and *gained* (of the second alone)."""
        states = self.plane.lift(self.plane.raster(ONE))
        in_first, in_second = self._first(states), self._second(states)
        rules = {
            "kept": (in_first & in_second, lambda x: self._first(x) & self._second(x)),
            "lost": (in_first & ~in_second, lambda x: self._first(x) & ~self._second(x)),
            "gained": (in_second & ~in_first, lambda x: self._second(x) & ~self._first(x)),
        }
        side = ONE + 1
        return {
            name: outline(self.plane, inside.reshape(side, side), belongs)
            for name, (inside, belongs) in rules.items()
            if inside.any()
        }

    def _first(self, states: Array) -> NDArray[np.bool_]:
        return converged(self.first.simulate(states).outcome)

    def _second(self, states: Array) -> NDArray[np.bool_]:
        return converged(self.second.simulate(states).outcome)


AREAS = {"kept": KEPT, "lost": LOST, "gained": GAINED}


def difference(axes: Axes, found: Difference) -> Axes:
    """Draw what both basins hold, what is lost from the first to the second and what is gained."""
    for name, region in found.regions.items():
        area = AREAS[name]
        look = {"facecolor": area.tone, "edgecolor": area.edge.colour, "hatch": area.hatch, "linewidth": 0.0}
        axes.add_patch(PathPatch(region.fill, zorder=1, **look))
        for edge in region.edges:
            axes.add_line(Line2D(*edge.T, color=area.edge.colour, linewidth=area.edge.width, zorder=2))
    layers.draw_equilibrium(axes, found.plane)
    other = found.second.plane(found.plane.i, found.plane.j)
    if not np.allclose(other.equilibrium, found.plane.equilibrium):
        layers.draw_rests(axes, found.plane, [other.equilibrium])
    return layers.frame(axes, found.plane)


def difference_figure(found: Difference, names: tuple[str, str]) -> Figure:
    """Two basins and their difference, with a legend; `names` are what the runs are called."""
    drawn = new_figure(7.8, 7.2)
    title = f"{title_lines(found.first.title, 84)}\n{names[0]} against {names[1]}"
    if found.plane.others:
        title += " in a slice, the other states at the equilibrium" if found.plane.at is None else " in a slice"
    drawn.suptitle(title, x=0.01, ha="left")
    difference(drawn.subplots(), found)
    words = {
        "kept": "converges in both",
        "lost": f"converges in {names[0]} alone",
        "gained": f"converges in {names[1]} alone",
    }
    entries = [
        Patch(
            facecolor=AREAS[name].tone, edgecolor=AREAS[name].edge.colour, hatch=AREAS[name].hatch,
            label=f"{words[name]}: {percent(region.share, 2)} of what is shown",
        )
        for name, region in found.regions.items()
    ]  # fmt: skip
    if entries:
        drawn.legend(handles=entries, title="simulated", loc="outside lower left", alignment="left")
    return drawn


def _named(evidence: Evidence) -> str:
    loop = evidence.loop
    return ", ".join(f"{name} ({unit})" for name, unit in zip(loop.states, loop.units, strict=True))
