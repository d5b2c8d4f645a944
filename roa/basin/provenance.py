"""Where a verdict comes from: versions, processor, seed, fingerprint, command and time."""

from __future__ import annotations

import platform
from datetime import UTC, datetime
from typing import Any

from roa.sweep.origin import code_state, processor, versions


def provenance(
    command: str, seed: int, samples: int | None = None, jobs: int | None = None, fingerprint: str | None = None
) -> dict[str, Any]:
    """Describe this machine and this call as plain values.

    Parameters
    ----------
    command : str, the command line as it was given
    seed : int, of the design and of every search
    samples, jobs, fingerprint : of the sweep, None where there was none
    """
    return {
        "command": command,
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "seed": seed,
        "samples": samples,
        "jobs": jobs,
        "fingerprint": fingerprint,
        "processor": processor(),
        "platform": platform.platform(),
        "versions": versions(),
        "code": code_state(),
    }
