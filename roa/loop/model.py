"""The closed loop as every later room sees it: names, units, trees and the studied box."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from roa.loop.evaluate import evaluate
from roa.loop.expression import Expression, Lookup, walk
from roa.loop.hold import Hold
from roa.loop.lookup_table import LookupTable
from roa.loop.symbolic import Partials

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Parameter:
    """A constant of the loop: its exact decimal value and its unit (empty where not given)."""

    value: Decimal
    unit: str = ""


@dataclass(frozen=True)
class Loop:
    """A closed loop x' = f(x) with named states, on a box.

    Attributes
    ----------
    title : str
    states, units : tuple of str, length n, in the order of the configuration
    parameters : mapping from name to `Parameter`
    signals : mapping from name to tree; each tree uses states, parameters and earlier signals
    dynamics : tuple of n trees, the time derivative of each state, in state units per second
    domain : n pairs (low, high), exact decimals, state units
    guess : n exact decimals, where Newton starts from
    limits : mapping from state or signal to (low, high), exact decimals: values that must never be left
    tables : mapping from name to look-up table; the trees hold the same objects
    hold : the digital part, or None; f below is then the loop with every signal taken as continuous, which has the
        same equilibria and nothing else in common with the sampled one (`roa.loop.sampled`)
    disturbances : names among the parameters that vary with time anywhere in an interval (low, high); the value of the
        parameter is the nominal one, which is all that is simulated
    """

    title: str
    states: tuple[str, ...]
    units: tuple[str, ...]
    parameters: Mapping[str, Parameter]
    signals: Mapping[str, Expression]
    dynamics: tuple[Expression, ...]
    domain: tuple[tuple[Decimal, Decimal], ...]
    guess: tuple[Decimal, ...]
    limits: Mapping[str, tuple[Decimal, Decimal]] = field(default_factory=dict)
    tables: Mapping[str, LookupTable] = field(default_factory=dict)
    hold: Hold | None = None
    disturbances: Mapping[str, tuple[Decimal, Decimal]] = field(default_factory=dict)

    @property
    def n(self) -> int:
        """Number of states."""
        return len(self.states)

    @cached_property
    def box(self) -> Array:
        """Domain as float64 (n, 2), state units."""
        return np.array([[float(low), float(high)] for low, high in self.domain])

    @property
    def centre(self) -> Array:
        """Centre of the domain, float64 (n,), state units."""
        return (self.box[:, 0] + self.box[:, 1]) / 2

    @property
    def half_widths(self) -> Array:
        """Half-widths of the domain, float64 (n,), state units."""
        return (self.box[:, 1] - self.box[:, 0]) / 2

    @property
    def domain_volume(self) -> float:
        """Volume of the domain, product of the state units."""
        return float(np.prod(self.box[:, 1] - self.box[:, 0]))

    def values_of(self, x: Array, held: Mapping[str, float] | None = None) -> dict[str, Array]:
        """Return every name's value at the points x, float64 (m, n): states, parameters, signals.

        Signals in `held` have the values that a controller gave them, whatever the state is now.
        """
        values: dict[str, Array] = {name: np.asarray(float(p.value)) for name, p in self.parameters.items()}
        values.update({name: x[..., i] for i, name in enumerate(self.states)})
        for name, tree in self.signals.items():
            values[name] = np.asarray(held[name]) if held and name in held else evaluate(tree, values)
        return values

    def rhs(self, x: Array) -> Array:
        """Evaluate f at the points x, float64 (..., n), by numpy: for rays, Newton and figures.

        The sweep does not use it: the kernel generates its own code from the same trees.
        """
        values = self.values_of(x)
        return np.stack([np.broadcast_to(evaluate(tree, values), x.shape[:-1]) for tree in self.dynamics], axis=-1)

    def within_limits(self, x: Array, held: Mapping[str, float] | None = None) -> NDArray[np.bool_]:
        """Whether all limited values are within their limits at the points x, float64 (..., n) -> (...).

        False of a NaN: a value that nobody knows is not within its limits.
        """
        values = self.values_of(x, held)
        inside = np.ones(x.shape[:-1], dtype=bool)
        for name, (low, high) in self.limits.items():
            inside &= (values[name] >= float(low)) & (values[name] <= float(high))
        return inside

    @cached_property
    def refusals(self) -> tuple[Lookup, ...]:
        """The uses of tables that end with their points, each once, in the order in which they are worked out."""
        used = (part for tree in (*self.signals.values(), *self.dynamics) for part in walk(tree))
        return tuple(dict.fromkeys(part for part in used if isinstance(part, Lookup) and part.table.refuses))

    def leaves_tables(self, x: Array) -> NDArray[np.bool_]:
        """Whether some table that ends with its points is left at the points x, float64 (..., n) -> bool (...)."""
        values = self.values_of(x)
        left = np.zeros(x.shape[:-1], dtype=bool)
        for use in self.refusals:
            left = left | use.table.leaves(evaluate(use.argument, values))
        return left

    @cached_property
    def _partials(self) -> Partials:
        return Partials(self.states, tuple(self.parameters), self.signals, self.dynamics)

    def jacobian(self, x: Array) -> Array:
        """Evaluate the exact Jacobian df/dx at the points x, float64 (..., n) -> (..., n, n)."""
        return self._partials.jacobian(self.values_of(x), x.shape[:-1])
