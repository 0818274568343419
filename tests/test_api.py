"""The public interface: the names and signatures that `docs/api.md` promises, and what importing them costs."""

from __future__ import annotations

import ast
import inspect
import re
import subprocess
import sys
from pathlib import Path

import pytest

import spinfit

ROOT = Path(__file__).resolve().parents[1]
PAGE = (ROOT / "docs" / "api.md").read_text(encoding="utf-8")
PROMISED = [line for block in re.findall(r"```text\n(.*?)```", PAGE, re.DOTALL) for line in block.splitlines()]
HEAVY = ("numpy", "scipy", "scipy.optimize", "pandas", "matplotlib", "lmfit", "h5py", "rich")


def signature(name: str) -> str:
    """Return what a name is called with, defaults that are no plain values as dots."""
    parts: list[str] = []
    for one in inspect.signature(getattr(spinfit, name)).parameters.values():
        if one.kind is one.KEYWORD_ONLY and "*" not in parts:
            parts.append("*")
        plain = one.default is None or one.default == () or isinstance(one.default, (int, float, str))
        default = repr(one.default) if plain else "..."
        parts.append(one.name if one.default is one.empty else f"{one.name}={default}")
    return f"{name}({', '.join(parts)})"


def printed(script: str) -> list[str]:
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=240, cwd=ROOT)
    assert done.returncode == 0, done.stderr
    return done.stdout.split()


def test_the_page_names_everything_public() -> None:
    names = [line.partition("(")[0] for line in PROMISED]
    assert sorted(names) == sorted(spinfit.__all__)
    assert set(spinfit.__all__) <= set(dir(spinfit))


@pytest.mark.parametrize("promised", PROMISED, ids=lambda line: line.partition("(")[0])
def test_signatures_are_the_promised_ones(promised: str) -> None:
    """A change here is felt by users' programs: see DEVELOPERS.md, Releases, for what is allowed."""
    assert signature(promised.partition("(")[0]) == promised


def test_unknown_names_are_errors_of_attributes() -> None:
    with pytest.raises(AttributeError, match="no attribute 'smulate'"):
        spinfit.smulate  # noqa: B018


def test_type_checkers_see_the_same_names_from_the_same_modules() -> None:
    stub = ast.parse((ROOT / "spinfit" / "__init__.pyi").read_text(encoding="utf-8"))
    homes = {a.name: node.module for node in stub.body if isinstance(node, ast.ImportFrom) for a in node.names}
    assert homes == {name: f"spinfit.{home}" for name, home in spinfit._HOMES.items()}
    (listed,) = [n.value for n in stub.body if isinstance(n, ast.Assign) and n.targets[0].id == "__all__"]
    assert ast.literal_eval(listed) == spinfit.__all__


def test_importing_loads_nothing_heavy() -> None:
    loaded = f"[name for name in {HEAVY!r} if name in sys.modules]"
    assert printed(f"import sys, spinfit; print(len({loaded}))") == ["0"]
    # An outcome is looked at without what made it.
    assert printed("import sys, spinfit; spinfit.Outcome; print('scipy' in sys.modules)") == ["False"]


def test_the_example_runs() -> None:
    (example,) = re.findall(r"```python\n(.*?)```", PAGE, re.DOTALL)
    field, g, uncertainty = map(float, printed(example))
    assert 332 < field < 341
    assert 2.001 < g < 2.003
    assert 0 < uncertainty < 1e-3
