"""TOML as it is written is read back to the same tables by Python's own reader."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from toml_files import FUZZ

from spinfit.files.toml_writing import toml_text

JOBS = sorted((Path(__file__).resolve().parents[1] / "demo_spectra").rglob("*.toml"))

texts = st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
leaves = texts | st.integers(-(2**63), 2**63 - 1) | st.floats(allow_nan=False) | st.booleans()
arrays = st.recursive(leaves, lambda inner: st.lists(inner, max_size=3), max_leaves=5)
tables = st.recursive(
    st.dictionaries(texts, arrays, max_size=4),
    lambda inner: st.dictionaries(texts, inner | st.lists(inner, max_size=3) | arrays, max_size=4),
    max_leaves=6,
)


@FUZZ
@given(tables)
def test_read_back_the_same(content):
    assert tomllib.loads(toml_text(content)) == content


@pytest.mark.parametrize("path", JOBS, ids=lambda path: path.stem)
def test_jobs_and_models_read_back_the_same(path):
    content = tomllib.loads(path.read_text(encoding="utf-8"))
    assert tomllib.loads(toml_text(content)) == content


def test_dates_and_mixed_lists():
    content = tomllib.loads("day = 2026-12-01\nat = 07:32:00\nmixed = [1, {a = 2}, [3]]\nfar = [inf, -inf]\n")
    assert tomllib.loads(toml_text(content)) == content
