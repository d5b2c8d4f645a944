#!/usr/bin/env python3
"""Check a certificate again, with nothing of the tool that wrote it.

    scripts/recheck RUN_OR_VERDICT [--boxes N]

`certificate` in verdict.json says: V = (x - x*)'P(x - x*) about the equilibrium x* falls at every point of
{0 < V <= level}, a set inside the domain, so that all of it converges; or, with `inner`, that V falls on the ring
{inner <= V <= level} under every disturbance, so that all of it ends in {V <= inner}. That is proved here once more,
from the formulas, in the intervals of mpmath: slowly, and in few enough lines to be read. Of the certificate's own
numbers only the statement is believed: the matrix T of the coordinates x = x* + Tz is as good as any, and the
equilibrium is enclosed anew.

Exit codes: 0 checked; 1 not so, or nothing to check; 2 called with something else; 3 not decided within the boxes.
"""

from __future__ import annotations

import ast
import json
import sys
from collections.abc import Sequence
from fractions import Fraction
from pathlib import Path
from typing import Any

from mpmath import iv, matrix, mp

iv.prec = mp.prec = 64
BOXES = 20_000
HALVINGS = 40  # of the cube about the equilibrium
CHECKED, FALSE, MISUSED, UNDECIDED = 0, 1, 2, 3


class NotSo(Exception):
    """What the certificate states is refuted, or cannot be read."""


class Open(Exception):
    """What the certificate states could not be decided."""


# Numbers and intervals


def exact(text: Any) -> Fraction:
    """A number of the certificate: a decimal, a fraction or a hexadecimal float, as text."""
    return Fraction(float.fromhex(text)) if "0x" in str(text) else Fraction(str(text))


def enclosed(value: Any) -> Any:
    """An interval about an exact number."""
    number = value if isinstance(value, Fraction) else exact(value)
    return iv.mpf(number.numerator) / iv.mpf(number.denominator)


def low(x: Any) -> Any:
    """Lower end."""
    return mp.mpf(x.a)


def high(x: Any) -> Any:
    """Upper end."""
    return mp.mpf(x.b)


def size(x: Any) -> Any:
    """Largest absolute value, as an interval of one point."""
    return iv.mpf(max(abs(low(x)), abs(high(x))))


def between(x: Any, y: Any) -> Any:
    """The interval from the lower end of x to the upper end of y."""
    return iv.mpf([low(x), high(y)])


class Jet:
    """A function over a box: value, slopes and curvatures; no curvatures (None) where it may have a kink."""

    def __init__(self, value: Any, slopes: list[Any], curvatures: list[list[Any]] | None) -> None:
        self.value, self.slopes, self.curvatures = value, slopes, curvatures

    @classmethod
    def constant(cls, value: Any, n: int) -> Jet:
        """A number."""
        zero = iv.mpf(0)
        return cls(value, [zero] * n, [[zero] * n for _ in range(n)])

    @classmethod
    def variable(cls, value: Any, i: int, n: int) -> Jet:
        """The i-th side of the box."""
        jet = cls.constant(value, n)
        if n:
            jet.slopes[i] = iv.mpf(1)
        return jet

    def through(self, value: Any, first: Any, second: Any) -> Jet:
        """f of this, by the chain rule."""
        d, h, n = self.slopes, self.curvatures, range(len(self.slopes))
        new = None if h is None else [[second * d[i] * d[j] + first * h[i][j] for j in n] for i in n]
        return Jet(value, [first * slope for slope in d], new)

    def __add__(self, other: Jet) -> Jet:
        g, h = self.curvatures, other.curvatures
        both = g is not None and h is not None
        new = [[a + b for a, b in zip(*rows, strict=True)] for rows in zip(g, h, strict=True)] if both else None  # type: ignore[arg-type]
        return Jet(self.value + other.value, [a + b for a, b in zip(self.slopes, other.slopes, strict=True)], new)

    def __neg__(self) -> Jet:
        return self.through(-self.value, iv.mpf(-1), iv.mpf(0))

    def __sub__(self, other: Jet) -> Jet:
        return self + (-other)

    def __mul__(self, other: Jet) -> Jet:
        if other is self:
            return self.through(self.value**2, 2 * self.value, iv.mpf(2))
        u, v, a, b = self.value, other.value, self.slopes, other.slopes
        g, h, n = self.curvatures, other.curvatures, range(len(a))
        new = None
        if g is not None and h is not None:
            new = [[u * h[i][j] + a[i] * b[j] + a[j] * b[i] + v * g[i][j] for j in n] for i in n]
        return Jet(u * v, [u * b[i] + v * a[i] for i in n], new)

    def __truediv__(self, other: Jet) -> Jet:
        if low(other.value) <= 0 <= high(other.value):
            raise Open("a divisor may be zero")
        inverse = 1 / other.value
        return self * other.through(inverse, -(inverse**2), 2 * inverse**3)


def power(x: Jet, exponent: Fraction) -> Jet:
    """x ** exponent."""
    k = int(exponent)
    if k != exponent:
        raise Open(f"the power {exponent} is not known here")
    if k < 0:
        return Jet.constant(iv.mpf(1), len(x.slopes)) / power(x, Fraction(-k))
    first, second = (k * x.value ** (k - 1) if k else iv.mpf(0)), (k * (k - 1) * x.value ** (k - 2) if k > 1 else 0)
    return x.through(x.value**k, first, iv.mpf(1) * second)


def smaller(x: Jet, y: Jet) -> Jet:
    """min(x, y): one of the two, or where they may cross, what holds for both."""
    if high(x.value) <= low(y.value):
        return x
    if high(y.value) <= low(x.value):
        return y
    value = iv.mpf([min(low(x.value), low(y.value)), min(high(x.value), high(y.value))])
    slopes = [iv.mpf([min(low(a), low(b)), max(high(a), high(b))]) for a, b in zip(x.slopes, y.slopes, strict=True)]
    return Jet(value, slopes, None)


def larger(x: Jet, y: Jet) -> Jet:
    """max(x, y)."""
    return -smaller(-x, -y)


def clipped(x: Jet, lowest: Jet, highest: Jet) -> Jet:
    """clip(x, lowest, highest)."""
    return smaller(larger(x, lowest), highest)


def of_one(name: str, x: Jet) -> Jet:
    """A smooth function of one argument."""
    v = x.value
    if name in ("sin", "cos"):
        sine, cosine = iv.sin(v), iv.cos(v)
        return x.through(sine, cosine, -sine) if name == "sin" else x.through(cosine, -sine, -cosine)
    if name == "tan":
        return of_one("sin", x) / of_one("cos", x)
    if name == "exp":
        return x.through(iv.exp(v), iv.exp(v), iv.exp(v))
    if name == "tanh":  # rising, so that its ends are those of the argument
        t = between(*(1 - 2 / (iv.exp(2 * iv.mpf(end)) + 1) for end in (low(v), high(v))))
        return x.through(t, 1 - t**2, -2 * t * (1 - t**2))
    if name in ("log", "sqrt") and low(v) > 0:
        root = iv.sqrt(v)
        return (
            x.through(iv.log(v), 1 / v, -1 / v**2)
            if name == "log"
            else x.through(root, 1 / (2 * root), -1 / (4 * root * v))
        )
    raise Open(f"{name} is not known here, or not defined in a box")


# Formulas


def evaluate(node: ast.expr, names: dict[str, Jet], n: int) -> Jet:
    """A formula, from Python's syntax tree against a white list; nothing is run as code."""
    match node:
        case ast.Constant(int() | float()):
            raise AssertionError("numbers are read from the text")
        case ast.Name(name) if name in names:
            return names[name]
        case ast.UnaryOp(ast.USub(), operand):
            return -evaluate(operand, names, n)
        case ast.UnaryOp(ast.UAdd(), operand):
            return evaluate(operand, names, n)
        case ast.BinOp(base, ast.Pow(), exponent):
            return power(evaluate(base, names, n), constant(exponent))
        case ast.BinOp(left, operator, right):
            a, b = evaluate(left, names, n), evaluate(right, names, n)
            if ast.dump(left) == ast.dump(right) and isinstance(operator, ast.Mult):
                return a * a
            match operator:
                case ast.Add():
                    return a + b
                case ast.Sub():
                    return a - b
                case ast.Mult():
                    return a * b
                case ast.Div():
                    return a / b
        case ast.Call(ast.Name(name), arguments):
            x = [evaluate(argument, names, n) for argument in arguments]
            match name, x:
                case "min", [a, b]:
                    return smaller(a, b)
                case "max", [a, b]:
                    return larger(a, b)
                case "abs", [a]:
                    return larger(a, -a)
                case "clip", [a, b, c]:
                    return clipped(a, b, c)
                case "deadzone", [a, b]:
                    return a - clipped(a, -b, b)
                case _, [a]:
                    return of_one(name, a)
    raise Open(f"not known here: {ast.unparse(node)}")


def constant(node: ast.expr) -> Fraction:
    """An exponent."""
    match node:
        case Exact():
            return node.number
        case ast.UnaryOp(ast.USub(), operand):
            return -constant(operand)
    raise Open("an exponent is no number")


class Exact(ast.Name):
    """A number with its exact value; a name for the evaluation, which looks it up like the others."""

    number: Fraction


class Numbers(ast.NodeTransformer):
    """Puts exact numbers, read from the text and not from Python's floats, in the place of constants."""

    def __init__(self, text: str, known: dict[str, Fraction]) -> None:
        self.text, self.known = text, known

    def visit_Constant(self, node: ast.Constant) -> ast.expr:
        """Read one number."""
        written = self.text[node.col_offset : node.end_col_offset]
        name = f"#{written}"
        self.known[name] = Fraction(written)
        result = Exact(id=name, ctx=ast.Load())
        result.number = self.known[name]
        return result


# The loop


class Loop:
    """The loop of a certificate, in coordinates x = centre + Tz."""

    def __init__(self, certificate: dict[str, Any]) -> None:
        self.states: list[str] = certificate["states"]
        self.n = len(self.states)
        self.known: dict[str, Fraction] = {name: exact(v) for name, v in certificate["parameters"].items()}
        self.varying = {name: tuple(map(exact, ends)) for name, ends in certificate["disturbance"].items()}
        self.signals = [(name, self._read(text)) for name, text in certificate["signals"]]
        self.dynamics = [self._read(text) for text in certificate["dynamics"]]
        self.domain = [tuple(map(exact, ends)) for ends in certificate["domain"]]
        self.T = [[enclosed(entry) for entry in row] for row in certificate["T"]]
        self.P = [[enclosed(entry) for entry in row] for row in certificate["P"]]
        if not self.varying.keys() <= self.known.keys():
            raise NotSo("a disturbance is no parameter")
        if any(self.P[i][j] != self.P[j][i] for i in range(self.n) for j in range(i)):
            raise NotSo("P is not symmetric")
        self.PT = product(self.P, self.T)
        self.form = product(transposed(self.T), self.PT)
        self.centre = [enclosed(x) for x in certificate["centre"]]

    def _read(self, text: str) -> ast.expr:
        tree = ast.parse(text, mode="eval").body
        return Numbers(text, self.known).visit(tree)  # type: ignore[no-any-return]

    def rates(self, x: list[Jet], shares: Sequence[Any]) -> list[Jet]:
        """f at jets of the state, with every disturbance at a share of its interval."""
        n = len(x[0].slopes)
        names = {name: Jet.constant(enclosed(value), n) for name, value in self.known.items()}
        for k, (name, (least, most)) in enumerate(self.varying.items()):
            share = Jet.variable(shares[k], self.n + k, n)
            names[name] = Jet.constant(enclosed(least), n) + share * Jet.constant(enclosed(most - least), n)
        names |= dict(zip(self.states, x, strict=True))
        for name, tree in self.signals:
            names[name] = evaluate(tree, names, n)
        return [evaluate(tree, names, n) for tree in self.dynamics]

    def at(self, box: Sequence[Any], n: int) -> list[Jet]:
        """Jets of x over a box of z and shares; n = 0 for values alone."""
        z = [Jet.variable(box[i], i, n) for i in range(self.n)]
        return [
            sum((Jet.constant(self.T[i][j], n) * z[j] for j in range(self.n)), Jet.constant(self.centre[i], n))
            for i in range(self.n)
        ]

    def value_and_fall(self, box: Sequence[Any], n: int) -> tuple[Jet, Jet]:
        """V and V̇ over a box of z and shares."""
        z = [Jet.variable(box[i], i, n) for i in range(self.n)]
        zero, N = Jet.constant(iv.mpf(0), n), range(self.n)
        value = sum(
            (Jet.constant((1 if i == j else 2) * self.form[i][j], n) * (z[i] * z[j]) for i in N for j in range(i + 1)),
            zero,
        )
        f = self.rates(self.at(box, n), box[self.n :])
        half = [sum((Jet.constant(self.PT[i][j], n) * z[j] for j in N), zero) for i in N]
        return value, Jet.constant(iv.mpf(2), n) * sum((half[i] * f[i] for i in N), zero)


def product(a: list[list[Any]], b: list[list[Any]]) -> list[list[Any]]:
    """Matrix product."""
    return [
        [sum((p * q for p, q in zip(row, column, strict=True)), iv.mpf(0)) for column in zip(*b, strict=True)]
        for row in a
    ]


def transposed(a: list[list[Any]]) -> list[list[Any]]:
    """Transpose."""
    return [list(row) for row in zip(*a, strict=True)]


# The argument, step by step


def enclose_equilibrium(loop: Loop) -> None:
    """Replace the centre by a box that holds exactly one equilibrium (Krawczyk's test), smaller and smaller."""
    N = range(loop.n)
    nominal = [enclosed((loop.known[name] - least) / (most - least)) for name, (least, most) in loop.varying.items()]
    radius = [iv.mpf([-1, 1]) * enclosed((most - least) / 10**9) for least, most in loop.domain]
    box = [loop.centre[i] + radius[i] for i in N]
    for round_ in range(6):
        middle = [iv.mpf(mp.mpf(x.mid)) for x in box]
        at = loop.rates([Jet.variable(middle[i], i, loop.n + len(nominal)) for i in N], nominal)
        over = loop.rates([Jet.variable(box[i], i, loop.n + len(nominal)) for i in N], nominal)
        C = matrix([[mp.mpf(at[i].slopes[j].mid) for j in N] for i in N]) ** -1
        new = []
        for i in N:
            x = middle[i] - sum((iv.mpf(C[i, j]) * at[j].value for j in N), iv.mpf(0))
            for j in N:
                rest = (1 if i == j else 0) - sum((iv.mpf(C[i, k]) * over[k].slopes[j] for k in N), iv.mpf(0))
                x += rest * (box[j] - middle[j])
            new.append(x)
        if round_ == 0 and not all(low(b) < low(x) and high(x) < high(b) for b, x in zip(box, new, strict=True)):
            raise Open("the equilibrium could not be enclosed")
        box = [iv.mpf([max(low(b), low(x)), min(high(b), high(x))]) for b, x in zip(box, new, strict=True)]
    loop.centre = box


def reach_of(loop: Loop, level: Any) -> Any:
    """Half-width of a cube of z that holds {V <= level}, which is shown to lie inside the domain."""
    N = range(loop.n)
    rows = (loop.form[i][i] - sum((size(loop.form[i][j]) for j in N if j != i), iv.mpf(0)) for i in N)
    smallest = min(map(low, rows))  # of the eigenvalues, by Gershgorin's circles
    if not smallest > 0:
        raise Open("V could not be shown to be positive definite")
    reach = iv.mpf(high(iv.sqrt(level / iv.mpf(smallest))))
    for i, (least, most) in enumerate(loop.domain):
        extent = reach * iv.sqrt(sum((size(entry) ** 2 for entry in loop.T[i]), iv.mpf(0)))
        inside = (
            low(loop.centre[i] - extent - enclosed(least)) > 0 and high(loop.centre[i] + extent - enclosed(most)) < 0
        )
        if not inside:
            raise NotSo("the set leaves the domain, or its rounding does")
    return reach


def cell_of(loop: Loop, reach: Any) -> Any:
    """Half-width of a cube about z = 0 on which V̇ < 0 but at zero: V̇ = 2z'(T'P J)z there, J the slopes of f."""
    N, width = range(loop.n), low(reach)
    for _ in range(HALVINGS):
        box = [iv.mpf([-width, width]) for _ in N]
        try:
            f = loop.rates(loop.at(box, loop.n), [])
        except Open:
            width /= 2
            continue
        M = product(transposed(loop.PT), [f[i].slopes for i in N])
        S = [[M[i][j] + M[j][i] for j in N] for i in N]
        if all(high(S[i][i] + sum((size(S[i][j]) for j in N if j != i), iv.mpf(0))) < 0 for i in N):
            return width
        width /= 2
    raise Open("V̇ < 0 could not be shown next to the equilibrium")


def falls(loop: Loop, box: list[Any], inner: Any, level: Any, cell: Any) -> tuple[bool, int]:
    """Whether V̇ < 0, V > level or V < inner all over a box; and the side to halve if not."""
    try:
        value, fall = loop.value_and_fall(box, 0)
        if low(value.value) > high(level) or high(value.value) < low(inner) or high(fall.value) < 0:
            return True, 0
        n = len(box)
        middle = [iv.mpf(mp.mpf(x.mid)) for x in box]
        at = loop.value_and_fall(middle, n)
        outside = any(abs(mp.mpf(m.a)) > cell for m in middle[: loop.n])
        within = low(at[0].value) >= high(inner) and high(at[0].value) <= low(level)
        if outside and within and low(at[1].value) >= 0:
            raise NotSo(f"V̇ >= 0 at z = {[float(mp.mpf(x.mid)) for x in box]}")
        over = loop.value_and_fall(box, n)
    except Open:
        return False, max(range(len(box)), key=lambda i: high(box[i]) - low(box[i]))
    radius = [size(x - m) for x, m in zip(box, middle, strict=True)]
    v, w = ([mp.mpf(slope.mid) for slope in jet.slopes] for jet in at)
    square = sum(a * a for a in v)
    along = sum(a * b for a, b in zip(v, w, strict=True)) / square if square else mp.mpf(0)
    edge = level if along >= 0 else inner
    forms = [(iv.mpf(along), iv.mpf(1), edge), (iv.mpf(0), iv.mpf(1), level), (iv.mpf(1), iv.mpf(0), level)]
    spread = [mp.mpf(0)] * n
    for weight, of_fall, end in forms:
        centre, whole = (combined(jets[1], of_fall, jets[0], -weight, weight * end) for jets in (at, over))
        if below_zero(centre, whole, radius):
            return True, 0
        if of_fall == 1 and weight == iv.mpf(along):
            spread = [(high(d) - low(d)) * high(r) for d, r in zip(whole.slopes, radius, strict=True)]
    widest = max(range(n), key=lambda i: high(radius[i]))
    steepest = max(range(n), key=lambda i: spread[i])
    return False, widest if 8 * high(radius[steepest]) < high(radius[widest]) else steepest


def combined(w: Jet, of_w: Any, v: Jet, of_v: Any, constant_: Any) -> Jet:
    """of_w W + of_v V + a constant."""
    n = len(w.slopes)
    return Jet.constant(of_w, n) * w + Jet.constant(of_v, n) * v + Jet.constant(constant_, n)


def below_zero(centre: Jet, whole: Jet, radius: list[Any]) -> bool:
    """Whether a function is below zero over a box, by the mean-value form or Taylor's of second order."""
    N = range(len(radius))
    if high(centre.value + sum((size(whole.slopes[i]) * radius[i] for i in N), iv.mpf(0))) < 0:
        return True
    if whole.curvatures is None or centre.curvatures is None:
        return False
    h = whole.curvatures
    total = centre.value + sum((size(h[i][j]) * radius[i] * radius[j] for i in N for j in range(i)), iv.mpf(0))
    for i in N:
        slope, bend, r = size(centre.slopes[i]), iv.mpf(high(h[i][i])), radius[i]
        if high(bend) >= 0 or low(slope) >= high(-bend * r):  # largest at the end
            total += slope * r + bend * r * r / 2
        else:  # a concave one: below its tangent, and below its top
            total += iv.mpf(min(high(slope * r), high(slope * slope / (-2 * bend))))
    return bool(high(total) < 0)


def check(certificate: dict[str, Any], boxes: int) -> int:
    """Prove the statement of a certificate; return the number of boxes.

    Raises
    ------
    NotSo, Open
    """
    loop = Loop(certificate)
    level = enclosed(certificate["level"])
    inner = iv.mpf(0) if certificate["inner"] is None else enclosed(certificate["inner"])
    if certificate["equilibrium"]:
        enclose_equilibrium(loop)
    elif certificate["inner"] is None:
        raise NotSo("there is no equilibrium to converge to")
    if certificate["inner"] is None and loop.varying:
        raise NotSo("convergence is stated under a disturbance")
    reach = reach_of(loop, level)
    cell = cell_of(loop, reach) if certificate["inner"] is None else mp.mpf(-1)
    waiting = [[iv.mpf([-high(reach), high(reach)])] * loop.n + [iv.mpf([0, 1])] * len(loop.varying)]
    done = 0
    while waiting:
        done += 1
        if done > boxes:
            raise Open(f"{len(waiting)} boxes are left after {boxes}")
        box = waiting.pop()
        if all(-cell <= low(x) and high(x) <= cell for x in box[: loop.n]):
            continue
        dropped, side = falls(loop, box, inner, level, cell)
        if not dropped:
            middle = mp.mpf(box[side].mid)
            if not low(box[side]) < middle < high(box[side]):
                raise Open("a box became too small")
            halves = [low(box[side]), middle], [middle, high(box[side])]
            waiting += [[iv.mpf(half) if i == side else x for i, x in enumerate(box)] for half in halves]
    return done


def main(arguments: list[str]) -> int:
    """Check the certificate of a run folder or a verdict."""
    if not arguments or arguments[0].startswith("-"):
        print(__doc__)
        return FALSE
    path = Path(arguments[0])
    path = path / "verdict.json" if path.is_dir() else path
    try:
        boxes = int(arguments[arguments.index("--boxes") + 1]) if "--boxes" in arguments else BOXES
        certificate = json.loads(path.read_text(encoding="utf-8")).get("certificate")
    except (OSError, ValueError, AttributeError, IndexError) as fault:
        print(
            f"{path}: nothing was checked ({fault}); give the folder of a run or its verdict.json, and a whole number "
            "behind --boxes where that is given",
            file=sys.stderr,
        )
        return MISUSED
    if not certificate:
        print("There is no certificate: nothing that can be checked here was proved.")
        return FALSE
    try:
        done = check(certificate, boxes)
    except (KeyError, ValueError, TypeError, IndexError, SyntaxError) as fault:
        print(f"NOT SO: the certificate cannot be read ({type(fault).__name__}: {fault}).")
        return FALSE
    except NotSo as fault:
        print(f"NOT SO: {fault}.")
        return FALSE
    except Open as fault:
        print(f"Not decided: {fault}.")
        return UNDECIDED
    print(f"Checked with {done} boxes: {certificate['states']}, {certificate['statement']}.")
    return CHECKED


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
