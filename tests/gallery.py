"""Loops with known answers, for the tests of every room.

Exact basins marked "computed independently" can be checked by hand in a line or two; where a source is
named it is given from memory unless it says otherwise.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from roa.loop.configuration import Configuration
from roa.loop.read import read_text


def toml(
    states: Sequence[str],
    dynamics: Sequence[str],
    domain: Sequence[tuple[float, float]],
    *,
    parameters: Mapping[str, float] | None = None,
    signals: Mapping[str, str] | None = None,
    equilibrium: Mapping[str, float] | None = None,
    limits: Mapping[str, tuple[float, float]] | None = None,
    hold: str = "",
    bound: str = "",
    sweep: str = "",
    verdict: str = "",
) -> str:
    """Write a configuration; `hold`, `bound`, `sweep` and `verdict` are lines of those tables.

    Nothing is searched for unless `bound` says so.
    """
    bound += "" if "search" in bound else "\nsearch = []"
    lines = ['title = "a loop of the tests"', "[states]", *(f'{s} = "1"' for s in states)]
    lines += ["[parameters]", *(f"{name} = {value!r}" for name, value in (parameters or {}).items())]
    lines += ["[signals]", *(f'{name} = "{text}"' for name, text in (signals or {}).items())]
    lines += ["[dynamics]", *(f'{s} = "{text}"' for s, text in zip(states, dynamics, strict=True))]
    lines += ["[equilibrium]", *(f"{name} = {value!r}" for name, value in (equilibrium or {}).items())]
    lines += ["[domain]", *(f"{s} = [{low!r}, {high!r}]" for s, (low, high) in zip(states, domain, strict=True))]
    lines += ["[limits]", *(f"{name} = [{low!r}, {high!r}]" for name, (low, high) in (limits or {}).items())]
    lines += ["[hold]", hold] if hold else []
    return "\n".join([*lines, "[bound]", bound, "[sweep]", sweep, "[verdict]", verdict, ""])


def configuration(*arguments: object, **keywords: object) -> Configuration:
    """Read what `toml` writes."""
    return read_text(toml(*arguments, **keywords), "gallery.toml")  # type: ignore[arg-type]


def van_der_pol(**keywords: str) -> Configuration:
    """Reversed Van der Pol loop (Khalil, Nonlinear Systems, 3rd ed. 2002): basin of area 13.722219668."""
    return configuration("xy", ["-y", "x + (x**2 - 1)*y"], [(-3.0, 3.0), (-3.5, 3.5)], **keywords)


def cubic(**keywords: str) -> Configuration:
    """x' = -x + x^3, whose basin is |x| < 1 and whose trajectories have a closed form (computed independently)."""
    return configuration("x", ["-x + x**3"], [(-2.0, 2.0)], **keywords)


def ball(n: int, **keywords: str) -> Configuration:
    """x' = S x - (1 - |x|²) x with S skew, whose basin is the unit ball (computed independently)."""
    states = [f"x{i}" for i in range(n)]
    size = " + ".join(f"{x}**2" for x in states)
    turn = [
        (f"{1 + 0.3 * i}*x{i + 1} " if i + 1 < n else "") + (f"- {1 + 0.3 * (i - 1)}*x{i - 1} " if i else "")
        for i in range(n)
    ]
    dynamics = [f"{turn[i]}- (1 - ({size}))*x{i}" for i in range(n)]
    return configuration(states, dynamics, [(-1.2, 1.2)] * n, **keywords)


def product(**keywords: str) -> Configuration:
    """x1' = -x1 + 2 x1² x2, x2' = -x2: basin x1 x2 < 1 (Hahn; Zubov; Vannelli and Vidyasagar 1985)."""
    return configuration(["x1", "x2"], ["-x1 + 2*x1**2*x2", "-x2"], [(-2.0, 2.0)] * 2, **keywords)


def parabola(**keywords: str) -> Configuration:
    """Equilibria (1, 0) and (-1, 0); the basin of the first is x1 > x2² (computed independently)."""
    return configuration(
        ["x1", "x2"],
        ["z - z**3 - 2*x2**2", "-x2"],
        [(-2.0, 2.0)] * 2,
        signals={"z": "x1 - x2**2"},
        equilibrium={"x1": 1.0},
        **keywords,  # type: ignore[arg-type]
    )


def double_well(**keywords: str) -> Configuration:
    """x'' = -0.25 x' + x - x³: rests at ±1, each with half of a symmetric box (computed independently)."""
    return configuration("xv", ["v", "-0.25*v + x - x**3"], [(-2.0, 2.0)] * 2, equilibrium={"x": 1.0}, **keywords)  # type: ignore[arg-type]


def spring(**keywords: object) -> Configuration:
    """x'' = -x - 0.4 x': overshoots by a closed form; everything converges (computed independently)."""
    return configuration("xv", ["v", "-x - 0.4*v"], [(-1.5, 1.5), (-2.0, 2.0)], **keywords)


def saturated_integrator(a: float = 0.5, k: float = 2.0, **keywords: str) -> Configuration:
    """x' = a x + sat(-k x): basin |x| < 1/a for every k > a (Hu and Lin 2001)."""
    return configuration("x", ["a*x + clip(-k*x, -1, 1)"], [(-3.0, 3.0)], parameters={"a": a, "k": k}, **keywords)  # type: ignore[arg-type]


def capture_point(w: float = 3.0, k: float = 5.0, limit: float = 2.0, **keywords: str) -> Configuration:
    """x1' = x2, x2' = w² x1 - clip(k w (w x1 + x2), ±U): basin |w x1 + x2| < U/w (computed independently)."""
    return configuration(
        ["x1", "x2"],
        ["x2", "w**2*x1 - clip(k*w*(w*x1 + x2), -U, U)"],
        [(-1.0, 1.0)] * 2,
        parameters={"w": w, "k": k, "U": limit},
        **keywords,  # type: ignore[arg-type]
    )


def sampled_saturation(period: float, delay: float = 0.0, **keywords: str) -> Configuration:
    """x' = x + u with u = -sat(3 x) sampled: without delay the basin is |x| < 1 for every period below ln 2, and the
    rest is unstable above it; with a delay of one period it is unstable above ln(4/3) (computed independently)."""
    return configuration(
        "x",
        ["x + u"],
        [(-1.5, 1.5)],
        signals={"u": "clip(-3*x, -1, 1)"},
        hold=f'signals = ["u"]\nperiod = {period!r}\ndelay = {delay!r}',
        **keywords,  # type: ignore[arg-type]
    )


def sampled_double_integrator(period: float, delay: float = 0.0, **keywords: str) -> Configuration:
    """x'' = clip(-x - 1.5 x'), sampled; the position of a thruster-driven carriage."""
    return configuration(
        "xv",
        ["v", "u"],
        [(-3.0, 3.0)] * 2,
        signals={"demand": "-x - 1.5*v", "u": "clip(demand, -1, 1)"},
        hold=f'signals = ["u"]\nperiod = {period!r}\ndelay = {delay!r}',
        **keywords,  # type: ignore[arg-type]
    )


def sampled_pendulum(period: float, delay: float = 0.0, **keywords: str) -> Configuration:
    """The upright pendulum th'' = 4 sin th - 0.3 th' + clip(-10 th - 4 th', -2.5, 2.5) with its torque sampled."""
    return configuration(
        ["angle", "rate"],
        ["rate", "4*sin(angle) - 0.3*rate + torque"],
        [(-1.2, 1.2), (-3.0, 3.0)],
        signals={"demand": "-10*angle - 4*rate", "torque": "clip(demand, -2.5, 2.5)"},
        hold=f'signals = ["torque"]\nperiod = {period!r}\ndelay = {delay!r}',
        **keywords,  # type: ignore[arg-type]
    )
