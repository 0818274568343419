"""The content of an HDF5 file as plain objects: groups, numbers, texts and attributes, with a digest over all of it."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

import h5py
import numpy as np
from h5py import h5a, h5d, h5f, h5g, h5o, h5p, h5s, h5t
from numpy.typing import NDArray

Attribute = str | int | float | list[str] | list[int] | list[float]

DIGEST = "spinfit_digest"
"""Attribute of a group that holds the digest of everything else in it."""

# Smaller arrays are not worth packing, bytes: measured numbers shrink by a tenth, and packing a few kilobytes takes
# longer than all else of writing them.
_PACKED_FROM = 2**16
# Smaller arrays cost less than a look whether they are there already, bytes.
_SHARED_FROM = 2**10
# Numbers in one piece of a packed array.
_CHUNK = 2**16
_TEXT = h5py.string_dtype("utf-8")


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


_ENCODER = json.JSONEncoder(sort_keys=True)


def _as_json(content: Any) -> bytes:
    return _ENCODER.encode(content).encode()


def _fed(digest: Any, node: Group | Data, path: str) -> None:
    """Feed a node into a digest, names in order."""
    kind = "group" if isinstance(node, Group) else "text" if isinstance(node.values, (str, list)) else "numbers"
    attrs = {key: value for key, value in node.attrs.items() if not (path == "" and key == DIGEST)}
    digest.update(_as_json([path, kind, attrs]))
    if isinstance(node, Group):
        for name in sorted(node.members):
            _fed(digest, node.members[name], f"{path}/{name}")
    elif isinstance(node.values, (str, list)):
        digest.update(_as_json(node.values))
    else:
        values = np.ascontiguousarray(node.values)
        values = values.astype(values.dtype.newbyteorder("<"), copy=False)
        digest.update(_as_json([values.dtype.kind, values.dtype.itemsize, values.shape]))
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
    """Write a group's attributes and members; the same content gives the same bytes.

    Longer arrays that stand in several places, such as the field beside each curve, are stored once under as many
    names (hard links).

    h5py's own calls for groups, datasets and attributes take four times as long as the library beneath them, which
    for the many small numbers of an archive was a tenth of a short fit.
    """
    _write(into.id, group, {})


def _write(into: h5g.GroupID, group: Group, written: dict[Any, h5d.DatasetID]) -> None:
    _write_attributes(into, group.attrs)
    for name, node in group.members.items():
        called = name.encode("utf-8")
        if isinstance(node, Group):
            _write(h5g.create(into, called, lcpl=_utf8_names(), gcpl=_untimed(h5p.GROUP_CREATE)), node, written)
            continue
        content = _content(node)
        if content is not None and content in written:
            h5o.link(written[content], into, called, lcpl=_utf8_names())
        else:
            written[content] = _write_data(into, called, node)


def _content(data: Data) -> Any:
    """Return what tells a longer array from others; None for a short one, or a text."""
    values = data.values
    if not isinstance(values, np.ndarray) or values.nbytes < _SHARED_FROM:
        return None
    digest = hashlib.sha256(np.ascontiguousarray(values)).digest()
    return values.dtype.str, values.shape, digest, tuple((key, str(value)) for key, value in data.attrs.items())


def _write_data(into: h5g.GroupID, name: bytes, data: Data) -> h5d.DatasetID:
    if isinstance(data.values, (str, list)):
        values = np.array(data.values, dtype=_TEXT)
    else:
        values = np.ascontiguousarray(data.values).reshape(data.values.shape)  # which makes a number an array of one
    how = (
        _packed(values) if values.dtype.kind != "O" and values.nbytes >= _PACKED_FROM else _untimed(h5p.DATASET_CREATE)
    )
    stored, held = _kinds(values.dtype)
    made = h5d.create(into, name, stored, _space(values.shape), dcpl=how, lcpl=_utf8_names())
    if values.size:
        made.write(h5s.ALL, h5s.ALL, values, mtype=held)
    _write_attributes(made, data.attrs)
    return made


def _write_attributes(into: h5g.GroupID | h5d.DatasetID, attrs: Mapping[str, Attribute]) -> None:
    for key, value in attrs.items():
        values = np.asarray(value)
        if values.dtype.kind == "U":
            values = np.array(value, dtype=_TEXT)
        stored, held = _kinds(values.dtype)
        made = h5a.create(into, key.encode("utf-8"), stored, _space(values.shape))
        if values.size:
            made.write(values, mtype=held)


def _kinds(dtype: np.dtype[Any]) -> tuple[h5t.TypeID, h5t.TypeID]:
    """Return a type as it is stored and as it is in memory."""
    return _text_kinds() if dtype.kind == "O" else _number_kinds(dtype)


@lru_cache(maxsize=1)
def _text_kinds() -> tuple[h5t.TypeID, h5t.TypeID]:
    return h5t.py_create(_TEXT, logical=True), h5t.py_create(_TEXT)


@lru_cache(maxsize=64)
def _number_kinds(dtype: np.dtype[Any]) -> tuple[h5t.TypeID, h5t.TypeID]:
    kind = h5t.py_create(dtype, logical=True)
    return kind, kind


@lru_cache(maxsize=64)
def _space(shape: tuple[int, ...]) -> h5s.SpaceID:
    return h5s.create_simple(shape) if shape else h5s.create(h5s.SCALAR)


@lru_cache(maxsize=1)
def _utf8_names() -> h5p.PropLCID:
    how = h5p.create(h5p.LINK_CREATE)
    how.set_char_encoding(h5t.CSET_UTF8)
    return how


@lru_cache(maxsize=2)
def _untimed(of: h5p.PropClassID) -> Any:
    """Return how to make a group or a dataset without the time of its making in it."""
    how = h5p.create(of)
    how.set_obj_track_times(False)
    return how


def _packed(values: NDArray[Any]) -> h5p.PropDCID:
    how = h5p.create(h5p.DATASET_CREATE)
    how.set_obj_track_times(False)
    how.set_chunk((min(len(values), _CHUNK), *values.shape[1:]))
    if values.dtype.itemsize > 1:
        how.set_shuffle()
    how.set_deflate(4)
    return how


def change_text_attribute(group: h5py.Group, key: str, changes: Mapping[str, str]) -> None:
    """Put another text in place of the one that an attribute of a group, and of the groups in it, holds now."""
    _, held = _text_kinds()
    for name in (b".", *group.id):
        node = h5o.open(group.id, name)
        if not isinstance(node, h5g.GroupID) or not h5a.exists(node, key.encode()):
            continue
        attribute = h5a.open(node, key.encode())
        value = np.empty((), dtype=_TEXT)
        attribute.read(value, mtype=held)
        text = value[()].decode() if isinstance(value[()], bytes) else value[()]
        if text in changes:
            attribute.write(np.array(changes[text], dtype=_TEXT), mtype=held)


def copy_tree(into: h5py.Group, name: str, content: bytes) -> h5py.Group:
    """Copy everything in an HDF5 file into a new group, by the library alone.

    Only for files that are known to be as this program wrote them: a damaged one may crash the library.

    Parameters
    ----------
    into : h5py.Group
    name : str
        Of the new group.
    content : bytes
        The file.
    """
    how = h5p.create(h5p.FILE_ACCESS)
    how.set_fapl_core(_PACKED_FROM, False)
    how.set_file_image(content)
    source = h5f.open(b"in memory", h5f.ACC_RDONLY, how)
    try:
        h5o.copy(source, b"/", into.id, name.encode("utf-8"), lcpl=_utf8_names())
    finally:
        source.close()
    return into[name]


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
