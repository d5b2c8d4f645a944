"""The plan of a sweep: everything that decides its results, put together once."""

from __future__ import annotations

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
from roa.sweep.designs import Answers, Design, RoundDesign

if TYPE_CHECKING:
    from roa.bound.bounds import Bounds

# Starts of a block. Fewer cost time where lanes run empty at the end of a block (1.1 % at 4096, 0.3 % here); more
# would be lost by a crash and delay a request to stop.
BLOCK_SIZE = 16384
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
    design: Design | RoundDesign
    looks: tuple[int, ...] = ()
    enough: Callable[[Answers], bool] | None = None


def integration_of(table: SweepTable) -> Integration:
    """Return how the trajectories of a table [sweep] are integrated."""
    return Integration(
        method=AUTO if table.method == "auto" else table.method,
        rtol=table.rtol,
        atol=table.atol,
        horizon=table.horizon,
        longest=table.longest,
        escape=table.escape,
    )


def make_plan(
    configuration: Configuration,
    equilibrium: Equilibrium,
    bounds: Bounds,
    target: Target,
    samples: int | None = None,
    seed: int | None = None,
    block_size: int | None = None,
) -> Plan:
    """Put a plan together; `samples` and `seed` take the place of the configuration's where they are given.

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
    block_size = block_size or (ROUND_BLOCK_SIZE if design.in_rounds else BLOCK_SIZE)
    integration = integration_of(table)
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
        design=design,
    )
