"""HDF5 by the NeXus NXdata convention: a signal and its axes, named by attributes.

Runs in the child process of `spinfit.files.guard`.  Links that leave the file are refused, and kind and size of a
dataset are checked before anything of it is read.
"""

from __future__ import annotations

from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.files.conditions import is_field, put, tidy_unit
from spinfit.files.hdf5_checks import check_dataset, is_elsewhere, is_small_scalar
from spinfit.files.raw import MAX_POINTS, Note, RawTrace

_MAX_NODES = 2000
_MAX_DEPTH = 8
_CONDITIONS = {
    "frequency": "frequency",
    "microwave_frequency": "frequency",
    "temperature": "temperature",
    "modulation": "modulation",
    "modulation_amplitude": "modulation",
    "angle": "angle",
}


def _text(value: object) -> str:
    """Return an attribute or scalar as text; arrays of one are opened, anything else is ""."""
    if isinstance(value, np.ndarray):
        value = value.flat[0] if value.size == 1 else ""
    if isinstance(value, bytes):
        value = value.decode("utf-8", "replace")
    return value.strip() if isinstance(value, str) else ""


def _texts(value: object) -> list[str]:
    """Return an attribute that lists names: an array of texts, or one text with colons or commas."""
    if isinstance(value, np.ndarray) and value.ndim == 1:
        return [_text(np.asarray(v, dtype=object).item() if not isinstance(v, (str, bytes)) else v) for v in value]
    text = _text(value).strip("[]")
    return [part.strip() for part in text.replace(":", ",").split(",") if part.strip()]


def _number_word(value: object) -> list[str]:
    """Return a number as a word, [] when the value is something else."""
    first = np.ravel(value)[:1] if isinstance(value, (np.ndarray, np.generic)) else np.empty(0)
    return [repr(float(first[0]))] if first.size and first.dtype.kind in "iuf" else []


def _child(group: h5py.Group, name: str, file: str) -> h5py.Group | h5py.Dataset | None:
    """Follow a name inside the file; refuse a link that leaves it."""
    here = group
    for part in name.split("/"):
        if not part:
            continue
        if not isinstance(here, h5py.Group):
            return None
        link = here.get(part, getlink=True)
        if link is None:
            return None
        if isinstance(link, h5py.ExternalLink):
            found = f"{part} is a link to another file"
            raise InputError(found, "copy the data into the file", place=here.name, file=file)
        # A soft link may point through an external one, which only shows once it is followed.
        if isinstance(link, h5py.SoftLink) and _passes_outside(here, link.path):
            found = f"{part} is a link that leaves the file"
            raise InputError(found, "copy the data into the file", place=here.name, file=file)
        here = here.get(part)
        if here is None:
            return None
    return here if isinstance(here, (h5py.Group, h5py.Dataset)) else None


def _passes_outside(group: h5py.Group, path: str, depth: int = 0) -> bool:
    """Whether any step of a soft link's path, followed through further soft links, is an external link."""
    if depth > _MAX_DEPTH:
        return True
    here = group.file["/"] if path.startswith("/") else group
    for part in path.split("/"):
        if part in ("", "."):
            continue
        link = here.get(part, getlink=True) if isinstance(here, h5py.Group) else None
        if isinstance(link, h5py.ExternalLink):
            return True
        if isinstance(link, h5py.SoftLink) and _passes_outside(here, link.path, depth + 1):
            return True
        here = here.get(part) if link is not None else None
        if here is None:
            return False
    return False


def _class(group: h5py.Group) -> str:
    """Return a group's NeXus class."""
    return _text(group.attrs.get("NX_class", ""))


def _walk(group: h5py.Group, file: str) -> list[h5py.Group | h5py.Dataset]:
    """List everything below a group that hard links reach, breadth first, each once, at most `_MAX_NODES`."""
    found: list[h5py.Group | h5py.Dataset] = []
    level, seen = [group], {group.id}
    for _ in range(_MAX_DEPTH):
        below = []
        for parent in level:
            for name in parent:
                if not isinstance(parent.get(name, getlink=True), h5py.HardLink):
                    continue
                node = parent.get(name)
                if not isinstance(node, (h5py.Group, h5py.Dataset)) or node.id in seen:
                    continue
                seen.add(node.id)
                found.append(node)
                if len(found) > _MAX_NODES:
                    raise InputError(f"holds more than {_MAX_NODES} objects", "give one trace a file", file=file)
                if isinstance(node, h5py.Group):
                    below.append(node)
        level = below
    return found


def _find_data(root: h5py.Group, notes: list[Note], file: str) -> h5py.Group:
    """Find the NXdata group: by the `default` attributes from the root, else the first there is."""
    here: h5py.Group = root
    for _ in range(_MAX_DEPTH):
        if _class(here) == "NXdata":
            return here
        name = _text(here.attrs.get("default", ""))
        below = _child(here, name, file) if name else None
        if not isinstance(below, h5py.Group) or below == here:
            break
        here = below
    groups = [node for node in [root, *_walk(root, file)] if isinstance(node, h5py.Group)]
    candidates = [node for node in groups if _class(node) == "NXdata"] or [
        node for node in groups if "signal" in node.attrs or _columns_by_name(node, file)
    ]
    if not candidates:
        right = "mark the group with NX_class = NXdata and attributes signal and axes"
        raise InputError("holds no NXdata group", right, file=file)
    if len(candidates) > 1:
        notes.append(("hdf5_groups", f"the file holds {len(candidates)} data groups; {candidates[0].name} is read"))
    return candidates[0]


def _columns_by_name(group: h5py.Group, file: str) -> tuple[str, str] | None:
    """Return the names of a field and a signal dataset in a group without NeXus attributes."""
    flat = [
        name
        for name in group
        if isinstance(group.get(name, getlink=True), h5py.HardLink)
        and isinstance(group.get(name), h5py.Dataset)
        and (is_elsewhere(group[name]) or group[name].ndim == 1)
    ]
    fields = [name for name in flat if is_field(name.removesuffix("_mT").removesuffix("_G").removesuffix("_T"))]
    others = [name for name in flat if name not in fields]
    return (fields[0], others[0]) if len(fields) == 1 and len(others) == 1 else None


def _read(group: h5py.Group, name: str, file: str) -> tuple[NDArray[np.float64], str]:
    """Return one dataset as a line of numbers, and its unit."""
    data = _child(group, name, file)
    place = f"{group.name.rstrip('/')}/{name}"
    if not isinstance(data, h5py.Dataset):
        raise InputError(
            "there is no such dataset", "name it by the attributes signal and axes", place=place, file=file
        )
    if not is_elsewhere(data) and (data.size or 0) > MAX_POINTS:
        found = f"holds {data.size:.3g} numbers"
        raise InputError(found, f"at most {MAX_POINTS:.3g} are read", place=place, file=file)
    check_dataset(data, place, file)
    if data.dtype.kind not in "iuf":
        raise InputError(f"holds {data.dtype}", "give real numbers", place=place, file=file)
    if sum(n > 1 for n in data.shape) > 1:
        shape = " x ".join(map(str, data.shape))
        raise InputError(f"has shape {shape}", "give one sweep: one number a point", place=place, file=file)
    values = np.asarray(data[()], dtype=np.float64).reshape(-1)
    bad = ~np.isfinite(values)
    if bad.any():
        where = int(np.argmax(bad))
        found = f"{values[where]} at point {where + 1}"
        raise InputError(found, "write finite numbers", place=place, file=file)
    return values, tidy_unit(_text(data.attrs.get("units", "")))


def _signal_and_axis(group: h5py.Group, file: str) -> tuple[str, str]:
    """Return the names of the signal and of its axis."""
    signal = _text(group.attrs.get("signal", ""))
    axes = [axis for axis in _texts(group.attrs.get("axes", "")) if axis != "."]
    if not signal:  # the convention's older form: attributes of the datasets
        for name in group:
            node = group.get(name) if isinstance(group.get(name, getlink=True), h5py.HardLink) else None
            if isinstance(node, h5py.Dataset) and "signal" in node.attrs:
                signal = name
                axes = axes or _texts(node.attrs.get("axes", ""))
            if isinstance(node, h5py.Dataset) and "axis" in node.attrs and not axes:
                axes = [name]
    if not signal or not axes:
        named = _columns_by_name(group, file)
        if named is None:
            missing = "signal" if not signal else "axes"
            right = "name the signal and the field dataset"
            raise InputError(f"has no attribute {missing}", right, place=group.name, file=file)
        return named[1], named[0]
    return signal, axes[-1]


def _conditions(root: h5py.Group, group: h5py.Group, notes: list[Note], file: str) -> dict[str, Any]:
    """Take the conditions from scalars and attributes of the entry that holds the data."""
    entry = group
    while entry.name not in ("/", "") and _class(entry) != "NXentry":
        entry = entry.parent
    header: dict[str, Any] = {}
    for node in [group, entry, *_walk(entry, file)]:
        if isinstance(node, h5py.Group):
            scalars = {name: (node.attrs[name], "") for name in node.attrs if name in _CONDITIONS}
            texts = {name: _text(node.attrs[name]) for name in ("microwave", "detect", "title") if name in node.attrs}
        elif is_small_scalar(node):
            name = node.name.rsplit("/", 1)[-1]
            units = _text(node.attrs.get("units", ""))
            scalars = {name: (node[()], units)} if name in _CONDITIONS else {}
            texts = {name: _text(node[()])} if name in ("microwave", "detect", "title") else {}
        else:
            continue
        for name, (value, unit) in scalars.items():
            words = _text(value).split() or _number_word(value)
            try:
                float(words[0])
            except (IndexError, ValueError):
                continue
            put(header, notes, _CONDITIONS[name], words[0], unit or " ".join(words[1:]) or None)
        for name, text in texts.items():
            if text:
                header.setdefault(name, text)
    return header


def trace_of(root: h5py.File, file: str, sha256: str = "") -> RawTrace:
    """Read the signal and axis of an open file's (default) NXdata group.

    Raises
    ------
    InputError
        With the group or dataset and what was found.
    """
    notes: list[Note] = []
    group = _find_data(root, notes, file)
    signal, axis = _signal_and_axis(group, file)
    x, x_unit = _read(group, axis, file)
    y, y_unit = _read(group, signal, file)
    header = _conditions(root, group, notes, file)
    place = group.name
    if len(x) != len(y) or not len(x):
        found = f"{axis} has {len(x)} points, {signal} has {len(y)}"
        raise InputError(found, "give both the same number", place=place, file=file)
    names = (axis.rsplit("/", 1)[-1].removesuffix("_" + x_unit), signal.rsplit("/", 1)[-1])
    return RawTrace(np.column_stack([x, y]), names, (x_unit, y_unit), header, sha256, file, tuple(notes), "HDF5")
