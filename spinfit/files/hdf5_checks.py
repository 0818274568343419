"""What a dataset of a foreign HDF5 file must be like before a byte of it is read.

Runs in the child process of `spinfit.files.guard`.
"""

from __future__ import annotations

import math

import h5py

from spinfit.errors import InputError

# deflate, shuffle, fletcher32, szip, nbit, scale-offset and h5py's LZF: what h5py brings along.  Any other filter
# would make the library look for a plugin.
_FILTERS = frozenset({1, 2, 3, 4, 5, 6, 32000})
# Measured numbers shrink by 2 to 20 times, text by up to 50; a hundred zeros a byte is what a bomb is made of.
_LARGEST_RATIO = 200
# Below this a dataset is harmless however little of it is stored, bytes.
_HARMLESS = 2**25
_LONGEST_TEXT = 2**16


def is_elsewhere(data: h5py.Dataset) -> bool:
    """Whether a dataset's numbers lie in other files.

    To be asked first: the library opens the other files to tell the shape of a virtual dataset.
    """
    return bool(data.is_virtual or data.external)


def check_dataset(data: h5py.Dataset, place: str, file: str) -> None:
    """Refuse a dataset that lies in another file, needs a plugin, or unpacks to far more than is stored of it.

    Raises
    ------
    InputError
    """
    if is_elsewhere(data):
        raise InputError("is stored in another file", "copy the data into the file", place=place, file=file)
    if data.shape is None:
        raise InputError("is empty", "give at least one number", place=place, file=file)
    properties = data.id.get_create_plist()
    codes = [properties.get_filter(n)[0] for n in range(properties.get_nfilters())]
    unknown = [code for code in codes if code not in _FILTERS]
    if unknown:
        found = f"is packed by filter {unknown[0]}, which is not read"
        raise InputError(found, "write it with gzip, or not packed", place=place, file=file)
    chunk = math.prod(data.chunks) if data.chunks else 0
    needed = max(math.prod(data.shape), chunk) * data.dtype.itemsize
    stored = data.id.get_storage_size()
    if needed > _HARMLESS and needed > _LARGEST_RATIO * stored:
        found = f"unpacks {stored} stored bytes to {needed:.3g}"
        raise InputError(found, "write it with ordinary compression, or not packed", place=place, file=file)


def is_small_scalar(data: h5py.Dataset) -> bool:
    """Whether a dataset is one number or text of ordinary size that stands in the file itself."""
    if is_elsewhere(data) or data.shape is None or math.prod(data.shape) != 1:
        return False
    is_text = h5py.check_string_dtype(data.dtype) is not None
    return (data.dtype.kind in "iuf" or is_text) and data.dtype.itemsize <= _LONGEST_TEXT
