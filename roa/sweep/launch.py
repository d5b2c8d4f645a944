"""Launch a sweep: find what is finished, run what is missing, merge.

Resuming is launching again: the blocks that exist are skipped. Nothing here decides a result; that is a pure function
of the plan and the index.
"""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import replace

from roa.errors import Interrupted, MachineError, UserError
from roa.kernel.lanes import compile_lanes
from roa.sweep import store
from roa.sweep.block import Block, blocks_of
from roa.sweep.crew import Crew
from roa.sweep.finished import Finished, look_through
from roa.sweep.header import Header
from roa.sweep.kept import row_bytes
from roa.sweep.means import Means
from roa.sweep.plan import Plan
from roa.sweep.progress import Both, Log, Progress
from roa.sweep.run_folder import RunFolder, write_atomically
from roa.sweep.simulation import Simulation
from roa.sweep.standing import Standing
from roa.sweep.stop import StopRequest, stop_on_signals


def launch(plan: Plan, folder: RunFolder, means: Means | None = None, progress: Progress | None = None) -> bool:
    """Sweep what is missing in the folder, then merge; afterwards `sweep.h5` holds all samples of the plan.

    Parameters
    ----------
    plan : Plan
    folder : RunFolder, new or with an earlier part of the same sweep in it
    means : Means
    progress : Progress

    Returns
    -------
    bool
        False where the granted time ran out before all blocks were finished; what is finished is stored.

    Raises
    ------
    UserError
        The folder holds a sweep with other results, or another process writes to it.
    Interrupted
        A signal asked to stop; what is finished is stored.
    MachineError
        The disk is full or damaged, or a block fails whenever it is tried.
    """
    means = means or Means()
    progress = Both(progress or Progress(), Log(folder.log))
    with ExitStack() as stack:
        stop = stack.enter_context(stop_on_signals(means.deadline))
        stack.enter_context(_one_sentence(folder))
        stack.enter_context(folder.locked())
        header = _begin(plan, folder)
        finished = look_through(folder, header, progress.say)
        standing = Standing(folder.status, finished.tally, plan.samples, means.command)
        stack.enter_context(standing)
        progress = Both(progress, standing)
        missing = [block for block in blocks_of(plan.samples, plan.block_size) if not finished.holds(block)]
        if missing:
            _require_space(plan, folder, missing)
            if not _sweep(plan, finished, missing, means, stop, progress):
                standing.ends("stopped")
                return False
            finished = replace(finished, separate=finished.separate | set(missing))
        if finished.merged_count < plan.samples:
            progress.say(f"merging {plan.samples:,} samples")
            standing.enters("merging")
            store.write_samples(folder.sweep, header, _all_columns(finished, stop))
            progress.say(f"{folder.sweep} is written")
        _remove_blocks(finished)
        if stop.signalled:
            raise _interrupted(folder)
        standing.ends("done")
    return True


@contextmanager
def _one_sentence(folder: RunFolder) -> Iterator[None]:
    """Turn what the system refuses, wherever in a launch, into a sentence."""
    try:
        yield
    except OSError as error:
        raise MachineError(f"{folder.path}: {error}; carry on with `{folder.resume_command}`") from error


def _begin(plan: Plan, folder: RunFolder) -> Header:
    """Write down what is swept, or see that it is what was begun here."""
    header = Header.of(plan)
    stored = Header.read(folder.plan) if folder.plan.exists() else None
    if stored is not None:
        stored.require_same_results(header, folder.path)
        header = replace(header, created=stored.created, platform=stored.platform)
    text = plan.configuration.text.encode()
    if not folder.config.exists():
        write_atomically(folder.config, text)
    elif folder.config.read_bytes() != text:
        raise UserError(f"{folder.config}: is another configuration than the one to be swept; give another folder")
    if header != stored:
        write_atomically(folder.plan, header.to_json())
    return header


def _require_space(plan: Plan, folder: RunFolder, missing: list[Block]) -> None:
    """Refuse to begin what the disk cannot hold: the missing blocks, and all of the samples merged."""
    row = row_bytes(plan.configuration.sweep.store, plan.configuration.loop.n)
    needed = row * (sum(block.count for block in missing) + plan.samples)
    free = shutil.disk_usage(folder.path).free
    if needed > free:
        raise MachineError(
            f"{folder.path}: the sweep needs {needed / 1e9:.2f} GB of disk, {free / 1e9:.2f} GB are free; "
            f"make room, then `{folder.resume_command}`"
        )


def _sweep(
    plan: Plan, finished: Finished, missing: list[Block], means: Means, stop: StopRequest, progress: Progress
) -> bool:
    """Run the missing blocks and store each as it finishes; return whether all are."""
    folder, starts = finished.folder, sum(block.count for block in missing)
    crew = Crew.of(means, len(missing))
    progress.say(f"{starts:,} starts to run in {len(missing):,} blocks, {crew.words}")
    lanes = compile_lanes(plan.configuration.loop, plan.target, plan.integration)
    progress.begin(plan.samples - starts, plan.samples)
    kept = plan.configuration.sweep.store
    try:
        for block, rows in crew.run(Simulation(plan, lanes), missing, stop, progress.say):
            write_atomically(folder.blocks / block.file_name, store.encode_block(block, plan.fingerprint, rows, kept))
            finished.tally.add(block.first, rows.outcome)
            progress.add(rows.outcome)
            starts -= block.count
    finally:
        progress.end()
    if stop.signalled:
        raise _interrupted(folder)
    if starts and stop.made:
        progress.say(f"the granted time is over; carry on with `{folder.resume_command}`")
        return False
    if crew.failed:
        raise MachineError(
            f"{folder.path}: {failure}; all others are stored: `{folder.resume_command}` tries it again"
            for failure in crew.failed
        )
    return True


def _all_columns(finished: Finished, stop: StopRequest) -> Iterator[tuple[Block, store.Columns]]:
    for block in blocks_of(finished.header.samples, finished.header.block_size):
        if stop.signalled:
            raise _interrupted(finished.folder)
        yield block, finished.columns(block)


def _remove_blocks(finished: Finished) -> None:
    """Remove the files of merged blocks, whole or not; foreign files stay, and the folder with them."""
    folder = finished.folder.blocks
    if not folder.is_dir():
        return
    for block in blocks_of(finished.header.samples, finished.header.block_size):
        (folder / block.file_name).unlink(missing_ok=True)
    if not any(folder.iterdir()):
        folder.rmdir()


def _interrupted(folder: RunFolder) -> Interrupted:
    return Interrupted(f"interrupted; what is finished is stored, carry on with `{folder.resume_command}`")
