"""The store: finished blocks as small HDF5 files, the merged data as one, and how both are read.

A block's file is made in memory and written by `write_atomically`; the merged file is written aside, read back and
renamed. So a file that exists is complete, and what a broken disk does to one is found by its checksums.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from dataclasses import fields
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from roa.bound.statement import Strength
from roa.errors import MachineError
from roa.kernel.outcomes import Outcome, Reason
from roa.kernel.trajectories import Trajectories
from roa.sweep.block import Block
from roa.sweep.header import Header, require_layout
from roa.sweep.kept import KEPT, completed
from roa.sweep.patient_file import PatientFile
from roa.sweep.run_folder import written_aside
from roa.sweep.samples import Samples, Stretch
from roa.sweep.starts import starts_of

# Growth of a file in memory, bytes: about one block of a loop with two states.
MEMORY_STEP = 2**20
READ_BACK_ROWS = 2**17

# Dataset -> unit and description; the unit None stands for the units of the states.
COLUMNS: dict[str, tuple[str | None, str]] = {
    "initial": (None, "initial condition"),
    "outcome": ("1", "how the trajectory ended"),
    "time": ("s", "time to the decision; for a converged trajectory that of the entry into the target set"),
    "final": (None, "state at that time"),
    "peak": (None, "largest excursion from the equilibrium up to that time, absolute, for each state on its own"),
    "steps": ("1", "accepted steps of the integrator up to that time"),
    "reason": ("1", "why the trajectory failed, or blow_up where it escaped by blowing up"),
}
Columns = Mapping[str, NDArray[Any]]

ENUMS = {
    "outcome": h5py.enum_dtype({outcome.word: outcome.value for outcome in Outcome}, basetype="u1"),
    "reason": h5py.enum_dtype({reason.word: reason.value for reason in Reason}, basetype="u1"),
}
# Fields of the header that are attributes of the file; the others stand in its groups.
ATTRIBUTES = [
    field.name
    for field in fields(Header)
    if field.name not in {"states", "units", "V", "P", "level", "equilibrium", "fingerprint_parts"}
]


def encode_block(block: Block, fingerprint: str, rows: Trajectories, kept: str = "all") -> bytes:
    """Return the content of a block's file: one dataset of records, since each dataset costs half a millisecond."""
    records = _records(rows, KEPT[kept])
    with h5py.File("in memory", "w", driver="core", backing_store=False, block_size=MEMORY_STEP) as file:
        file.create_dataset("rows", data=records)
        file.attrs["fingerprint"] = fingerprint
        file.attrs["first"] = block.first
        file.attrs["count"] = block.count
        file.attrs["checksum"] = _checksum(block, records)
        file.flush()
        image: bytes = file.id.get_file_image()
    return image


def read_block(path: Path, block: Block, header: Header) -> Columns | str:
    """Return a block's columns as they are stored, or in words why its file cannot be used."""
    try:
        with h5py.File(path, "r", locking="best-effort") as file:
            if file.attrs["fingerprint"] != header.fingerprint:
                return "belongs to another run (its fingerprint differs)"
            first, count = int(file.attrs["first"]), int(file.attrs["count"])
            if (first, count) != (block.first, block.count):
                return f"holds {count} starts from {first} on, not the {block.count} of {block}"
            records = file["rows"][()]
            if file.attrs["checksum"] != _checksum(block, records):
                return "is damaged (its checksum is wrong)"
            return {name: np.ascontiguousarray(records[name]) for name in KEPT[header.store]}
    except (OSError, RuntimeError, KeyError, ValueError, TypeError) as error:
        return f"is damaged ({_first_line(error)})"


def block_of(path: Path) -> Block | None:
    """Return which block a file says that it holds; None where it says nothing of the kind."""
    try:
        with h5py.File(path, "r", locking="best-effort") as file:
            block = Block(int(path.stem.rpartition("-")[2]), int(file.attrs["first"]), int(file.attrs["count"]))
    except (OSError, RuntimeError, KeyError, ValueError, TypeError):
        return None
    return block if block.file_name == path.name else None


def write_samples(path: Path, header: Header, blocks: Iterable[tuple[Block, Columns]]) -> None:
    """Write `sweep.h5` from the columns of all blocks in their order; one block is in memory at a time.

    Raises
    ------
    MachineError
        The disk is full, or what was written cannot be read back.
    """
    with written_aside(path) as aside:
        with _machine_errors(path, "written"), closing(PatientFile(aside)) as below:
            with h5py.File(below, "w") as file:
                _write_header(file, header)
                datasets = _create_columns(file["samples"], header)
                for block, columns in blocks:
                    for name, dataset in datasets.items():
                        dataset[block.first : block.stop] = columns[name]
                    below.require_whole()
            below.require_whole()
        _read_back(aside, path, KEPT[header.store])


def open_samples(path: Path) -> Samples:
    """Open `sweep.h5`.

    Raises
    ------
    MachineError
        The file is absent or damaged.
    """
    header = read_header(path)

    def read(offset: int, count: int) -> Trajectories:
        return as_rows(read_merged(path, header, offset, count), header, offset)

    return Samples(header, [Stretch(0, header.samples, read)])


def read_header(path: Path) -> Header:
    """Return what `sweep.h5` says of itself.

    Raises
    ------
    UserError
        The file has another layout.
    MachineError
        The file is absent or damaged.
    """
    with _machine_errors(path, "read"), h5py.File(path, "r", locking="best-effort") as file:
        require_layout(path, _plain(file.attrs["layout"]), file.attrs["roa_version"])
        P = file["bound/P"][()]
        values: dict[str, Any] = {name: _plain(file.attrs[name]) for name in ATTRIBUTES}
        return Header(
            **values,
            fingerprint_parts=json.loads(file.attrs["fingerprint_parts"]),
            states=list(file["samples"].attrs["states"]),
            units=list(file["samples"].attrs["units"]),
            V=file["bound"].attrs["V"],
            P=P.tolist() if P.size else None,
            level=float(file["bound/level"][()]),
            equilibrium=file["bound/equilibrium"][()].tolist(),
        )


def _write_header(file: h5py.File, header: Header) -> None:
    for name in ATTRIBUTES:
        file.attrs[name] = getattr(header, name)
    file.attrs["fingerprint_parts"] = json.dumps(header.fingerprint_parts, sort_keys=True, ensure_ascii=False)
    samples = file.create_group("samples")
    samples.attrs["states"] = header.states
    samples.attrs["units"] = header.units
    samples.attrs["strength"] = Strength.SIMULATED.value
    bound = file.create_group("bound")
    bound.attrs["V"] = header.V
    for name, data, unit, description in (
        ("P", np.empty((0, 0)) if header.P is None else header.P, "unit of V over the units of row and column",
         "matrix of the Lyapunov function V; empty where V is a formula"),
        ("level", header.level, "unit of V", "largest level of V that is proved; 0 where none is"),
        ("equilibrium", header.equilibrium, header.units, "equilibrium of the loop"),
    ):  # fmt: skip
        _describe(bound.create_dataset(name, data=data, dtype="f8"), unit, description)


def _create_columns(group: h5py.Group, header: Header) -> dict[str, h5py.Dataset]:
    """Create the datasets of the samples; a chunk is one block, so that a chunk is written once and whole.

    Fletcher's checksum costs 15 % of the time. Compression was rejected: shuffle and gzip save 18 % of the size, since
    most of it is the digits of random numbers, and take eight times as long.
    """
    columns = {}
    rows = min(header.block_size, header.samples)
    for name in KEPT[header.store]:
        unit, description = COLUMNS[name]
        width = () if unit else (len(header.states),)
        columns[name] = group.create_dataset(
            name,
            shape=(header.samples, *width),
            chunks=(rows, *width),
            dtype=ENUMS.get(name, "i4" if name == "steps" else "f8"),
            fletcher32=True,
        )
        _describe(columns[name], unit or header.units, description)
    return columns


def _describe(dataset: h5py.Dataset, unit: str | list[str], description: str) -> None:
    dataset.attrs["unit"] = unit
    dataset.attrs["description"] = description


def read_merged(path: Path, header: Header, first: int, count: int, names: Sequence[str] = ()) -> Columns:
    """Return columns of samples first, …, first + count - 1 as they are stored in `sweep.h5`: `names`, or all.

    Raises
    ------
    MachineError
        The file is absent or damaged.
    """
    with _machine_errors(path, "read"), h5py.File(path, "r", locking="best-effort") as file:
        columns = {name: file["samples"][name][first : first + count] for name in names or KEPT[header.store]}
    # The enumerations come with their names in the dtype; later rooms compute with plain bytes.
    return {name: column.view(np.uint8) if name in ENUMS else column for name, column in columns.items()}


def as_rows(columns: Columns, header: Header, first: int) -> Trajectories:
    """Return stored columns as trajectories.

    Starts that are not stored are made again; what else is not is NaN, -1 step, and no reason.
    """
    return completed(columns, lambda: starts_of(header)(first, len(columns["outcome"])))


def _read_back(aside: Path, path: Path, names: Sequence[str]) -> None:
    """Read everything once, so that HDF5 compares every chunk with its checksum."""
    with _machine_errors(path, "read back, mistrust the disk"), h5py.File(aside, "r") as file:
        for name in names:
            column = file["samples"][name]
            for first in range(0, len(column), READ_BACK_ROWS):
                column[first : first + READ_BACK_ROWS]


def _records(rows: Trajectories, names: Sequence[str]) -> NDArray[np.void]:
    """Return these columns of the rows as records, (m,)."""
    columns = {name: getattr(rows, name) for name in names}
    kinds = [(name, column.dtype, column.shape[1:]) for name, column in columns.items()]
    records = np.empty(len(rows), kinds)
    for name, column in columns.items():
        records[name] = column
    return records


def _checksum(block: Block, records: NDArray[np.void]) -> str:
    """Return SHA-256 over the block's place and every byte of its records, hexadecimal."""
    digest = hashlib.sha256(f"{block.first} {block.count}".encode())
    digest.update(records.view(np.uint8).data)
    return digest.hexdigest()


@contextmanager
def _machine_errors(path: Path, verb: str) -> Iterator[None]:
    """Turn what h5py raises into one sentence."""
    try:
        yield
    except (OSError, RuntimeError, KeyError, ValueError, TypeError) as error:
        raise MachineError(f"{path}: cannot be {verb} ({_first_line(error)})") from error


def _first_line(error: Exception) -> str:
    return (str(error.args[-1]) if error.args else type(error).__name__).splitlines()[0]


def _plain(value: Any) -> Any:
    """Return a number of numpy's as one of Python's."""
    return value.item() if isinstance(value, np.generic) else value
