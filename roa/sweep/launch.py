"""Launch a sweep: find what is finished, run what is missing, merge.

Resuming is launching again: the blocks that exist are skipped. Nothing here decides a result; that is a pure function
of the plan and the index.
"""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace

import numpy as np

from roa.errors import Interrupted, MachineError, UserError
from roa.kernel.lanes import Lanes, compile_lanes
from roa.kernel.trajectories import Trajectories
from roa.sweep import executors, store
from roa.sweep.block import Block, Drawn, simulate
from roa.sweep.executors import attempt
from roa.sweep.finished import Finished, look_through
from roa.sweep.header import Header
from roa.sweep.plan import Plan
from roa.sweep.progress import Both, Log, Progress
from roa.sweep.rounds import Course
from roa.sweep.run_folder import RunFolder, write_atomically
from roa.sweep.stop import StopRequest, stop_on_signals

NO_ANSWERS = np.empty(0, np.bool_)


def launch(plan: Plan, folder: RunFolder, jobs: int | None = None, progress: Progress | None = None) -> None:
    """Sweep what is missing in the folder, then merge; afterwards `sweep.h5` holds all samples of the plan.

    Parameters
    ----------
    plan : Plan
    folder : RunFolder, new or with an earlier part of the same sweep in it
    jobs : workers, >= 1; None for as many as this process may use processors
    progress : Progress

    Raises
    ------
    UserError
        The folder holds a sweep with other results, or another process writes to it.
    Interrupted
        A signal asked to stop; what is finished is stored.
    MachineError
        The disk is full or damaged, or a block fails whenever it is tried.
    """
    if jobs is not None and jobs < 1:
        raise UserError(f"--jobs {jobs}: must be at least 1")
    progress = Both(progress or Progress(), Log(folder.log))
    with stop_on_signals() as stop, _one_sentence(folder), folder.locked():
        header = _begin(plan, folder)
        finished = look_through(folder, header, progress.say)
        course = Course(plan)
        work = _Work(plan, folder, jobs, stop, progress)
        now = course.first()
        while now is not None:
            missing = [block for block in now.blocks if not finished.holds(block)]
            if missing:
                work.sweep(now.drawn, missing, finished.merged_count)
                finished = replace(finished, separate=finished.separate | set(missing))
            now = course.after(finished.answers(now.blocks) if course.needs_answers else NO_ANSWERS)
        work.end()
        count = course.blocks[-1].stop
        if finished.merged_count < count:
            progress.say(f"merging {count:,} samples")
            store.write_samples(folder.sweep, replace(header, samples=count), _all_rows(finished, course.blocks, stop))
            progress.say(f"{folder.sweep} is written")
        _remove_blocks(folder, course.blocks)


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


def _processors() -> int:
    from roa.sweep.executors.threads import cpu_count

    return cpu_count()


class _Work:
    """Runs blocks and stores each as it finishes; what all rounds share is made at the first."""

    def __init__(self, plan: Plan, folder: RunFolder, jobs: int | None, stop: StopRequest, progress: Progress) -> None:
        self._plan, self._folder, self._stop, self._progress = plan, folder, stop, progress
        self._jobs = jobs
        self._lanes: Lanes | None = None

    def sweep(self, drawn: Drawn, missing: list[Block], merged: int) -> None:
        """Run the missing blocks of a round; `merged` samples of the sweep are in `sweep.h5` already."""
        plan, stop = self._plan, self._stop
        jobs = min(self._jobs or _processors(), len(missing))
        lanes = self._lanes or self._begin(missing, merged, jobs)
        self._lanes = lanes
        failed = []
        run = executors.load("serial" if jobs == 1 else "threads")
        for block, result in run(lambda block: _unless(stop, block, drawn, lanes), _until(stop, missing), jobs):
            if isinstance(result, Exception):
                failed.append(block)
            elif result is not None:
                _store(block, result, plan, self._folder, self._progress)
        for block in failed if not stop.made else []:
            _retry(block, plan, drawn, lanes, self._folder, self._progress)
        if stop.made:
            self._progress.end()
            raise _interrupted(self._folder)

    def _begin(self, missing: list[Block], merged: int, jobs: int) -> Lanes:
        """See to space and machine code, and say what is to be done; later rounds are not known yet."""
        plan = self._plan
        in_rounds = plan.design.in_rounds or plan.enough is not None
        starts = plan.samples - merged if in_rounds else sum(block.count for block in missing)
        _require_space(plan, self._folder, starts)
        if in_rounds:
            self._progress.say(
                f"at most {starts:,} starts to run, in rounds that follow from the results of earlier ones"
            )
        else:
            self._progress.say(f"{starts:,} starts to run in {len(missing):,} blocks, {jobs} at a time")
        lanes = compile_lanes(plan.configuration.loop, plan.target, plan.integration)
        self._progress.begin(plan.samples - starts, plan.samples)
        return lanes

    def end(self) -> None:
        """Say that the rounds are over, if anything was run."""
        if self._lanes is not None:
            self._progress.end()


def _require_space(plan: Plan, folder: RunFolder, starts: int) -> None:
    """Refuse to begin what the disk cannot hold: the missing starts in blocks, and all of the samples merged."""
    row = 8 * (3 * plan.configuration.loop.n + 1) + 6
    needed = row * (starts + plan.samples)
    free = shutil.disk_usage(folder.path).free
    if needed > free:
        raise MachineError(
            f"{folder.path}: the sweep needs {needed / 1e9:.2f} GB of disk, {free / 1e9:.2f} GB are free; "
            f"make room, then `{folder.resume_command}`"
        )


def _until(stop: StopRequest, blocks: list[Block]) -> Iterator[Block]:
    for block in blocks:
        if stop.made:
            return
        yield block


def _unless(stop: StopRequest, block: Block, drawn: Drawn, lanes: Lanes) -> Trajectories | None:
    """Run a block; not one that was handed out before, but had not begun when the stop was asked for."""
    return None if stop.made else simulate(block, drawn, lanes)


def _retry(block: Block, plan: Plan, drawn: Drawn, lanes: Lanes, folder: RunFolder, progress: Progress) -> None:
    """Try a block that failed once more, alone: it may have failed for want of memory."""
    progress.say(f"{block} failed and is tried again alone")
    result = attempt(lambda block: simulate(block, drawn, lanes), block)
    if not isinstance(result, Trajectories):
        progress.end()
        raise MachineError(
            f"{block} failed twice ({type(result).__name__}: {result}); all others are stored: "
            f"`{folder.resume_command}` tries it again"
        )
    _store(block, result, plan, folder, progress)


def _store(block: Block, rows: Trajectories, plan: Plan, folder: RunFolder, progress: Progress) -> None:
    write_atomically(folder.blocks / block.file_name, store.encode_block(block, plan.fingerprint, rows))
    progress.add(rows.outcome)


def _all_rows(finished: Finished, blocks: list[Block], stop: StopRequest) -> Iterator[tuple[Block, Trajectories]]:
    for block in blocks:
        if stop.made:
            raise _interrupted(finished.folder)
        yield block, finished.rows(block)


def _remove_blocks(folder: RunFolder, blocks: list[Block]) -> None:
    """Remove the files of merged blocks, whole or not; foreign files stay, and the folder with them."""
    if not folder.blocks.is_dir():
        return
    for block in blocks:
        (folder.blocks / block.file_name).unlink(missing_ok=True)
    if not any(folder.blocks.iterdir()):
        folder.blocks.rmdir()


def _interrupted(folder: RunFolder) -> Interrupted:
    return Interrupted(f"interrupted; what is finished is stored, carry on with `{folder.resume_command}`")
