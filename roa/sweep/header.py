"""The header of a run: all that its data say of themselves beside the rows.

It is written to `plan.json` before the first block and to the attributes of `sweep.h5` at the end, so that a
sweep can be read, resumed and judged at any moment without the plan that began it.
"""

from __future__ import annotations

import hashlib
import json
import platform
from dataclasses import asdict, dataclass, fields
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from roa import __version__
from roa.bound.lyapunov_function import Quadratic
from roa.errors import MachineError, UserError
from roa.sweep import designs
from roa.sweep.fingerprint import differences
from roa.sweep.plan import Plan

# Version of the layout of sweep.h5, a contract with other people's scripts.
LAYOUT = 1


def require_layout(path: Path, layout: Any, roa_version: Any) -> None:
    """Refuse a file of another layout before anything else of it is taken for what it is not.

    Raises
    ------
    UserError
        It was written by a version of roa with another layout; nothing of it is damaged.
    """
    if layout != LAYOUT:
        raise UserError(
            f"{path}: has layout {layout}, written by roa {roa_version}; roa {__version__} reads layout {LAYOUT}: "
            "use the version that wrote it, or begin a new run"
        )


@dataclass(frozen=True)
class Header:
    """What a run says of itself; every value can stand in JSON and comes back from there the same.

    Attributes
    ----------
    title, config, config_sha256 : the configuration as it was read, and its SHA-256
    roa_version, layout, created, platform : where the data come from
    fingerprint, fingerprint_parts : what changes results
    seed, design, interval, replicates, block_size, samples : how starts are drawn and how many there shall be
    store : "all", or "outcomes" for outcome and time alone
    asked : samples asked for; a sweep in rounds may have ended with fewer, and then `sweep.h5` says fewer in `samples`
    target : what entering the target set means, in words and numbers
    states, units : length n
    V : the Lyapunov function in words, or its formula
    P : n rows of the quadratic V, or None where V is a formula
    level : the largest proved level of V; 0 where none is proved
    equilibrium : length n, state units
    """

    title: str
    roa_version: str
    layout: int
    config: str
    config_sha256: str
    fingerprint: str
    fingerprint_parts: dict[str, Any]
    seed: int
    design: str
    interval: str
    replicates: int
    block_size: int
    samples: int
    store: str
    asked: int
    created: str
    platform: str
    target: str
    states: list[str]
    units: list[str]
    V: str
    P: list[list[float]] | None
    level: float
    equilibrium: list[float]

    @classmethod
    def of(cls, plan: Plan) -> Header:
        """Return the header of a run that begins now."""
        configuration, loop = plan.configuration, plan.configuration.loop
        V, proved = plan.bounds.V, plan.bounds.largest_proved
        return cls(
            title=loop.title,
            roa_version=__version__,
            layout=LAYOUT,
            config=configuration.text,
            config_sha256=hashlib.sha256(configuration.text.encode()).hexdigest(),
            fingerprint=plan.fingerprint,
            fingerprint_parts=plan.fingerprint_parts,
            seed=configuration.sweep.seed,
            design=configuration.sweep.design,
            interval=plan.design.interval,
            replicates=plan.replicates,
            block_size=plan.block_size,
            samples=plan.samples,
            store=configuration.sweep.store,
            asked=plan.configuration.sweep.samples,
            created=datetime.now(UTC).isoformat(timespec="seconds"),
            platform=platform.platform(),
            target=plan.target.words,
            states=list(loop.states),
            units=list(loop.units),
            V="(x - equilibrium)' P (x - equilibrium)" if isinstance(V, Quadratic) else V.text,
            P=V.P.tolist() if isinstance(V, Quadratic) else None,
            level=0.0 if proved is None else proved.level,
            equilibrium=plan.equilibrium.x.tolist(),
        )

    def to_json(self) -> bytes:
        """Return the content of `plan.json`."""
        return (json.dumps(asdict(self), indent=1, ensure_ascii=False) + "\n").encode()

    @classmethod
    def read(cls, path: Path) -> Header:
        """Read `plan.json`.

        Raises
        ------
        UserError
            The run has another layout.
        MachineError
            The file is damaged.
        """
        try:
            stored = json.loads(path.read_bytes())
            require_layout(path, stored["layout"], stored["roa_version"])
            return cls(**{field.name: stored[field.name] for field in fields(cls)})
        except (OSError, ValueError, KeyError, TypeError) as error:
            raise MachineError(f"{path}: is damaged ({error}); this run can be neither read nor resumed") from error

    def require_same_results(self, new: Header, where: Path) -> None:
        """Refuse a run that would not give the same result for the same index, or would have fewer.

        Raises
        ------
        UserError
            One sentence for each key of the fingerprint that differs, old -> new.
        """
        if self.design == new.design and self.samples != new.samples and not designs.load(self.design).extendable:
            raise UserError(
                f"{where}: a {self.design} of {self.samples:,} starts cannot be extended to {new.samples:,}, because "
                'all its points would move; begin a new run, or use design = "sobol"'
            )
        if self.fingerprint != new.fingerprint:
            raise UserError(
                f"{where}: cannot be resumed, its results would differ in {difference}"
                for difference in differences(self.fingerprint_parts, new.fingerprint_parts)
            )
        if new.samples < self.samples:
            raise UserError(
                f"{where}: was begun with {self.samples:,} starts; it can be extended, not shortened to {new.samples:,}"
            )
