"""HDF5 data files, read by the NeXus NXdata convention in a guarded child process."""

from __future__ import annotations

from spinfit.files.guard import ask
from spinfit.files.raw import RawTrace


def read_hdf5(content: bytes, file: str, sha256: str = "") -> RawTrace:
    """Read the signal and axis of the file's (default) NXdata group.

    Raises
    ------
    InputError
        With the group or dataset and what was found; also when the HDF5 library crashes or hangs on the file.
    """
    found, arrays = ask("trace", content=content, file=file)
    return RawTrace(
        columns=arrays[0],
        names=tuple(found["names"]),
        units=tuple(found["units"]),
        header=found["header"],
        sha256=sha256,
        file=file,
        notes=tuple((code, text) for code, text in found["notes"]),
        format="HDF5",
    )
