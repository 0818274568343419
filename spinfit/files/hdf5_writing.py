"""HDF5 files that appear whole: a full disk is told as such, and never reaches the HDF5 library.

The library cannot close a file that it could not write out: it says so by errors that nobody can catch, and
ends the process with a segmentation fault.  So it writes into an object of ours, which keeps the first error to itself.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import BinaryIO

import h5py

from spinfit.files.atomic import whole_file


class _Kept:
    """A file for the HDF5 library; what found no room is held in memory, so that it reads what it wrote."""

    def __init__(self, stream: BinaryIO) -> None:
        self.stream = stream
        self.error: OSError | None = None
        self.held: list[tuple[int, bytes]] = []
        self.at = self.end = 0

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        self.at = offset + {os.SEEK_SET: 0, os.SEEK_CUR: self.at, os.SEEK_END: self.end}[whence]
        return self.at

    def tell(self) -> int:
        return self.at

    def write(self, content: memoryview) -> int:
        size = len(content)
        if self.error is None:
            try:
                self.stream.seek(self.at)
                left = memoryview(content)
                while left:
                    left = left[self.stream.write(left) :]
            except OSError as error:
                self.error = error
        if self.error is not None:
            self.held.append((self.at, bytes(content)))
        self.at += size
        self.end = max(self.end, self.at)
        return size

    def read(self, size: int = -1) -> bytes:
        """Return what was written; by this h5py also tells a file from a name."""
        left = max(0, self.end - self.at)
        content = bytearray(left if size < 0 else min(size, left))
        self.readinto(memoryview(content))
        return bytes(content)

    def readinto(self, into: memoryview) -> int:
        size = max(0, min(len(into), self.end - self.at))
        self.stream.seek(self.at)
        found = self.stream.read(size)
        into[:size] = found + bytes(size - len(found))
        for place, content in self.held:
            first, last = max(place, self.at), min(place + len(content), self.at + size)
            if first < last:
                into[first - self.at : last - self.at] = content[first - place : last - place]
        self.at += size
        return size

    def truncate(self, size: int) -> int:
        self.end = size
        if self.error is None:
            try:
                self.stream.truncate(size)
            except OSError as error:
                self.error = error
        return size

    def flush(self) -> None:
        """Do nothing: the stream has no buffer of its own."""

    def check(self) -> None:
        """Raise the first error there was."""
        if self.error is not None:
            raise self.error


@contextmanager
def whole_hdf5(path: str | Path) -> Iterator[tuple[h5py.File, Callable[[], None]]]:
    """Give an HDF5 file to fill, which moves to `path` when the block ends well.

    The second of what is given raises when the disk is full already, for those who write much.

    Raises
    ------
    InputError
        When the place cannot be written to, or has no room.
    """
    with whole_file(path) as beside:
        with open(beside, "r+b", buffering=0) as stream:
            kept = _Kept(stream)  # type: ignore[arg-type]  # a raw stream
            with h5py.File(kept, "w") as root:
                yield root, kept.check
            kept.check()
