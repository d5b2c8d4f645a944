"""What every verdict leaves open, and what this one leaves open besides."""

from __future__ import annotations

from roa.basin.goal import goal_of
from roa.basin.size import Basin
from roa.kernel.target import Target
from roa.loop.configuration import Configuration
from roa.loop.equilibrium import Equilibrium

ALWAYS = (
    "A certificate is about the model in the configuration, not about the machine.",
    "Simulation looks at samples and does not prove: a start that was not drawn may end differently.",
    "Every number covers the configured domain, parameters and horizon and says nothing of anything outside them.",
    "Where people can be hurt, this result is one input to a safety case under the local codes and the responsible "
    "licensed engineer.",
)


def cautions(
    configuration: Configuration, equilibrium: Equilibrium, target: Target | None, basin: Basin | None
) -> list[str]:
    """Return the cautions of a verdict, those of every verdict first."""
    varying = _of_the_disturbances(configuration)
    return [*ALWAYS, *varying, *_of_the_loop(equilibrium, target), *_of_the_sweep(configuration, basin)]


def _of_the_disturbances(configuration: Configuration) -> list[str]:
    loop = configuration.loop
    if not loop.disturbances:
        return []
    nominal = ", ".join(f"{name} = {loop.parameters[name].value}" for name in loop.disturbances)
    return [
        f"Disturbances are not simulated: equilibrium and trajectories are those of the nominal {nominal}. What is "
        "said of every disturbance, however it varies, rests on proof alone."
    ]


def _of_the_loop(equilibrium: Equilibrium, target: Target | None) -> list[str]:
    found = []
    if equilibrium.stability == "marginal":
        where = "multiplier on the unit circle" if equilibrium.sampled else "eigenvalue on the imaginary axis"
        found.append(
            f"The linearisation has a{'' if equilibrium.sampled else 'n'} {where}: it gives no certificate, and "
            "convergence is judged by simulation alone."
        )
    if equilibrium.sampled is not None:
        found.append(
            "The loop is sampled: its stability is that of one period, the eigenvalues are those that it would have "
            "with every signal continuous, and nothing that rests on a continuous V̇ is stated."
        )
    if target is not None and target.kind == "ball":
        found.append(f"No target set is proved, so that a trajectory converged means: it entered {target.words}.")
    return found


def _of_the_sweep(configuration: Configuration, basin: Basin | None) -> list[str]:
    if basin is None:
        return []
    found = []
    goal = goal_of(configuration.sweep, basin)
    if goal and not goal["is_reached"]:
        found.append(
            f"The {goal['kind']} asked for in [sweep], {goal['wanted']:g}, is not reached"
            + ("." if goal["reached"] is None else f": it is {goal['reached']:.3g}.")
        )
    if basin.partial:
        found.append(f"The sweep is partial: {basin.samples} samples are what the numbers stand on.")
    open_ends = {word: basin.counts[word] for word in ("unresolved", "failed") if basin.counts[word]}
    if open_ends:
        counted = " and ".join(f"{count} {word}" for word, count in open_ends.items())
        found.append(f"{counted} of {basin.samples} samples are counted as not converging.")
    return found
