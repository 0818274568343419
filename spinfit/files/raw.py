"""What a reader hands on: columns as they stood in the file, with the conditions that the file told."""

from __future__ import annotations

import codecs
import hashlib
import os
import re
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError, on_one_line

Note = tuple[str, str]
MAX_BYTES = 2**30
"""Largest file that is read into memory, bytes."""
MAX_POINTS = 50_000_000
"""Most numbers that are read from one file."""


@dataclass(frozen=True, eq=False)
class RawTrace:
    """A data file, read but not yet interpreted.

    Attributes
    ----------
    columns : ndarray, shape (n, m)
        Numbers as in the file, n lines by m columns, all finite.
    names : tuple of str, length m
        Column names without their units; "" where the file gave none.
    units : tuple of str, length m
        Units as `spinfit.units` spells them where it knows them, otherwise as written; "" where none was given.
    header : dict
        Conditions understood, in internal units: ``frequency`` (MHz), ``temperature`` (K), ``modulation`` (mT),
        ``angle`` (rad), ``microwave``, ``detect``, ``title``.
    sha256 : str
        Of the file's bytes.
    file : str
    notes : tuple of (code, text)
        What the user should be told.
    format : str
        "text", "JCAMP-DX" or "HDF5".
    """

    columns: NDArray[np.float64]
    names: tuple[str, ...]
    units: tuple[str, ...]
    header: dict[str, Any] = field(default_factory=dict)
    sha256: str = ""
    file: str = ""
    notes: tuple[Note, ...] = ()
    format: str = "text"

    def __post_init__(self) -> None:
        """Take out of every text what a terminal would take for a command."""
        set_field = object.__setattr__  # the instance is not yet anybody's
        texts = {key: on_one_line(v) if isinstance(v, str) else v for key, v in self.header.items()}
        set_field(self, "header", texts)
        set_field(self, "names", tuple(map(on_one_line, self.names)))
        set_field(self, "units", tuple(map(on_one_line, self.units)))
        set_field(self, "notes", tuple((code, on_one_line(text)) for code, text in self.notes))


def _whole(path: Path) -> bytes:
    """Return the bytes of a file that nobody changes meanwhile."""
    with open(path, "rb") as stream:
        before = os.fstat(stream.fileno())
        if before.st_size > MAX_BYTES:
            found = f"has {before.st_size:.3g} bytes"
            raise InputError(found, f"a data file has at most {MAX_BYTES:.3g}", file=path)
        content = stream.read(before.st_size + 1)  # one more than there should be, and never without end
        after = os.fstat(stream.fileno())
    if len(content) != before.st_size or (after.st_size, after.st_mtime_ns) != (before.st_size, before.st_mtime_ns):
        raise InputError("was changed while it was read", "wait until the measurement has ended", file=path)
    return content


def load(path: str | Path) -> tuple[bytes, str]:
    """Return a file's bytes and their SHA-256.

    Raises
    ------
    InputError
        For a missing, unreadable, empty or overlarge file, one that somebody is writing, and for a folder.
    """
    try:
        where = Path(path)
        if where.is_dir():
            raise InputError("is a folder", "name a data file in it", file=path)
        if where.exists() and not where.is_file():
            raise InputError("is not a regular file", "name a data file", file=path)
        content = _whole(where)
    except FileNotFoundError as error:
        raise InputError("there is no such file", "check the name and the folder", file=path) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(f"cannot be read ({reason})", "check the name and the permissions", file=path) from error
    if not content.strip(b"\x00 \t\r\n"):
        raise InputError("is empty", "a data file holds at least a field and a signal column", file=path)
    return content, hashlib.sha256(content).hexdigest()


_MARKS = (
    (codecs.BOM_UTF8, "utf-8-sig"),
    (codecs.BOM_UTF32_LE, "utf-32"),  # before UTF-16, whose mark begins it
    (codecs.BOM_UTF16_LE, "utf-16"),
    (codecs.BOM_UTF16_BE, "utf-16"),
)
_CONTROL = re.compile(r"[\x00-\x08\x0e-\x1b\x7f]")


def decode(content: bytes, file: str | Path) -> str:
    """Return a file's text with plain line ends: UTF-8, UTF-16 or Latin-1, with or without a byte-order mark.

    Raises
    ------
    InputError
        When it is not text.
    """
    encoding = next((name for mark, name in _MARKS if content.startswith(mark)), None)
    if encoding is None and b"\x00" in content[:1000]:
        # Digits and separators are ASCII: in UTF-16 every second byte of them is zero.
        even, odd = content[0:1000:2].count(0), content[1:1000:2].count(0)
        half = len(content[:1000]) // 2
        encoding = "utf-16-le" if odd > 0.9 * half and not even else "utf-16-be" if even > 0.9 * half else None
    try:
        text = content.decode(encoding or "utf-8")
    except UnicodeDecodeError:
        text = content.decode("latin-1") if encoding is None else "\x00"
    if _CONTROL.search(text):
        raise InputError("is neither text nor a format known here", "give delimited text, JCAMP-DX or HDF5", file=file)
    return text.replace("\r\n", "\n").replace("\r", "\n")


def quote(text: object, limit: int = 40) -> str:
    """Quote what stood in a file, on one line and short."""
    line = " ".join("".join(c if c.isprintable() else " " for c in str(text)).split())
    return f'"{line}"' if len(line) <= limit else f'"{line[: limit - 3]}..."'
