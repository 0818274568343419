"""Where a job's data files come from: the folder of the job file, or bytes that an archive kept."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from pathlib import Path
from typing import Protocol

from spinfit.errors import InputError, nearest
from spinfit.files.raw import load


class Store(Protocol):
    """Hands out the bytes of files by the names that a job writes.

    `taken` holds the bytes of every file handed out so far, by name.
    """

    taken: dict[str, bytes]

    def load(self, written: str) -> tuple[bytes, str, str]:
        """Return a file's bytes, their SHA-256, and what to call the file in errors.

        Raises
        ------
        InputError
            When there is no such file, or it cannot be read.
        """
        ...


class Folder:
    """Files on the disk; names are relative to one folder."""

    def __init__(self, folder: str | Path) -> None:
        self.folder = Path(folder)
        self.taken: dict[str, bytes] = {}

    def load(self, written: str) -> tuple[bytes, str, str]:
        """See `Store.load`."""
        path = self.folder / written
        content, sha256 = load(path)
        self.taken[written] = content
        return content, sha256, str(path)


class Kept:
    """Files in memory.  A name is looked up and nothing else: it never becomes a path."""

    def __init__(self, contents: Mapping[str, bytes]) -> None:
        self.contents = contents
        self.taken: dict[str, bytes] = {}

    def load(self, written: str) -> tuple[bytes, str, str]:
        """See `Store.load`."""
        content = self.contents.get(written)
        if content is None:
            raise InputError(f'"{written:.60}" was not kept', nearest(written, self.contents), place="file")
        self.taken[written] = content
        return content, hashlib.sha256(content).hexdigest(), written
