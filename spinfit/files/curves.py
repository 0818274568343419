"""Write a spectrum as delimited text, JCAMP-DX or HDF5; each is read back to the same numbers."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import ArrayLike, NDArray

from spinfit.errors import InputError, on_one_line
from spinfit.files.atomic import write_text
from spinfit.files.hdf5_writing import whole_hdf5

SUFFIXES = (".csv", ".jdx", ".h5")
_UNITS = {"frequency": "MHz", "temperature": "K", "modulation": "mT", "angle": "rad"}


def csv_text(columns: Mapping[str, ArrayLike], header: Mapping[str, Any] | None = None) -> str:
    """Return columns as comma-separated text under their names, each number in the fewest digits that keep it.

    Conditions in `header` become comment lines, which our own reader understands; without them the text is plain
    comma-separated values.
    """
    lines = [f"# {key} {_said(key, value)}" for key, value in (header or {}).items() if value is not None]
    arrays = [np.asarray(values, dtype=float).tolist() for values in columns.values()]
    lines.append(",".join(columns))
    lines.extend(",".join(map(repr, row)) for row in zip(*arrays, strict=True))
    return "\n".join(lines) + "\n"


def _said(key: str, value: Any) -> str:
    """Return a condition with its unit on one line."""
    if isinstance(value, (int, float)):
        return f"{float(value)!r} {_UNITS.get(key, '')}".strip()
    return on_one_line(str(value))


def jcamp_text(field: NDArray[Any], signal: NDArray[Any], names: tuple[str, str], header: Mapping[str, Any]) -> str:
    """Return a spectrum as JCAMP-DX 5.01 in free form (AFFN); pairs when the fields are not evenly spaced."""
    n = len(field)
    even = n > 1 and np.array_equal(np.linspace(field[0], field[-1], n), field)
    lines = [
        f"##TITLE= {_said('title', header.get('title') or names[1])}",
        "##JCAMP-DX= 5.01",
        "##DATA TYPE= EMR SPECTRUM",
        f"##DATA CLASS= {'XYDATA' if even else 'XYPOINTS'}",
        "##ORIGIN= spinfit",
        "##OWNER= public domain",
    ]
    for key, label in (
        ("frequency", ".MICROWAVE FREQUENCY"),
        ("temperature", ".TEMPERATURE"),
        ("modulation", ".MODULATION AMPLITUDE"),
        ("angle", "$ANGLE"),
        ("microwave", "$MICROWAVE"),
        ("detect", "$DETECT"),
    ):
        if header.get(key) is not None:
            lines.append(f"##{label}= {_said(key, header[key])}")
    lines += [
        "##XUNITS= MILLITESLA",
        "##YUNITS= ARBITRARY UNITS",
        "##XFACTOR= 1.0",
        "##YFACTOR= 1.0",
        f"##FIRSTX= {float(field[0])!r}",
        f"##LASTX= {float(field[-1])!r}",
        f"##FIRSTY= {float(signal[0])!r}",
        f"##NPOINTS= {n}",
    ]
    x, y = field.tolist(), signal.tolist()
    if even:
        lines.insert(-1, f"##DELTAX= {(x[-1] - x[0]) / (n - 1)!r}")
        lines.append("##XYDATA= (X++(Y..Y))")
        # At most 80 characters a line, as the standard wants: three numbers of up to 24 and their blanks.
        lines += [" ".join(map(repr, [x[i], *y[i : i + 2]])) for i in range(0, n, 2)]
    else:
        lines.append("##XYPOINTS= (XY..XY)")
        lines += [f"{a!r}, {b!r}" for a, b in zip(x, y, strict=True)]
    return "\n".join([*lines, "##END="]) + "\n"


def write_nxdata(group: h5py.Group, field: ArrayLike, signals: Mapping[str, ArrayLike], *, axis: str = "field") -> None:
    """Fill an HDF5 group as NXdata: the first of `signals` is what a generic viewer plots, against the field in mT."""
    names = list(signals)
    group.attrs["NX_class"] = "NXdata"
    group.attrs["signal"] = names[0]
    group.attrs["axes"] = axis
    if len(names) > 1:
        group.attrs["auxiliary_signals"] = names[1:]
    data = group.create_dataset(axis, data=np.asarray(field, dtype=float), track_times=False)
    data.attrs["units"] = "mT"
    for name, values in signals.items():
        group.create_dataset(name, data=np.asarray(values, dtype=float), track_times=False)


def _write_hdf5(
    path: str | Path, field: NDArray[Any], signal: NDArray[Any], names: tuple[str, str], header: Mapping[str, Any]
) -> None:
    """Write one NXentry with one NXdata, and the conditions beside it."""
    with whole_hdf5(path) as (root, _):
        root.attrs["default"] = "spectrum"
        entry = root.create_group("spectrum")
        entry.attrs["NX_class"] = "NXentry"
        entry.attrs["default"] = "data"
        write_nxdata(entry.create_group("data"), field, {names[1]: signal}, axis=names[0])
        for key, value in header.items():
            if value is None:
                continue
            kept = on_one_line(value) if isinstance(value, str) else value
            item = entry.create_dataset(key, data=kept, track_times=False)
            if key in _UNITS:
                item.attrs["units"] = _UNITS[key]


def write_spectrum(
    path: str | Path,
    field: ArrayLike,
    signal: ArrayLike,
    names: tuple[str, str] | None = None,
    header: Mapping[str, Any] | None = None,
) -> None:
    """Write a spectrum whole or not at all; the suffix chooses the format.

    Parameters
    ----------
    path : str or Path
        Ends in .csv, .jdx or .h5.
    field, signal : array, shape (n,)
        Field in mT.
    names : (str, str), optional
        Columns; ``("field_mT", "signal")`` by default (HDF5: "field" with units "mT").
    header : mapping, optional
        Conditions in internal units, as in `spinfit.files.raw.RawTrace.header`.

    Raises
    ------
    InputError
        For an unknown suffix, and when the place cannot be written to.
    """
    suffix = Path(path).suffix.lower()
    x, y = np.asarray(field, dtype=float), np.asarray(signal, dtype=float)
    if x.shape != y.shape or x.ndim != 1 or not len(x) or not (np.isfinite(x).all() and np.isfinite(y).all()):
        raise ValueError(f"field {x.shape} and signal {y.shape} must be finite and of one length")
    header = header or {}
    if suffix == ".csv":
        write_text(path, csv_text(dict(zip(names or ("field_mT", "signal"), (x, y), strict=True)), header))
    elif suffix == ".jdx":
        write_text(path, jcamp_text(x, y, names or ("field", "signal"), header))
    elif suffix == ".h5":
        _write_hdf5(path, x, y, names or ("field", "signal"), header)
    else:
        raise InputError(f'"{suffix}" is not a format to write', "end the name in " + ", ".join(SUFFIXES), file=path)
