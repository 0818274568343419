"""The habits that the layout rests on, enforced by reading the source.

What is checked is this project's own rule (DEVELOPERS.md, "The way of the data"): arrows between
modules point one way, modules stay small, the library neither prints nor exits, and help is quick.
Each check is a function that returns complaints, so that it is itself tested on source that breaks
the rule.
"""

from __future__ import annotations

import ast
import fnmatch
import subprocess
import sys
import textwrap
import tomllib
from collections.abc import Iterator, Mapping
from graphlib import CycleError, TopologicalSorter
from pathlib import Path

import pytest
import scipy.constants

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "spinfit"

# From what knows least to what knows most; a module imports from earlier entries, and within its own
# entry freely but without a cycle.
ORDER = (
    "errors",
    "markup",
    "threads",
    "units",
    "hermite",
    "compiling",
    "kernels",
    "moments",
    "operators",
    "isotopes",
    "species",
    "sites",
    "sweep",
    "nuclei",
    "hamiltonian",
    "weak",
    "patterns",
    "characters",
    "levels",
    "resonance",
    "diagram",
    "treatment",
    "symmetry",
    "broadening",
    "orientations",
    "lineshape",
    "sheets",
    "branches",
    "crossings",
    "nodes",
    "meridian",
    "doublets",
    "knots",
    "exact",
    "loop_kernels",
    "landscape",
    "loop_sums",
    "loops",
    "powder",
    "moves",
    "changes",
    "crystal",
    "alignment",
    "isotropic",
    "transitions",
    "dependence",
    "solution",
    "distribution",
    "first_order",
    "spectrum",
    "sketch",
    "derivatives",
    "ion",
    "fitting",
    "files",
    "report",
    "batch",
    "cli",
)
# Modules that share the place of an entry above.
SAME_PLACE = {"commands": "cli"}
# Where function-level imports, printing and exiting are allowed: the commands alone.
COMMAND_LINE = ("cli", "commands")
LARGEST_MODULE = 500
HEAVY = ("scipy.optimize", "pandas", "matplotlib")


def modules() -> dict[str, ast.Module]:
    """Parse every module of the package, by dotted name ("spinfit.files.text")."""
    parsed = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(ROOT).with_suffix("").parts
        name = ".".join(parts[:-1] if parts[-1] == "__init__" else parts)
        parsed[name] = ast.parse(path.read_text(encoding="utf-8"), filename=str(path))
    return parsed


def place(module: str) -> int | None:
    """Return a module's place in the order; -1 for the package itself, None for an unknown one."""
    parts = module.split(".")
    if len(parts) == 1:
        return -1
    entry = SAME_PLACE.get(parts[1], parts[1])
    return ORDER.index(entry) if entry in ORDER else None


def imported(tree: ast.AST, known: Mapping[str, object]) -> Iterator[tuple[str, int]]:
    """Yield (module, line) of everything of the package that a module imports, anywhere in it."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = "." * node.level + (node.module or "")
            # "from spinfit.files import text" names a module, "from spinfit.files import read" does not.
            names = [f"{base}.{a.name}" if f"{base}.{a.name}" in known else base for a in node.names]
        else:
            continue
        for name in names:
            if name == "spinfit" or name.startswith(("spinfit.", ".")):
                yield name, node.lineno


def wrong_direction(parsed: Mapping[str, ast.Module]) -> list[str]:
    """Complain of imports against the order, of cycles, of modules that have no place in it."""
    complaints = []
    graph: dict[str, set[str]] = {}
    for name, tree in parsed.items():
        own = place(name)
        if own is None:
            complaints.append(f"{name} has no place in the order")
            continue
        for target, line in imported(tree, parsed):
            theirs = place(target)
            if target.startswith("."):
                complaints.append(f"{name}:{line} imports {target} relatively; write the whole name")
            elif theirs is None or theirs > own:
                complaints.append(f"{name}:{line} imports {target}, against the order")
            elif target != name:
                graph.setdefault(name, set()).add(target)
    try:
        TopologicalSorter(graph).prepare()
    except CycleError as error:
        complaints.append("imports in a circle: " + " <- ".join(error.args[1]))
    return complaints


def is_command_line(name: str) -> bool:
    """Say whether a module belongs to the command line."""
    return name.split(".")[1:2] and name.split(".")[1] in COMMAND_LINE


def inner_imports(name: str, tree: ast.AST) -> list[str]:
    """Complain of imports inside functions."""
    functions = (n for n in ast.walk(tree) if isinstance(n, ast.FunctionDef | ast.AsyncFunctionDef))
    found = {n.lineno for f in functions for n in ast.walk(f) if isinstance(n, ast.Import | ast.ImportFrom)}
    return [f"{name}:{line} imports inside a function" for line in sorted(found)]


FORBIDDEN_CALLS = {"print", "exit", "quit", "input", "eval", "exec", "compile", "__import__"}
FORBIDDEN_MODULES = {"pickle", "marshal", "shelve", "matplotlib.pyplot"}


def misbehaviour(name: str, tree: ast.AST) -> list[str]:
    """Complain of printing, exiting, running text as code, unpickling, pyplot state and asserts."""
    complaints = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in FORBIDDEN_CALLS:
            complaints.append(f"{name}:{node.lineno} calls {node.func.id}()")
        if isinstance(node, ast.Attribute) and ast.unparse(node) in ("sys.exit", "os._exit", "sys.stdout"):
            complaints.append(f"{name}:{node.lineno} uses {ast.unparse(node)}")
        if isinstance(node, ast.Import | ast.ImportFrom):
            base = [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            names = {*base, *(".".join([*base, alias.name]) for alias in node.names)}
            complaints += [f"{name}:{node.lineno} imports {bad}" for bad in sorted(names & FORBIDDEN_MODULES)]
        # "assert x is not None" tells a type checker what the code before it has made sure of.
        if isinstance(node, ast.Assert) and not ast.unparse(node.test).endswith(" is not None"):
            complaints.append(f"{name}:{node.lineno} asserts; raise an error that says what would be right")
    return complaints


def _mantissa(value: float) -> float:
    return float(f"{abs(value):.12e}".split("e")[0])


PHYSICAL = {
    key: _mantissa(scipy.constants.value(key))
    for key in (
        "Planck constant",
        "Boltzmann constant",
        "Bohr magneton",
        "nuclear magneton",
        "Bohr magneton in Hz/T",
        "nuclear magneton in MHz/T",
        "Bohr magneton in inverse meter per tesla",
        "Boltzmann constant in Hz/K",
        "electron g factor",
        "speed of light in vacuum",
        "elementary charge",
        "electron volt-hertz relationship",
    )
}


def typed_constants(name: str, tree: ast.AST) -> list[str]:
    """Complain of numbers that are a physical constant, in any power of ten, typed in by hand.

    Four digits that agree make a constant, but not "2.0023", which stands for a g that the user left out.
    """
    complaints = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Constant) and isinstance(node.value, float) and node.value:
            own = _mantissa(node.value)
            digits = len(f"{own:.12g}".replace(".", ""))
            for key, value in PHYSICAL.items():
                # Rounded to four digits or more; later digits may differ between sets of constants.
                if digits >= 4 and abs(own - value) < 0.6 * 10.0 ** (1 - min(digits, 6)) and own != 2.0023:
                    complaints.append(f"{name}:{node.lineno} types {node.value}: take {key} from scipy.constants")
    return complaints


def test_imports_point_down_the_flow() -> None:
    assert wrong_direction(modules()) == []


def test_no_imports_inside_functions_outside_the_commands() -> None:
    assert [c for name, tree in modules().items() if not is_command_line(name) for c in inner_imports(name, tree)] == []


def test_the_library_neither_prints_nor_exits_nor_runs_text() -> None:
    assert [c for name, tree in modules().items() if not is_command_line(name) for c in misbehaviour(name, tree)] == []


def test_constants_come_from_scipy() -> None:
    assert [c for name, tree in modules().items() for c in typed_constants(name, tree)] == []


def test_modules_keep_to_one_subject() -> None:
    lengths = {
        path.relative_to(ROOT).as_posix(): len(path.read_text(encoding="utf-8").splitlines())
        for path in PACKAGE.rglob("*.py")
    }
    assert {name: n for name, n in lengths.items() if n > LARGEST_MODULE} == {}


BROKEN = {
    "against the order": (wrong_direction, {"spinfit.units": "from spinfit.files import text", "spinfit.files": ""}),
    "no place": (wrong_direction, {"spinfit.misc": "import math"}),
    "circle": (wrong_direction, {"spinfit.ion.a": "import spinfit.ion.b", "spinfit.ion.b": "import spinfit.ion.a"}),
    "relatively": (wrong_direction, {"spinfit.files.text": "from .jcamp import read"}),
}


@pytest.mark.parametrize("complaint", BROKEN)
def test_the_check_of_direction_sees(complaint: str) -> None:
    check, sources = BROKEN[complaint]
    found = check({name: ast.parse(source) for name, source in sources.items()})
    assert len(found) == 1
    assert complaint in found[0]


def test_the_check_of_direction_lets_order_pass() -> None:
    sources = {
        "spinfit": "",
        "spinfit.errors": "import math",
        "spinfit.files.text": "from spinfit.errors import InputError\nfrom spinfit.files import header",
        "spinfit.files.header": "from spinfit import __version__\nfrom spinfit.errors import nearest",
        "spinfit.files": "",
    }
    assert wrong_direction({name: ast.parse(source) for name, source in sources.items()}) == []


@pytest.mark.parametrize(
    "source",
    [
        "print(1)",
        "import sys\nsys.exit(1)",
        "eval('1')",
        "from matplotlib import pyplot",
        "import matplotlib.pyplot as plt",
        "import pickle",
        "assert width > 0",
    ],
)
def test_the_check_of_behaviour_sees(source: str) -> None:
    assert len(misbehaviour("m", ast.parse(source))) >= 1


def test_the_check_of_inner_imports_sees() -> None:
    source = textwrap.dedent("""
        import math
        class A:
            def f(self):
                import json
    """)
    assert inner_imports("m", ast.parse(source)) == ["m:5 imports inside a function"]


@pytest.mark.parametrize("typed", ["9.274e-24", "13.99624493e3", "6.62607015e-34", "2.002319", "1.380649e-23"])
def test_the_check_of_constants_sees(typed: str) -> None:
    assert len(typed_constants("m", ast.parse(f"x = {typed}"))) >= 1


def test_help_is_quick() -> None:
    """``spinfit --help`` imports nothing that is only needed to compute, read or draw."""
    script = textwrap.dedent(f"""
        import sys
        from spinfit.cli import main
        try:
            code = main(["--help"])
        except SystemExit as leaving:
            code = leaving.code
        heavy = [name for name in {HEAVY!r} if name in sys.modules]
        print("code", code, "heavy", heavy)
    """)
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=120, check=True)
    assert done.stdout.splitlines()[-1] in ("code 0 heavy []", "code None heavy []")


def test_every_data_file_is_packed() -> None:
    """A wheel holds only what ``package-data`` names; a file missing from it is missing at the user's."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    patterns = project["tool"]["setuptools"]["package-data"]["spinfit"]
    others = [
        path.relative_to(PACKAGE).as_posix()
        for path in PACKAGE.rglob("*")
        if path.is_file() and path.suffix != ".py" and "__pycache__" not in path.parts
    ]
    assert [name for name in others if not any(fnmatch.fnmatch(name, pattern) for pattern in patterns)] == []
    assert "py.typed" in others


def test_versions_agree() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    tree = ast.parse((PACKAGE / "__init__.py").read_text(encoding="utf-8"))
    stated = [n.value.value for n in ast.walk(tree) if isinstance(n, ast.Assign) and n.targets[0].id == "__version__"]
    assert stated == [project["project"]["version"]]
