"""Write beside the place and move there whole: a killed run leaves the old file or the new one."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from spinfit.errors import InputError


def _umask() -> int:
    """Return the process's umask, which can only be read by setting it."""
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _refusal(path: Path, error: OSError) -> InputError:
    """Say in one line why a file cannot be written."""
    reason = error.strerror or str(error)
    if not os.path.isdir(path.parent):
        return InputError(f"there is no folder {path.parent}", "make it first, or write elsewhere", file=path)
    return InputError(f"cannot be written ({reason})", "choose another place", file=path)


@contextmanager
def whole_file(path: str | Path) -> Iterator[Path]:
    """Give a name beside `path` to write to; move it to `path` when the block ends well.

    The temporary file exists (empty) when the block begins, keeps the suffix of `path`, and is removed when the
    block raises; `path` is then left as it was.

    Parameters
    ----------
    path : str or Path
        Where the file is to stand.  A symbolic link is followed, so that the link stays.

    Raises
    ------
    InputError
        When the place cannot be written to, or is a folder.
    """
    try:
        target = Path(os.path.realpath(path))
    except (OSError, ValueError) as error:
        raise InputError(f"cannot be written ({error})", "choose another name", file=path) from error
    if os.path.isdir(target):
        raise InputError("is a folder", "name a file in it", file=path)
    if os.path.exists(target) and not os.path.isfile(target):  # a pipe or device cannot be replaced, only written to
        yield target
        return
    try:
        handle, name = tempfile.mkstemp(prefix=f".{target.stem[:100]}.", suffix=target.suffix, dir=target.parent)
        os.close(handle)
    except OSError as error:
        raise _refusal(target, error) from error
    beside = Path(name)
    try:
        yield beside
        os.chmod(beside, 0o666 & ~_umask())
        with open(beside, "rb") as stream:  # on the disk before the name points to it
            os.fsync(stream.fileno())
        os.replace(beside, target)
    except OSError as error:
        raise _refusal(target, error) from error
    finally:
        with suppress(FileNotFoundError):
            beside.unlink()


def write_text(path: str | Path, text: str) -> None:
    """Write a text as UTF-8 with plain line ends, whole or not at all.

    Raises
    ------
    InputError
        When the place cannot be written to.
    """
    write_bytes(path, text.encode("utf-8"))


def write_bytes(path: str | Path, content: bytes) -> None:
    """Write bytes, whole or not at all.

    Raises
    ------
    InputError
        When the place cannot be written to.
    """
    with whole_file(path) as beside:
        beside.write_bytes(content)
