"""What the verbs read from the folder of a run and write into it; no mathematics of its own."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

from roa.errors import Interrupted, MachineError, UserError

if TYPE_CHECKING:
    from roa.preparation import Preparation
    from roa.sweep.progress import Progress
    from roa.sweep.run_folder import RunFolder
    from roa.sweep.samples import Samples


def existing(run: str | Path) -> RunFolder:
    """Return the folder of a run that is there."""
    from roa.sweep.run_folder import RunFolder

    return RunFolder.existing(Path(run))


def prepare_again(
    run: str | Path, samples: int | None, progress: Progress | None, with_target: bool = False, jobs: int | None = None
) -> tuple[Preparation, RunFolder]:
    """Prepare a run again from its own folder, with the seed and the samples that it was begun with.

    `with_target`: with its target set too, as it is stored, so that no bound has to be derived again.
    """
    from roa.loop.read import read_text
    from roa.preparation import Preparation
    from roa.sweep.fingerprint import target_of
    from roa.sweep.header import Header

    folder = existing(run)
    header = Header.read(folder.plan)
    configuration = read_text(header.config, str(folder.config))
    quick = header.fingerprint_parts.get("config.bound.search") == []
    target = target_of(header.fingerprint_parts) if with_target else None
    samples = samples or header.samples
    method = header.fingerprint_parts["method"]
    prepared = Preparation(
        configuration, samples, header.seed, progress, target, jobs, header.block_size, quick, method
    )
    return prepared, folder


def samples_of(folder: RunFolder) -> Samples:
    """Open what is stored: all samples of a sweep that is done, else its longest complete prefix."""
    from roa.sweep.finished import open_partial

    samples = open_partial(folder)
    if not samples.n:
        raise Interrupted(
            f"{folder.path}: no block of the sweep is finished yet; carry it on with `{folder.resume_command}`"
        )
    return samples


def write_verdict(folder: RunFolder, verdict: dict[str, Any]) -> None:
    """Write `verdict.json`, whole or not at all."""
    from roa.sweep.run_folder import write_atomically

    write_atomically(folder.verdict, (json.dumps(verdict, indent=1, ensure_ascii=False) + "\n").encode())


def verdict_of(folder: RunFolder) -> dict[str, Any]:
    """Read `verdict.json`."""
    try:
        verdict: dict[str, Any] = json.loads(folder.verdict.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise UserError(
            f"{folder.path}: holds no verdict yet; carry the sweep on with `{folder.resume_command}`"
        ) from None
    except ValueError as error:
        raise MachineError(
            f"{folder.verdict}: is damaged ({error}); `{folder.resume_command}` writes it again"
        ) from None
    return verdict
