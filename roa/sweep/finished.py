"""What of a sweep is finished: the merged samples, and beside them the blocks in files of their own."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np

from roa.errors import MachineError
from roa.kernel.trajectories import Trajectories
from roa.sweep import designs, store
from roa.sweep.block import Block, blocks_of
from roa.sweep.designs import Answers
from roa.sweep.header import Header
from roa.sweep.run_folder import RunFolder
from roa.sweep.samples import Samples, Stretch
from roa.sweep.tally import Tally

# Merged samples that are counted at once.
AT_ONCE = 2**22


@dataclass(frozen=True)
class Finished:
    """Finished work on a sweep.

    Attributes
    ----------
    folder : RunFolder
    header : Header, of the sweep as it shall be
    merged : Samples of `sweep.h5`, perhaps of a smaller sweep that is being extended; None where there is none
    separate : blocks in files of their own, each found whole
    tally : of the outcomes of all of them
    """

    folder: RunFolder
    header: Header
    merged: Samples | None
    separate: frozenset[Block]
    tally: Tally

    @property
    def merged_count(self) -> int:
        """Number of samples in `sweep.h5`."""
        return self.merged.n if self.merged else 0

    @property
    def is_merged(self) -> bool:
        """Whether `sweep.h5` holds the whole sweep; one in rounds may have fewer samples than were asked for."""
        return self.merged is not None and self.merged.attributes["asked"] == self.header.asked

    def holds(self, block: Block) -> bool:
        """Whether nothing of the block is left to do."""
        return block.stop <= self.merged_count or block in self.separate

    def rows(self, block: Block) -> Trajectories:
        """Return the rows of a finished block.

        Raises
        ------
        MachineError
            The store was damaged since it was looked through.
        """
        return store.as_rows(self.columns(block), self.header, block.first)

    def columns(self, block: Block) -> store.Columns:
        """Return the columns of a finished block as they are stored.

        Raises
        ------
        MachineError
            The store was damaged since it was looked through.
        """
        if block.stop <= self.merged_count:
            return store.read_merged(self.folder.sweep, self.header, block.first, block.count)
        path = self.folder.blocks / block.file_name
        columns = store.read_block(path, block, self.header)
        if isinstance(columns, str):
            raise MachineError(f"{path}: {columns}; `{self.folder.resume_command}` computes it again")
        return columns

    def answers(self, blocks: Iterable[Block]) -> Answers:
        """Return of the starts of finished blocks whether they lie in the basin, bool (m,)."""
        return np.concatenate([self.rows(block).in_basin for block in blocks])


def is_done(folder: RunFolder, asked: int | None = None) -> bool:
    """Whether the sweep of a folder is merged and done, with these samples where they are given.

    Raises
    ------
    UserError
        The run has another layout.
    MachineError
        What the folder says of itself is damaged.
    """
    wanted = Header.read(folder.plan).asked
    return asked in (None, wanted) and folder.sweep.exists() and store.read_header(folder.sweep).asked == wanted


def look_through(folder: RunFolder, header: Header, say: Callable[[str], None]) -> Finished:
    """Find what is finished; files in `blocks/` that cannot be used are named to `say` and left where they are.

    Raises
    ------
    MachineError
        `sweep.h5` is damaged or belongs to another run.
    """
    merged = _merged(folder, header)
    wanted = {block.file_name: block for block in _blocks(folder, header)}
    separate = set()
    tally = Tally(header.replicates)
    for first in range(0, merged.n if merged else 0, AT_ONCE):
        count = min(AT_ONCE, merged.n - first if merged else 0)
        tally.add(first, store.read_merged(folder.sweep, header, first, count, ("outcome",))["outcome"])
    for path in sorted(folder.blocks.glob("*")):
        block = wanted.get(path.name)
        if block is None:
            say(f"{path}: is no block of this sweep; ignored")
            continue
        columns = store.read_block(path, block, header)
        if isinstance(columns, str):
            say(f"{path}: {columns}; it counts as not done")
        else:
            separate.add(block)
            skip = min(max((merged.n if merged else 0) - block.first, 0), block.count)
            tally.add(block.first + skip, columns["outcome"][skip:])
    return Finished(folder, header, merged, frozenset(separate), tally)


def _blocks(folder: RunFolder, header: Header) -> Iterator[Block]:
    """Yield the blocks of a sweep in their order; of one in rounds, whose blocks follow from results, those stored."""
    if not designs.load(header.design).in_rounds:
        yield from blocks_of(header.samples, header.block_size)
        return
    for path in sorted(folder.blocks.glob("block-*.h5")):
        block = store.block_of(path)
        if block is not None:
            yield block


def open_partial(folder: RunFolder) -> Samples:
    """Open the longest complete prefix of a sweep that is under way, or all of one that is done.

    Quick blocks end first: what is finished behind a gap is left out, since it is no fair sample.

    Raises
    ------
    MachineError
        The header or `sweep.h5` is damaged.
    """
    header = Header.read(folder.plan)
    finished = look_through(folder, header, say=lambda sentence: None)
    if finished.merged is not None and finished.is_merged:
        return finished.merged
    return Samples(header, list(_prefix(finished)))


def _prefix(finished: Finished) -> Iterator[Stretch]:
    reached = finished.merged_count
    if finished.merged is not None:
        yield Stretch(0, reached, finished.merged.read)
    for block in _blocks(finished.folder, finished.header):
        if block.stop <= reached:
            continue
        if block not in finished.separate or block.first > reached:
            return
        # The first block beyond an extended sweep may hold the last samples of `sweep.h5` once more.
        skip = max(reached - block.first, 0)
        yield Stretch(block.first + skip, block.count - skip, partial(_rows_of, finished, block, skip))
        reached = block.stop


def _rows_of(finished: Finished, block: Block, skip: int, offset: int, count: int) -> Trajectories:
    rows = finished.rows(block)
    wanted = slice(skip + offset, skip + offset + count)
    return Trajectories(**{name: getattr(rows, name)[wanted] for name in store.COLUMNS})


def _merged(folder: RunFolder, header: Header) -> Samples | None:
    path: Path = folder.sweep
    if not path.exists():
        return None
    merged = store.open_samples(path)
    if merged.attributes["fingerprint"] != header.fingerprint:
        raise MachineError(f"{path}: belongs to another run than {folder.plan.name} beside it; move it away")
    return merged
