"""All of an HDF5 group as JSON types and arrays, for archives.

Runs in the child process of `spinfit.files.guard`.  Only what archives are made of is read: hard links, numbers,
texts.  Everything else is refused, and nothing is made an object of.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.files.hdf5_checks import check_dataset
from spinfit.files.raw import quote

MOST_NODES = 400_000
"""Groups and datasets: a job of 10 000 traces makes about 350 000."""
MOST_BYTES = 2**30
DEEPEST = 10

Arrays = list[NDArray[Any]]


class _Walk:
    """One walk through a file, with what it has met."""

    def __init__(self, file: str) -> None:
        self.file = file
        self.nodes = 0
        self.bytes = 0
        self.arrays: Arrays = []

    def refuse(self, found: str, place: str) -> InputError:
        return InputError(found, "an archive of spinfit is made otherwise", place=place, file=self.file)

    def group(self, group: h5py.Group, place: str, depth: int) -> dict[str, Any]:
        if depth > DEEPEST:
            raise self.refuse(f"groups are nested more than {DEEPEST} deep", place)
        members: dict[str, Any] = {}
        for name in group:
            self.nodes += 1
            here = f"{place}/{name}"
            if self.nodes > MOST_NODES:
                raise self.refuse(f"holds more than {MOST_NODES} objects", place)
            node = child_of(group, name, here, self.file)
            if isinstance(node, h5py.Group):
                members[name] = self.group(node, here, depth + 1)
            elif isinstance(node, h5py.Dataset):
                members[name] = self.data(node, here)
            else:
                raise self.refuse("is neither a group nor a dataset", here)
        return {"attrs": attributes_of(group, place, self.file), "members": members}

    def data(self, data: h5py.Dataset, place: str) -> dict[str, Any]:
        check_dataset(data, place, self.file)
        attrs = attributes_of(data, place, self.file)
        size = math.prod(data.shape)
        self.bytes += size * data.dtype.itemsize
        if self.bytes > MOST_BYTES:
            raise self.refuse(f"holds more than {MOST_BYTES:.3g} bytes", place)
        text = h5py.check_string_dtype(data.dtype)
        if text is not None and text.length is None and len(data.shape) < 2:
            values = data.asstr()[()]
            self.bytes += len(values) if isinstance(values, str) else sum(map(len, values))
            return {"attrs": attrs, "text": values if isinstance(values, str) else [str(v) for v in values]}
        if data.dtype.kind not in "iufb" or data.dtype.itemsize > 8:
            raise self.refuse(f"holds {data.dtype}", place)
        self.arrays.append(np.asarray(data[()]))
        return {"attrs": attrs, "array": len(self.arrays) - 1}


def child_of(group: h5py.Group, name: str, place: str, file: str) -> Any:
    """Return a member that a hard link of the group leads to.

    Raises
    ------
    InputError
        For links of any other kind, and members that cannot be opened.
    """
    if not isinstance(group.get(name, getlink=True), h5py.HardLink):
        raise InputError("is a link", "an archive of spinfit holds its data itself", place=place, file=file)
    return group.get(name)


def attributes_of(node: h5py.Group | h5py.Dataset, place: str, file: str) -> dict[str, Any]:
    """Return a node's attributes as JSON types.

    Raises
    ------
    InputError
        For attributes that are neither numbers nor texts, or whose names are not UTF-8.
    """
    found: dict[str, Any] = {}
    for key in node.attrs:
        if not isinstance(key, str):  # h5py gives what is not UTF-8 as bytes
            found_name = f"holds a name that is not UTF-8 ({quote(key)})"
            raise InputError(found_name, "an archive of spinfit is made otherwise", place=place, file=file)
        value = node.attrs[key]
        if isinstance(value, np.ndarray) and value.ndim == 1:
            value = value.tolist()
        elif isinstance(value, np.generic):
            value = value.item()
        entries = value if isinstance(value, list) else [value]
        if not all(isinstance(entry, (str, int, float)) for entry in entries):
            right = "an archive of spinfit is made otherwise"
            raise InputError(f"the attribute {key:.40} is neither number nor text", right, place=place, file=file)
        found[key] = value
    return found


def _group_at(root: h5py.File, under: Sequence[str], file: str) -> h5py.Group:
    """Return the group that names lead to from the root."""
    here: h5py.Group = root
    for name in under:
        node = child_of(here, name, name, file) if name and "/" not in name and name in here else None
        if not isinstance(node, h5py.Group):
            raise InputError(f'there is no "{name:.60}"', "see what it holds with spinfit inspect", file=file)
        here = node
    return here


def tree_of(root: h5py.File, under: Sequence[str], file: str) -> tuple[dict[str, Any], Arrays]:
    """Return everything in a group.

    Returns
    -------
    tree : dict
        ``attrs`` and ``members`` of each group, ``attrs`` and ``text`` or ``array`` (index) of each dataset.
    arrays : list of ndarray

    Raises
    ------
    InputError
    """
    walk = _Walk(file)
    tree = walk.group(_group_at(root, under, file), "/".join(("", *under)), 0)
    return tree, walk.arrays


def names_of(root: h5py.File, under: Sequence[str], file: str) -> dict[str, Any]:
    """Return the names in a group and its attributes as far as they are ours, single numbers or texts.

    Raises
    ------
    InputError
    """
    group = _group_at(root, under, file)
    # Attributes of other programs may be of kinds that h5py does not read.
    ours = [key for key in group.attrs if isinstance(key, str) and key.startswith("spinfit_")]
    attrs = {key: group.attrs[key] for key in ours}
    plain = {key: value.item() if isinstance(value, np.generic) else value for key, value in attrs.items()}
    names = []
    for name in group:
        names.append(name)
        if len(names) > MOST_NODES:
            raise InputError(f"holds more than {MOST_NODES} objects", "give one trace a file", file=file)
    return {"attrs": {k: v for k, v in plain.items() if isinstance(v, (str, int, float))}, "names": names}
