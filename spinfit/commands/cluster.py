"""The connection to a Dask scheduler that is already running."""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from spinfit.errors import InputError

# Seconds to wait for a scheduler's answer.
PATIENCE = 15
_ADDRESS = re.compile(r"([a-z]+://)?[^\s/:]+(:[^\s/:]+)*:\d+|([a-z]+://)?\[[^\s\]]+\]:\d+")
_EXAMPLE = "give a running scheduler's address, such as tcp://node-1:8786"


@contextmanager
def connected(address: str) -> Iterator[tuple[Any, int]]:
    """Give an executor on the cluster and the number of its threads.

    Raises
    ------
    InputError
        When dask.distributed is not installed, nobody answers, or there are no workers.
    """
    if not _ADDRESS.fullmatch(address):
        raise InputError(f'"{address}" is no address', _EXAMPLE, place="--cluster")
    try:
        import distributed
    except ImportError:
        right = "install it: python3 -m pip install 'spinfit[cluster]'"
        raise InputError("dask.distributed is not installed", right, place="--cluster") from None
    try:
        client = distributed.Client(address, timeout=PATIENCE, set_as_default=False)
    except Exception as error:  # whatever its networking raises: nobody is there who could be talked to
        found = f'"{address}" does not answer ({type(error).__name__})'
        raise InputError(found, _EXAMPLE, place="--cluster") from None
    with client:
        threads = sum(client.ncores().values())
        if not threads:
            raise InputError(f"{address} has no workers", "start workers first", place="--cluster")
        # Each fit is a task of its own, though its function and even its order may be those of an earlier one.
        yield client.get_executor(pure=False, retries=0), threads
