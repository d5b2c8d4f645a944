"""A file for HDF5 to write to that never fails while HDF5 holds it.

HDF5 crashes the process when it cannot write what it holds in memory as it closes a file, as on a full disk. So the
first failure is kept here and what follows is dropped; whoever writes asks for the failure, and raises it at the end.
"""

from __future__ import annotations

import os
from contextlib import suppress
from pathlib import Path
from typing import IO


class PatientFile:
    """A new file for reading and writing, with the methods that h5py asks of a file.

    Attributes
    ----------
    failure : the first OSError of a write, None while there is none; the content is worthless where there is one
    """

    def __init__(self, path: Path) -> None:
        self._file: IO[bytes] = path.open("w+b", buffering=0)
        self._size = 0
        self.failure: OSError | None = None

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        """Move to a place; the end is where it would be if every write had succeeded."""
        return self._file.seek(self._size + offset if whence == os.SEEK_END else offset, whence & os.SEEK_CUR)

    def tell(self) -> int:
        """Return the place."""
        return self._file.tell()

    def readinto(self, buffer: memoryview) -> int:
        """Read as much as was asked for; zeros where it was never written."""
        view = memoryview(buffer).cast("B")
        done = 0
        while done < len(view) and (count := self._file.readinto(view[done:])):  # type: ignore[attr-defined]
            done += count
        view[done:] = bytes(len(view) - done)
        return len(view)

    def read(self, count: int) -> bytes:
        """The same for a number of bytes; by this method h5py knows a file."""
        content = bytearray(count)
        self.readinto(memoryview(content))
        return bytes(content)

    def write(self, content: memoryview) -> int:
        """Write all, or keep the failure and drop it."""
        view = memoryview(content).cast("B")
        begun, done = self._file.tell(), 0
        self._size = max(self._size, begun + len(view))
        try:
            while self.failure is None and done < len(view):
                done += self._file.write(view[done:])
        except OSError as error:
            self.failure = error
        return len(view)

    def truncate(self, size: int) -> int:
        """Set the size."""
        self._size = size
        try:
            self._file.truncate(size)
        except OSError as error:
            self.failure = self.failure or error
        return size

    def flush(self) -> None:
        """Do nothing: nothing is held back, and the whole is synced once it is complete."""

    def require_whole(self) -> None:
        """Raise the failure where there is one.

        Raises
        ------
        OSError
            Something could not be written.
        """
        if self.failure is not None:
            raise self.failure

    def close(self) -> None:
        """Close it; a failure of this, too, is a failure of writing."""
        with suppress(OSError):
            self._file.close()
