"""A folder of files that appears whole: written beside its place, then moved there."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Collection, Mapping, Sequence
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from contextlib import suppress
from pathlib import Path

BESIDE = ".spinfit-"
"""How the names of unfinished folders begin."""
# Threads that wait for the disk.
_MOST_WAITING = 32


def sync_folder(folder: Path) -> None:
    """Wait until the names in a folder are on the disk, where the system can do that."""
    with suppress(OSError):  # some systems do not open folders, some file systems do not sync them
        number = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(number)
        finally:
            os.close(number)


def disk_waiters() -> ThreadPoolExecutor:
    """Return threads for `force_folders`, which start when they are needed."""
    return ThreadPoolExecutor(_MOST_WAITING, "spinfit disk")


def force_folders(folders: Sequence[Path], pool: Executor) -> dict[Path, OSError]:
    """Wait until all files of folders, and their names, are on the disk.

    One thread a file waits: the system then writes them out together, which takes little more than a single one.

    Returns
    -------
    dict of folder -> OSError
        What went wrong; a folder that is no longer there is no fault.
    """
    wrong: dict[Path, OSError] = {}
    waits: list[tuple[Path, Future[None]]] = []
    for folder in folders:
        with suppress(FileNotFoundError, NotADirectoryError):
            waits += [(folder, pool.submit(_force, path)) for path in folder.iterdir()]
        waits.append((folder, pool.submit(sync_folder, folder)))
    for folder, wait in waits:
        try:
            wait.result()
        except OSError as error:
            wrong[folder] = error
    return wrong


def _force(path: Path) -> None:
    with suppress(FileNotFoundError, IsADirectoryError):
        number = os.open(path, os.O_RDWR)
        try:
            os.fsync(number)
        finally:
            os.close(number)


def write_folder(
    folder: Path, contents: Mapping[str, bytes], *, stale: Collection[str] = (), force: bool = True
) -> None:
    """Write files into a folder, and wait until they are on the disk.

    That the folder itself has its name is on the disk once the one that it stands in is (`sync_folder`).  A folder that
    is not there yet appears whole under its name.  Into one that is there each file is moved whole, and what else
    stands in it stays, but for `stale`.

    Parameters
    ----------
    contents : mapping of file name -> bytes
    stale : collection of str
        Files that are removed unless they are among `contents`.
    force : bool
        Whether to wait for the disk; without it a new folder is left to `force_folders`.

    Raises
    ------
    OSError
        When there is no room or no permission; no file is then half-written.
    """
    beside = Path(tempfile.mkdtemp(prefix=BESIDE, dir=folder.parent))
    try:
        for name, content in contents.items():
            (beside / name).write_bytes(content)
        is_new = not folder.exists()
        if force or not is_new:  # before they take the place of others
            with disk_waiters() as pool:
                for error in force_folders([beside], pool).values():
                    raise error
        mask = os.umask(0)
        os.umask(mask)
        os.chmod(beside, 0o777 & ~mask)
        if is_new:
            os.rename(beside, folder)
        else:
            for name in contents:
                os.replace(beside / name, folder / name)
            remove_files(folder, set(stale) - set(contents))
            sync_folder(folder)
    finally:
        shutil.rmtree(beside, ignore_errors=True)


def remove_files(folder: Path, names: Collection[str]) -> None:
    """Remove files from a folder where they are, and the folder when nothing is left in it."""
    for name in names:
        with suppress(FileNotFoundError, NotADirectoryError):
            (folder / name).unlink()
    with suppress(OSError):
        folder.rmdir()


def clear_unfinished(folder: Path, names: Collection[str]) -> None:
    """Remove what killed processes left behind in a folder: unfinished folders, and the beginnings of named files."""
    for path in folder.glob(f"{BESIDE}*"):
        shutil.rmtree(path, ignore_errors=True)
    for name in map(Path, names):  # as `spinfit.files.atomic.whole_file` calls them
        for path in folder.glob(f".{name.stem}.*{name.suffix}"):
            with suppress(OSError):
                path.unlink()
