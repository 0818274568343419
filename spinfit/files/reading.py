"""Read a measured trace of any format: by what is in the file, then by its name."""

from __future__ import annotations

import re
from pathlib import Path, PurePath

from spinfit.errors import InputError
from spinfit.files.assembling import Assembled, assemble
from spinfit.files.guard import SIGNATURE
from spinfit.files.hdf5 import read_hdf5
from spinfit.files.jcamp import read_jcamp
from spinfit.files.raw import RawTrace, decode, load
from spinfit.files.text import read_text

__all__ = ["Assembled", "RawTrace", "assemble", "read", "read_content"]

_JCAMP = re.compile(r"(?:\s|\$\$[^\n]*\n)*##\s*[A-Za-z.$][^=\n]*=")


def read(path: str | Path) -> RawTrace:
    """Read a data file: delimited text, JCAMP-DX or HDF5 (NXdata).

    Raises
    ------
    InputError
        One line that names the file, the line or dataset, what was found and what would be right.
    """
    content, sha256 = load(path)
    return read_content(content, str(path), sha256)


def read_content(content: bytes, file: str, sha256: str = "") -> RawTrace:
    """Read the bytes of a data file; `file` is what it is called, in errors and for its suffix.

    Raises
    ------
    InputError
        As `read`.
    """
    suffix = PurePath(file).suffix.lower()
    if SIGNATURE in (content[:8], content[512:520], content[1024:1032], content[2048:2056]):
        return read_hdf5(content, file, sha256)
    if suffix in (".h5", ".hdf5", ".hdf", ".nxs"):
        raise InputError(f"is not HDF5 though its name ends in {suffix}", "check where it comes from", file=file)
    if suffix in (".jdx", ".dx", ".jcm") or _JCAMP.match(decode(content, file)[:10_000]):
        return read_jcamp(content, file, sha256)
    return read_text(content, file, sha256)
