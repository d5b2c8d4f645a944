"""Validate a Lyapunov bound of a nonlinear closed loop against its simulated basin.

The verbs of the command line as functions: `roa.run("configs/mast.toml")`. Each returns a `Result` and raises
`roa.errors.RoaError` with plain sentences. Nothing heavy is imported before a verb is called.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from roa.verbs import (
        Result,
        bound,
        check,
        evidence,
        init,
        overlay,
        replay,
        report,
        resume,
        run,
        status,
        sweep,
        validate,
    )

__version__ = "0.1.0"
__all__ = [
    "Result", "bound", "check", "evidence", "init", "overlay", "replay", "report", "resume", "run", "status",
    "sweep", "validate",
]  # fmt: skip


def __getattr__(name: str) -> Any:
    if name in __all__:
        from roa import verbs

        return getattr(verbs, name)
    raise AttributeError(f"module 'roa' has no attribute {name!r}")
