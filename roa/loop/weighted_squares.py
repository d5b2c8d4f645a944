"""-V̇ as a sum of squares with weights, found and checked in exact arithmetic.

Formulas become fractions of polynomials with rational coefficients, in the states and in one letter for each function
of them, under the rules sin² + cos² = 1 and sqrt(u)² = u. A form w_1 s_1² + … + w_k s_k² is read off: from factors that
occur twice, or from a quadratic form in some of the letters by completing squares. It is returned only if it equals
-V̇ by those rules, letter for letter; whether the weights are positive is for a proof by intervals to say.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from decimal import Decimal
from itertools import combinations
from typing import Any

from roa.loop.derivative import NotSmooth, derivative, substituted
from roa.loop.expression import Binary, Call, Compare, Expression, Name, Negate, Number, Power, children
from roa.loop.model import Loop

MOST_LETTERS = 24  # states and functions; beyond this the search for a form takes too long
MOST_IN_A_FORM = 4  # letters of a quadratic form
MOST_PRODUCTS = 20_000  # terms of one polynomial times terms of another
LARGEST_TREE = 4000  # nodes, with signals written out
DISCONTINUOUS = ("sign", "where", "atan2")


@dataclass(frozen=True)
class WeightedSquare:
    """A term weight * root²."""

    weight: Expression
    root: Expression


def decrease_as_squares(loop: Loop, V: Expression) -> tuple[WeightedSquare, ...] | None:
    """Return terms with V̇ = -(their sum) wherever the formulas are defined, or None where no such form was found.

    Parameters
    ----------
    loop : Loop, its dynamics continuous
    V : formula in states and parameters, smooth
    """
    dynamics = written_out(loop)
    if dynamics is None or any(_has_jumps(tree) for tree in (*dynamics, V)):
        return None
    try:
        slopes = [derivative(V, state) for state in loop.states]
    except NotSmooth:
        return None
    letters = _Letters(loop, (*dynamics, *slopes))
    if letters.count > MOST_LETTERS:
        return None
    try:
        fractions = [letters.fraction(tree) for tree in (*slopes, *dynamics)]
    except (ZeroDivisionError, _Opaque):
        return None
    n = loop.n
    fall = -sum((fractions[i] * fractions[n + i] for i in range(n)), letters.zero)
    for reduced in letters.reductions(fall):
        terms = _terms(letters, reduced)
        total = sum((weight * root * root for weight, root in terms), letters.zero)
        if terms and letters.is_zero(total - fall):
            return tuple(WeightedSquare(letters.tree(weight), letters.tree(root)) for weight, root in terms)
    return None


def written_out(loop: Loop) -> tuple[Expression, ...] | None:
    """The dynamics in states and parameters alone, signals written out; None where that grows too large."""
    signals: dict[str, Expression] = {}
    for name, tree in loop.signals.items():
        signals[name] = substituted(tree, signals)
        if _size(signals[name]) > LARGEST_TREE:
            return None
    trees = tuple(substituted(tree, signals) for tree in loop.dynamics)
    return trees if sum(map(_size, trees)) <= LARGEST_TREE else None


class _Opaque(Exception):
    """A part of a formula that has no place in a fraction of polynomials."""


class _Letters:
    """The letters that stand for states and functions, and fractions of polynomials in them."""

    def __init__(self, loop: Loop, trees: tuple[Expression, ...]) -> None:
        from sympy import QQ
        from sympy.polys.fields import field

        self._parameters = {name: parameter.value for name, parameter in loop.parameters.items()}
        self._states = loop.states
        calls: dict[Expression, int] = {}
        for tree in trees:
            for call in _calls(tree):
                calls.setdefault(call, len(loop.states) + len(calls))
        # For each sine its cosine has a letter too, and the other way round, so that one can be put for the other.
        self._trees: list[Expression] = [*map(Name, loop.states), *calls]
        for call in list(calls):
            if isinstance(call, Call) and call.function in ("sin", "cos"):
                other = Call("cos" if call.function == "sin" else "sin", call.arguments)
                if other not in calls:
                    calls[other] = len(self._trees)
                    self._trees.append(other)
        self.count = len(self._trees)
        self._field, *self._generators = field([f"u{i}" for i in range(self.count)], QQ)
        self.zero, self.one = self._field.zero, self._field.one
        self._number = QQ
        self._known: dict[tuple[str, Any], Any] = {}
        self._letter: dict[Expression, Any] = {}
        self._pairs: list[tuple[int, int]] = []  # letters of sine and cosine
        self._roots: list[tuple[int, Any]] = []  # letter of a square root, and what is under it

    def fraction(self, tree: Expression) -> Any:
        """The tree as a fraction of polynomials in the letters.

        Raises
        ------
        ZeroDivisionError, _Opaque
        """
        match tree:
            case Number(value):
                return self._rational(value)
            case Name(name):
                if name in self._parameters:
                    return self._rational(self._parameters[name])
                return self._generators[self._states.index(name)]
            case Negate(operand):
                return -self.fraction(operand)
            case Binary(op, left, right):
                a, b = self._affordable(self.fraction(left), self.fraction(right))
                return a + b if op == "+" else a - b if op == "-" else a * b if op == "*" else a / b
            case Power(base, exponent) if exponent == exponent.to_integral_value():
                whole = self.fraction(base)
                if max(len(whole.numer), len(whole.denom)) ** abs(int(exponent)) > MOST_PRODUCTS:
                    raise _Opaque
                return whole ** int(exponent)
            case Power() | Call():
                return self._function(tree)
        raise _Opaque

    def of(self, polynomial: Any) -> Any:
        """A polynomial as a fraction."""
        return self._field.field_new(polynomial)

    def _affordable(self, a: Any, b: Any) -> tuple[Any, Any]:
        """The two operands, unless an operation on them would grow too large."""
        if max(len(a.numer), len(a.denom)) * max(len(b.numer), len(b.denom)) > MOST_PRODUCTS:
            raise _Opaque
        return a, b

    def _rational(self, value: Decimal) -> Any:
        return self._field.one * self._number(*value.as_integer_ratio())

    def _function(self, tree: Power | Call) -> Any:
        if tree in self._letter:
            return self._letter[tree]
        if isinstance(tree, Power):
            name, arguments = f"**{tree.exponent}", (self.fraction(tree.base),)
            if tree.exponent == Decimal("0.5"):
                name = "sqrt"
        else:
            name, arguments = tree.function, tuple(self.fraction(argument) for argument in tree.arguments)
        # Equal arguments, however they are written, share a letter: sin(a + b) and sin(b + a).
        key = (name, arguments)
        if key not in self._known:
            mirrored = (name, tuple(-argument for argument in arguments))
            if name in ("sin", "cos") and mirrored in self._known:
                self._known[key] = -self._known[mirrored] if name == "sin" else self._known[mirrored]
            else:
                self._known[key] = self._generators[self._trees.index(tree)]
                self._relate(name, arguments)
        self._letter[tree] = self._known[key]
        return self._known[key]

    def _relate(self, name: str, arguments: tuple[Any, ...]) -> None:
        letter = self._index(self._known[name, arguments])
        if name == "sqrt":
            self._roots.append((letter, arguments[0]))
        if name in ("sin", "cos"):
            tree = self._trees[letter]
            assert isinstance(tree, Call)
            partner = self._trees.index(Call("cos" if name == "sin" else "sin", tree.arguments))
            self._known.setdefault(("cos" if name == "sin" else "sin", arguments), self._generators[partner])
            pair = (letter, partner) if name == "sin" else (partner, letter)
            if pair not in self._pairs:
                self._pairs.append(pair)

    def _index(self, letter: Any) -> int:
        return next(i for i, generator in enumerate(self._generators) if generator == letter)

    def reductions(self, fraction: Any) -> Iterator[Any]:
        """The fraction with as little below the line as the rules give: sines put for cosines, or cosines for sines."""
        for which in (0, 1):
            above, below = (self._reduced(part, which) for part in (fraction.numer, fraction.denom))
            if below:
                yield self.of(above) / self.of(below)
            if not self._pairs:
                return

    def is_zero(self, fraction: Any) -> bool:
        """Whether a fraction vanishes by the rules: its numerator has the normal form zero."""
        return not self._reduced(fraction.numer, 0)

    def _reduced(self, polynomial: Any, which: int) -> Any:
        """Normal form: no square of a sine (0) or of a cosine (1), nor of a square root.

        The leading powers of the rules have no letter in common, so that they are a Gröbner basis in which the
        normal form of zero alone is zero, as long as what is under a root holds no later root.
        """
        ring = self._field.ring
        for letter, under in reversed(self._roots):
            if under.denom != ring.one:
                continue
            polynomial = _without_squares(ring, polynomial, letter, under.numer)
        for pair in self._pairs:
            other = ring.gens[pair[1 - which]]
            polynomial = _without_squares(ring, polynomial, pair[which], ring.one - other**2)
        return polynomial

    def tree(self, fraction: Any) -> Expression:
        """A fraction as a formula again."""
        above, below = self._polynomial(fraction.numer), self._polynomial(fraction.denom)
        return above if below == Number(Decimal(1)) else Binary("/", above, below)

    def _polynomial(self, polynomial: Any) -> Expression:
        total: Expression | None = None
        for powers, coefficient in polynomial.terms():
            factors = [_number(int(coefficient.numerator), int(coefficient.denominator))]
            factors += [
                self._trees[i] if power == 1 else Power(self._trees[i], Decimal(int(power)))
                for i, power in enumerate(powers)
                if power
            ]
            term = factors[0] if len(factors) == 1 or factors[0] != Number(Decimal(1)) else factors[1]
            for factor in factors[1 if term is factors[0] else 2 :]:
                term = Binary("*", term, factor)
            total = term if total is None else Binary("+", total, term)
        return total or Number(Decimal(0))


def _without_squares(ring: Any, polynomial: Any, letter: int, square: Any) -> Any:
    """Put a polynomial for the square of a letter, as often as it occurs."""
    result, powers_of_square = ring.zero, [ring.one]
    for powers, coefficient in polynomial.terms():
        half, rest = divmod(powers[letter], 2)
        while len(powers_of_square) <= half:
            powers_of_square.append(powers_of_square[-1] * square)
        monomial = tuple(rest if i == letter else power for i, power in enumerate(powers))
        result += ring({monomial: coefficient}) * powers_of_square[half]
    if any(powers[letter] > 1 for powers, _ in result.terms()):  # the square holds the letter itself
        raise _Opaque
    return result


def _terms(letters: _Letters, fraction: Any) -> list[tuple[Any, Any]]:
    """Weights and roots whose squares make up the fraction; none where no form was seen."""
    if not fraction:
        return []
    return _repeated_factors(letters, fraction) or _completed_squares(letters, fraction)


def _repeated_factors(letters: _Letters, fraction: Any) -> list[tuple[Any, Any]]:
    coefficient, factors = fraction.numer.factor_list()
    one = letters.one
    weight, root = one * coefficient / letters.of(fraction.denom), one
    for factor, power in factors:
        root *= letters.of(factor) ** (power // 2)
        weight *= letters.of(factor) ** (power % 2)
    return [(weight, root)] if root != one else []


def _completed_squares(letters: _Letters, fraction: Any) -> list[tuple[Any, Any]]:
    """A quadratic form in the fewest letters of which every term holds two, as L D L'."""
    polynomial = fraction.numer
    used = [i for i in range(letters.count) if any(powers[i] for powers, _ in polynomial.terms())]
    for size in range(1, MOST_IN_A_FORM + 1):
        for chosen in combinations(used, size):
            if all(sum(powers[i] for i in chosen) == 2 for powers, _ in polynomial.terms()):
                terms = _by_pivots(letters, fraction, chosen)
                if terms:
                    return terms
    return []


def _by_pivots(letters: _Letters, fraction: Any, chosen: tuple[int, ...]) -> list[tuple[Any, Any]]:
    ring = fraction.numer.ring
    size = len(chosen)
    form = [[letters.zero] * size for _ in range(size)]
    for powers, coefficient in fraction.numer.terms():
        pair = [k for k, i in enumerate(chosen) for _ in range(powers[i])]
        rest = tuple(0 if i in chosen else power for i, power in enumerate(powers))
        part = letters.of(ring({rest: coefficient})) / letters.of(fraction.denom)
        i, j = pair
        form[i][j] += part if i == j else part / 2
        if i != j:
            form[j][i] += part / 2
    terms = []
    letter = [letters.of(ring.gens[i]) for i in chosen]
    for k in range(size):
        pivot = form[k][k]
        if not pivot:
            return []
        root = sum((form[k][j] / pivot * letter[j] for j in range(k + 1, size)), letter[k])
        terms.append((pivot, root))
        for i in range(k + 1, size):
            for j in range(k + 1, size):
                form[i][j] -= form[i][k] * form[k][j] / pivot
    return terms


def _number(above: int, below: int) -> Expression:
    """An exact rational as a formula."""
    top = Number(Decimal(above))
    return top if below == 1 else Binary("/", top, Number(Decimal(below)))


def _calls(tree: Expression) -> Iterator[Expression]:
    """Functions and powers with a broken exponent, inner ones first."""
    for child in children(tree):
        yield from _calls(child)
    if isinstance(tree, Call) or (isinstance(tree, Power) and tree.exponent != tree.exponent.to_integral_value()):
        yield tree


def _has_jumps(tree: Expression) -> bool:
    if isinstance(tree, Compare) or (isinstance(tree, Call) and tree.function in DISCONTINUOUS):
        return True
    return any(map(_has_jumps, children(tree)))


def _size(tree: Expression) -> int:
    return 1 + sum(map(_size, children(tree)))
