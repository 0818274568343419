"""Small helpers of the tests that read model and job files."""

from __future__ import annotations

import copy

import pytest
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st

from spinfit.errors import InputError


def write(tmp_path, text: str, name: str = "model.toml"):
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return path


def refusal(reader, path) -> str:
    with pytest.raises(InputError) as caught:
        reader(path)
    text = str(caught.value)
    assert "\n" not in text
    assert text.startswith(str(path))
    return text.removeprefix(f"{path}: ")


def changed(text: str, old: str, new: str) -> str:
    assert text.count(old) >= 1, old
    return text.replace(old, new, 1)


FUZZ = settings(
    max_examples=250, derandomize=True, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
scalars = st.one_of(
    st.none().map(lambda _: {}),
    st.booleans(),
    st.integers(-(2**70), 2**70),
    st.integers(-3, 3),
    st.floats(),
    st.text(max_size=8),
    st.sampled_from(["1 mT", "0 MHz", "nan GHz", "1, 2, 3 MHz", "-1 deg", "1/2", "63Cu", "cr.g", "crystal", "1e400 K"]),
)
values = st.recursive(
    scalars, lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5), inner, max_size=2)
)


def places(tree, path=()):
    """Return every place in nested dicts and lists."""
    found = [path] if path else []
    items = tree.items() if isinstance(tree, dict) else enumerate(tree) if isinstance(tree, list) else ()
    for key, value in items:
        found += places(value, (*path, key))
    return found


def damaged(data, tables: dict, keys: list[str]) -> dict:
    """Return the tables with a few values exchanged, taken out, or put in under a known key."""
    tables = copy.deepcopy(tables)
    for _ in range(data.draw(st.integers(1, 3))):
        path = data.draw(st.sampled_from(places(tables)))
        node = tables
        for step in path[:-1]:
            node = node[step]
        if data.draw(st.booleans()):
            node[path[-1]] = data.draw(values)
        elif isinstance(node, dict) and data.draw(st.booleans()):
            node[data.draw(st.sampled_from(keys))] = data.draw(values)
        else:
            del node[path[-1]]
        if not places(tables):
            break
    return tables


def keys_of(tables: dict) -> list[str]:
    """Return every key anywhere in the tables."""
    return sorted({step for path in places(tables) for step in path if isinstance(step, str)})
