"""The plan of a sweep: everything that decides its results, put together once."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from roa.errors import UserError
from roa.kernel.integration import Integration
from roa.kernel.lanes import code_digest
from roa.kernel.methods import AUTO
from roa.kernel.target import Target
from roa.loop.configuration import LARGEST_SEED, MOST_SAMPLES, Configuration, SweepTable
from roa.loop.equilibrium import Equilibrium
from roa.sweep import designs, fingerprint
from roa.sweep.choice import CONFIGURED, Choice
from roa.sweep.designs import Answers, Design, RoundDesign
from roa.sweep.kept import row_bytes

if TYPE_CHECKING:
    from roa.bound.bounds import Bounds

# A block is work for about a second on a heavy loop, which is what a crash may cost: so many accepted steps. Of a
# quick loop it has at most so many starts, worth their file and its syncing, and never so few that lanes run empty
# for much of the time.
BLOCK_STEPS, MOST_STARTS, FEWEST_STARTS = 2**24, 2**17, 2**8
# What a block may take on the disk, bytes.
MOST_BYTES = 64e6
# Starts at the first look of a sweep with a goal; later looks are powers of two times that, and blocks not larger.
FIRST_LOOK = 2**14
# Of a design that refines in rounds: the rounds are small, and should still keep all workers busy.
ROUND_BLOCK_SIZE = 4096
# Independent replicates of a random design: enough for a spread between them that deserves a confidence interval.
REPLICATES = 16


@dataclass(frozen=True)
class Plan:
    """What is swept, and how.

    Attributes
    ----------
    configuration : Configuration, with the samples and the seed that hold for this run
    equilibrium, bounds, target : what the earlier rooms derived
    samples : number of starts that the design really has
    block_size : starts of a block
    replicates : independent replicates; start i belongs to replicate i mod replicates
    fingerprint : str, hexadecimal
    fingerprint_parts : flat dict of JSON-able values, to name what differs
    integration : Integration
    choice : its method, and why this one
    design : Design or RoundDesign
    looks : numbers of starts, rising, at which `enough` is asked before all are done; of a design that does not refine
    enough : whether the answers so far, bool (m,), suffice; asked after every round but the last. A pure function
    """

    configuration: Configuration
    equilibrium: Equilibrium
    bounds: Bounds
    target: Target
    samples: int
    block_size: int
    replicates: int
    fingerprint: str
    fingerprint_parts: dict[str, Any]
    integration: Integration
    choice: Choice
    design: Design | RoundDesign
    looks: tuple[int, ...] = ()
    enough: Callable[[Answers], bool] | None = None


def integration_of(table: SweepTable, method: str | None = None) -> Integration:
    """Return how the trajectories of a table [sweep] are integrated; `method` is what "auto" stands for there."""
    return Integration(
        method=method or (AUTO if table.method == "auto" else table.method),
        rtol=table.rtol,
        atol=table.atol,
        horizon=table.horizon,
        longest=table.longest,
        escape=table.escape,
    )


def fitting_block_size(steps: float, n: int) -> int:
    """Return the starts of a block: a power of two, so that the last digits of `steps` have no say.

    Parameters
    ----------
    steps : mean of accepted steps a start
    n : number of states
    """
    most = min(BLOCK_STEPS / max(steps, 1.0), MOST_BYTES / row_bytes("all", n), MOST_STARTS)
    return max(int(2 ** math.floor(math.log2(most))), FEWEST_STARTS)


def make_plan(
    configuration: Configuration,
    equilibrium: Equilibrium,
    bounds: Bounds,
    target: Target,
    samples: int | None = None,
    seed: int | None = None,
    block_size: int | None = None,
    steps: float = 0.0,
    choice: Choice | None = None,
) -> Plan:
    """Put a plan together; `samples` and `seed` take the place of the configuration's where they are given.

    A new run has the block size that fits `steps`, the mean of a start in the pilot; a stored run keeps its own.
    `choice` is the integration method where it is not for the configuration alone to say.

    Raises
    ------
    UserError
        `samples` or `seed` is out of range, or there is no such design.
    """
    if samples is not None and not 1 <= samples <= MOST_SAMPLES:
        raise UserError(f"--samples {samples}: must be a whole number from 1 to 2**40")
    if seed is not None and not 0 <= seed <= LARGEST_SEED:
        raise UserError(f"--seed {seed}: must be a whole number from 0 to 2**63 - 1")
    instead = {"samples": samples, "seed": seed}
    given = {key: value for key, value in instead.items() if value is not None}
    table = configuration.sweep.model_copy(update=given)
    configuration = replace(configuration, sweep=table)
    box = configuration.loop.box
    design = designs.make(table.design, box, table.seed, REPLICATES, table.samples, equilibrium.x)
    if design.in_rounds and table.store == "outcomes":
        raise UserError(
            f'{configuration.source}: [sweep] store = "outcomes": a start of design = "{table.design}" does not follow '
            'from its index alone; use store = "all"'
        )
    fitting = fitting_block_size(steps, configuration.loop.n)
    largest = ROUND_BLOCK_SIZE if design.in_rounds else FIRST_LOOK if table.goal is not None else fitting
    block_size = block_size or min(largest, fitting)
    integration = integration_of(table) if choice is None else integration_of(table, choice.method)
    parts = {
        **fingerprint.configuration_parts(configuration.resolved()),
        **{f"design.{key}": value for key, value in design.parts.items()},
        **fingerprint.target_parts(target),
        "method": integration.method,
        "step_cap": integration.step_cap,
        "block_size": block_size,
        "kernel": code_digest(configuration.loop, target, integration),
        **fingerprint.version_parts(),
    }
    return Plan(
        configuration=configuration,
        equilibrium=equilibrium,
        bounds=bounds,
        target=target,
        samples=design.samples,
        block_size=block_size,
        replicates=design.replicates,
        fingerprint=fingerprint.digest(parts),
        fingerprint_parts=parts,
        integration=integration,
        choice=choice or Choice(integration.method, CONFIGURED),
        design=design,
    )
