"""The content of an HDF5 file as plain objects: groups, numbers, texts and attributes, with a digest over all of it."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

Attribute = str | int | float | list[str] | list[int] | list[float]

DIGEST = "spinfit_digest"
"""Attribute of a group that holds the digest of everything else in it."""

# Smaller arrays are not worth packing, bytes.
_PACKED_FROM = 4096


@dataclass(frozen=True, eq=False)
class Data:
    """One dataset: an array of numbers (booleans too), a text, or a list of texts."""

    values: NDArray[Any] | str | list[str]
    attrs: Mapping[str, Attribute] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Group:
    """A group with its attributes and members."""

    members: Mapping[str, Group | Data] = field(default_factory=dict)
    attrs: Mapping[str, Attribute] = field(default_factory=dict)


def _fed(digest: Any, node: Group | Data, path: str) -> None:
    """Feed a node into a digest, names in order."""
    kind = "group" if isinstance(node, Group) else "text" if isinstance(node.values, (str, list)) else "numbers"
    attrs = {key: value for key, value in node.attrs.items() if not (path == "" and key == DIGEST)}
    digest.update(json.dumps([path, kind, attrs], sort_keys=True).encode())
    if isinstance(node, Group):
        for name in sorted(node.members):
            _fed(digest, node.members[name], f"{path}/{name}")
    elif isinstance(node.values, (str, list)):
        digest.update(json.dumps(node.values).encode())
    else:
        values = np.ascontiguousarray(node.values)
        values = values.astype(values.dtype.newbyteorder("<"), copy=False)
        digest.update(json.dumps([values.dtype.kind, values.dtype.itemsize, values.shape]).encode())
        digest.update(values.data.cast("B") if values.size else b"")


def digest_of(group: Group) -> str:
    """Return the SHA-256 over names, kinds, attributes and values of everything in a group.

    It does not depend on how the HDF5 library lays them out in the file, so that a repacked copy has the same.
    """
    digest = hashlib.sha256()
    _fed(digest, group, "")
    return digest.hexdigest()


def sealed(group: Group) -> Group:
    """Return the group with its digest as an attribute."""
    return Group(group.members, {**group.attrs, DIGEST: digest_of(group)})


def is_intact(group: Group) -> bool:
    """Whether a group holds what its digest says."""
    return group.attrs.get(DIGEST) == digest_of(group)


def write_tree(into: h5py.Group, group: Group) -> None:
    """Write a group's attributes and members; the same content gives the same bytes."""
    _set_attributes(into, group.attrs)
    for name, node in group.members.items():
        if isinstance(node, Group):
            write_tree(into.create_group(name), node)
            continue
        if isinstance(node.values, (str, list)):
            values = node.values if isinstance(node.values, str) else np.array(node.values, dtype=object)
            made = into.create_dataset(name, data=values, dtype=h5py.string_dtype("utf-8"), track_times=False)
        else:
            packed = {}
            if node.values.nbytes >= _PACKED_FROM:
                packed = {"compression": "gzip", "compression_opts": 4, "shuffle": node.values.dtype.itemsize > 1}
            made = into.create_dataset(name, data=node.values, track_times=False, **packed)
        _set_attributes(made, node.attrs)


def _set_attributes(into: h5py.Group | h5py.Dataset, attrs: Mapping[str, Attribute]) -> None:
    for key, value in attrs.items():
        into.attrs[key] = value


def tree_from(found: Mapping[str, Any], arrays: list[NDArray[Any]]) -> Group:
    """Put a tree together from what the child process answered."""
    members: dict[str, Group | Data] = {}
    for name, entry in found["members"].items():
        if "members" in entry:
            members[name] = tree_from(entry, arrays)
        elif "array" in entry:
            members[name] = Data(arrays[entry["array"]], entry["attrs"])
        else:
            members[name] = Data(entry["text"], entry["attrs"])
    return Group(members, found["attrs"])
