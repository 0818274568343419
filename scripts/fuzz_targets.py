"""The readers that are fuzzed, each as a function of the bytes of a file."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable, Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any

from fuzz_seeds import TABLE, TRACE
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.files.hdf5_child import answer_to, set_limits
from spinfit.files.jcamp import read_jcamp
from spinfit.files.job import job_of, model_from, read_model
from spinfit.files.reading import assemble
from spinfit.files.text import read_text
from spinfit.files.toml_crystal_field import crystal_fields_of
from spinfit.files.toml_table import parse_toml
from spinfit.files.tree import sealed, tree_from
from spinfit.fitting.parameters import Binding
from spinfit.fitting.ties import compile_ties, evaluate, names_in, parse_tie, slopes
from spinfit.report.archive_reading import archive_from

_HANGS = 0.2
"""Seconds of processor time after which reading a small file does not end."""
_KEPT = {"t.csv": TRACE, "l.csv": TABLE}
_MODEL = read_model(Path(__file__).resolve().parents[1] / "demo_spectra/models/honey_glass_iron.toml")
_KNOWN = Binding(_MODEL.species, _MODEL.sample).parameters


def _toml(data: bytes) -> object:
    text = data.decode("utf-8", "replace")
    tables = parse_toml(text)
    return job_of(text, "j", _KEPT) if {"fit", "trace"} & set(tables) else model_from(tables)


def _ties(data: bytes) -> object:
    lines = data.decode("utf-8", "replace").split("\n")
    tree = parse_tie(lines[0])
    values = {name: 0.5 for name in names_in(tree)}
    evaluate(tree, values)
    slopes(tree, values)
    compiled = compile_ties(dict(zip(_KNOWN, lines, strict=False)), _KNOWN)
    start = {name: one.value for name, one in _KNOWN.items()}
    compiled.apply(start)
    return compiled.gradient(start)


def _is_survived(question: dict[str, object], data: bytes) -> bool:
    """Whether a process lives through reading: tried in a forked one, with the limits of the guarded child."""
    forked = os.fork()
    if forked == 0:
        for number in (signal.SIGSEGV, signal.SIGABRT, signal.SIGBUS, signal.SIGFPE, signal.SIGILL, signal.SIGPROF):
            signal.signal(number, signal.SIG_DFL)  # libFuzzer's own would take this for the end of it
        set_limits(60.0, 2**30)
        signal.setitimer(signal.ITIMER_PROF, _HANGS)
        with suppress(Exception):
            answer_to(question, data)
        os._exit(0)
    return os.waitpid(forked, 0)[1] == 0


def _opened(what: str, data: bytes) -> tuple[dict[str, object], list[NDArray[Any]]]:
    """Read HDF5 here, where coverage is seen, unless that would end this process: then the guard is what answers."""
    question = {"what": what, "file": "f.h5", "path": "", "under": []}
    if not _is_survived(question, data):
        raise InputError("is a damaged HDF5 file", "take an undamaged copy", file="f.h5")
    return answer_to(question, data)


READERS: Mapping[str, Callable[[bytes], object]] = {
    "text": lambda data: assemble(read_text(data, "f.csv"), field_unit="mT"),
    "jcamp": lambda data: assemble(read_jcamp(data, "f.jdx"), field_unit="mT"),
    "toml": _toml,
    "ties": _ties,
    "ligands": lambda data: crystal_fields_of(parse_toml(data.decode("utf-8", "replace"))),
    "hdf5": lambda data: _opened("trace", data),
    # With a fresh digest, as somebody who means harm would give it: the digest alone would stop all else.
    "archive": lambda data: archive_from(sealed(tree_from(*_opened("tree", data))), "f.h5"),
}
