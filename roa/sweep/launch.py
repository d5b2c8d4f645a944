"""Launch a sweep: find what is finished, run what is missing, merge.

Resuming is launching again: the blocks that exist are skipped. Nothing here decides a result; that is a pure function
of the plan and the index.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import replace

import numpy as np

from roa.errors import Interrupted, MachineError, UserError
from roa.kernel.lanes import compile_lanes
from roa.sweep import store
from roa.sweep.block import Block
from roa.sweep.crew import Crew
from roa.sweep.finished import Finished, look_through
from roa.sweep.header import Header
from roa.sweep.means import Means
from roa.sweep.plan import Plan
from roa.sweep.progress import Both, Log, Progress
from roa.sweep.rounds import Course, Drawn
from roa.sweep.run_folder import RunFolder, write_atomically
from roa.sweep.simulation import Simulation
from roa.sweep.space import require_space
from roa.sweep.standing import Standing
from roa.sweep.stop import StopRequest, stop_on_signals

NO_ANSWERS = np.empty(0, np.bool_)


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
        course = Course(plan)
        work = _Work(plan, finished, means, stop, progress)
        now = course.first()
        while now is not None:
            missing = [block for block in now.blocks if not finished.holds(block)]
            if missing:
                if not work.sweep(now.drawn, missing, finished.merged_count):
                    standing.ends("stopped")
                    return False
                finished = replace(finished, separate=finished.separate | set(missing))
            now = course.after(finished.answers(now.blocks) if course.needs_answers else NO_ANSWERS)
        work.end()
        count = course.blocks[-1].stop
        if not finished.is_merged:
            progress.say(f"merging {count:,} samples")
            standing.enters("merging")
            columns = _all_columns(finished, course.blocks, stop)
            store.write_samples(folder.sweep, replace(header, samples=count), columns)
            progress.say(f"{folder.sweep} is written")
        _remove_blocks(folder, course.blocks)
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


class _Work:
    """Runs blocks and stores each as it finishes; what all rounds share is made at the first."""

    def __init__(self, plan: Plan, finished: Finished, means: Means, stop: StopRequest, progress: Progress) -> None:
        self._plan, self._means, self._stop, self._progress = plan, means, stop, progress
        self._folder, self._tally = finished.folder, finished.tally
        self._simulation: Simulation | None = None

    def sweep(self, drawn: Drawn, missing: list[Block], merged: int) -> bool:
        """Run the missing blocks of a round; return whether all are. `merged` samples are in `sweep.h5` already."""
        crew, folder = Crew.of(self._means, len(missing)), self._folder
        simulation = self._simulation or self._begin(drawn, missing, merged, crew)
        simulation.drawn = drawn
        left = set(missing)
        try:
            for block, rows in crew.run(simulation, missing, self._stop, self._progress.say):
                content = store.encode_block(block, self._plan.fingerprint, rows, self._plan.configuration.sweep.store)
                folder.require_there()
                write_atomically(folder.blocks / block.file_name, content)
                self._tally.add(block.first, rows.outcome)
                self._progress.add(rows.outcome)
                left.remove(block)
        finally:
            if left:
                self.end()
        if self._stop.signalled:
            self.end()
            raise _interrupted(folder)
        if left and self._stop.made:
            self._progress.say(f"the granted time is over; carry on with `{folder.resume_command}`")
            return False
        if crew.failed:
            raise MachineError(
                f"{folder.path}: {failure}; all others are stored: `{folder.resume_command}` tries it again"
                for failure in crew.failed
            )
        return True

    def _begin(self, drawn: Drawn, missing: list[Block], merged: int, crew: Crew) -> Simulation:
        """See to space and machine code, and say what is to be done; later rounds are not known yet."""
        plan = self._plan
        in_rounds = plan.design.in_rounds or plan.enough is not None
        starts = plan.samples - merged if in_rounds else sum(block.count for block in missing)
        require_space(plan, starts, self._folder.path, self._folder.resume_command)
        if in_rounds:
            self._progress.say(f"at most {starts:,} starts to run, in rounds that follow from the results before them")
        else:
            self._progress.say(f"{starts:,} starts to run in {len(missing):,} blocks, {crew.words}")
        lanes = compile_lanes(plan.configuration.loop, plan.target, plan.integration)
        self._simulation = Simulation(plan, lanes, drawn)
        self._progress.begin(plan.samples - starts, plan.samples)
        return self._simulation

    def end(self) -> None:
        """Say that the rounds are over, if anything was run; once."""
        if self._simulation is not None:
            self._progress.end()
        self._simulation = None


def _all_columns(finished: Finished, blocks: list[Block], stop: StopRequest) -> Iterator[tuple[Block, store.Columns]]:
    for block in blocks:
        if stop.signalled:
            raise _interrupted(finished.folder)
        yield block, finished.columns(block)


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
