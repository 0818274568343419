"""The readers that are fuzzed, each as a function of the bytes of a file."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from fuzz_seeds import TABLE, TRACE
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.files.guard import ask
from spinfit.files.hdf5_child import answer_to
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


def _opened(what: str, data: bytes) -> tuple[dict[str, object], list[NDArray[Any]]]:
    """Read HDF5 by the guarded child first, and here, where coverage is seen, only what does not harm a process."""
    question = {"what": what, "file": "f.h5", "path": "", "under": []}
    try:
        ask(what, file="f.h5", content=data)
    except InputError as error:
        if any(word in error.found for word in ("crashes", "does not end", "memory")):
            raise
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
