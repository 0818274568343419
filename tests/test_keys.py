"""The keys of files: the page that lists them, and the readers that take them.

What the tables in `spinfit.files.keys` say of a key (example, default, kind of value) is held against what the
readers do with it, and the page against what the readers say that they know.
"""

from __future__ import annotations

import copy
import dataclasses
import importlib.util
import re
import tomllib
from pathlib import Path

import numpy as np
import pytest

from spinfit.errors import InputError
from spinfit.files import keys
from spinfit.files.job import model_from, read_job
from spinfit.files.toml_crystal_field import crystal_fields_of
from spinfit.units import UNITS

ROOT = Path(__file__).resolve().parents[1]


def _pages():
    specification = importlib.util.spec_from_file_location("make_pages", ROOT / "scripts" / "make_pages.py")
    pages = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(pages)
    return pages


PAGES = _pages()
SHELLS = {1: "Bi2+", 2: "Fe3+", 3: "Er3+"}

MODEL = """
[sweep]
frequency = "9.5 GHz"
field = "260, 360 mT"
[[species]]
name = "cu"
S = "5/2"
g = 2.0
D = "1 GHz"
width = {gaussian = "1 mT"}
nucleus = [{isotope = "63Cu", A = "-35, -60, -540 MHz"}]
"""
PAIR = """
[sweep]
frequency = "9.5 GHz"
field = "260, 360 mT"
[[species]]
spin = [{S = "5/2", g = 2.0, D = "1 GHz"}, {S = "1/2", g = 2.0}]
exchange = [{between = [1, 2]}]
width = {gaussian = "1 mT"}
"""
JOB = """
[[species]]
name = "r"
S = "1/2"
g = [2.006, 2.004, 2.002]
width = {gaussian = "0.3 mT"}
[[trace]]
file = "kiln-07.csv"
frequency = "9.43 GHz"
field_unit = "mT"
[fit]
vary = ["r.g"]
"""
LINES = """
[sample]
form = "crystal"
[[species]]
name = "r"
S = "1/2"
g = [2.006, 2.004, 2.002]
[[lines]]
file = "kiln-07.csv"
frequency = "9.43 GHz"
[fit]
vary = ["r.g"]
"""
ION = """
[[ion]]
name = "Fe3+"
zeta = "400 cm^-1"
racah = {B = "900 cm^-1", C = "3800 cm^-1"}
octahedral = {ten_Dq = "12000 cm^-1"}
"""
FIELD = """
[sweep]
frequency = "9.5 GHz"
field = "260, 360 mT"
[[species]]
ion = "Cu2+"
width = {gaussian = "1 mT"}
crystal_field = {zeta = "829 cm^-1", octahedral = {ten_Dq = "12000 cm^-1", Ds = "500 cm^-1"}}
"""
_SPECIES, _ION = ("species", 0), ("ion", 0)
# Of each table: a file that holds it, and where.
PLACES = {
    "A model file": (MODEL, ()),
    "A job file": (JOB, ()),
    "`[sweep]`": (MODEL, ("sweep",)),
    "`[sample]`": (MODEL, ("sample",)),
    "`[accuracy]`": (MODEL, ("accuracy",)),
    "`[[species]]`": (MODEL, _SPECIES),
    "`[[species.spin]]`": (PAIR, (*_SPECIES, "spin", 0)),
    "`[species.stevens]`": (MODEL.replace('"5/2"', '"3"'), (*_SPECIES, "stevens")),
    "`[[species.nucleus]]`": (MODEL, (*_SPECIES, "nucleus", 0)),
    "`[[species.exchange]]`": (PAIR, (*_SPECIES, "exchange", 0)),
    "`[species.width]`": (MODEL, (*_SPECIES, "width")),
    "`[species.spread]`": (MODEL, (*_SPECIES, "spread")),
    "`[species.spread.correlation]`": (MODEL, (*_SPECIES, "spread", "correlation")),
    "`[[trace]]`": (JOB, ("trace", 0)),
    "`[trace.columns]`": (JOB, ("trace", 0, "columns")),
    "`[trace.field_calibration]`": (JOB.replace('field_unit = "mT"', ""), ("trace", 0, "field_calibration")),
    "`[[lines]]`": (LINES, ("lines", 0)),
    "`[fit]`": (JOB, ("fit",)),
    "`[species.crystal_field]`": (FIELD, (*_SPECIES, "crystal_field")),
    "`[[ion]]`": (ION, _ION),
    "`octahedral`": (ION, (*_ION, "octahedral")),
    "`racah`": (ION, (*_ION, "racah")),
    "`ligand`": (ION, (*_ION, "ligand", 0)),
    "`geometry`": (ION, (*_ION, "geometry")),
    "`geometry.bonds`, for each symbol": (ION, (*_ION, "geometry", "bonds", "O")),
    "`orbitals`": (ION, (*_ION, "orbitals")),
    "`wybourne`, `stevens`": (ION, (*_ION, "wybourne")),
    "`slater`": (ION, (*_ION, "slater")),
}
LIGAND = {"position": [0, 0, 1], "e_sigma": "7000 cm^-1"}
GEOMETRY = {"xyz": "Fe 0 0 0\nO 0 0 2.1", "bonds": {"O": {"e_sigma": "7000 cm^-1"}}}


def of(toml: str):
    return tomllib.loads(f"value = {toml}")["value"]


def around(heading: str, name: str) -> tuple[dict, dict]:
    """Return a file in which a key may stand, and the table in it where it goes."""
    text, path = PLACES[heading]
    tree = copy.deepcopy(tomllib.loads(text))
    top = tree.get("ion", tree["species"] if "species" in tree else [None])[0]
    if path[:1] == ("ion",):
        form = next((step for step in path[2:3] if step not in ("octahedral", "racah", "slater")), None)
        if form is not None:
            del top["octahedral"]
            top[form] = {"ligand": [LIGAND.copy()], "geometry": copy.deepcopy(GEOMETRY)}.get(form, {})
        rank = next((shell for shell in SHELLS if name in keys.ORBITALS[shell] or name in keys.COEFFICIENTS[shell]), 2)
        if form in ("orbitals", "wybourne") and rank != 2:
            top["name"] = SHELLS[rank]
            del top["racah"]
        if form == "orbitals":
            top[form] = {orbital: "0 eV" for orbital in keys.ORBITALS[rank]}
        if path[2:3] == ("slater",):
            top |= {"slater": {"F2": "1 eV", "F4": "1 eV", "F6": "1 eV"}, "name": "Er3+", "wybourne": {"B4_0": "1 eV"}}
            del top["racah"], top["octahedral"]
    if heading == "`[sample]`":
        form = (keys.SAMPLE[name].forms or ("powder",))[0] if name in keys.SAMPLE else "powder"
        tree["sample"] = {"form": form} | ({"order": 0.5} if form == "aligned" else {})
    if heading == "`[[trace]]`" and name in ("axis", "from", "angle", "angle_uncertainty"):
        tree["sample"], tree["trace"][0]["angle"] = {"form": "crystal"}, "0 deg"
    if heading == "`[species.width]`" and name in ("a", "b", "c"):
        tree["sample"] = {"form": "solution"}
    if (heading, name) == ("`[species.spread]`", "tilt"):
        tree["sample"] = {"form": "crystal"}
    if heading == "`[trace.field_calibration]`":
        tree["trace"][0]["field_calibration"] = {"slope": "1 mT/V"}
    table = tree
    for step in path:
        if isinstance(table, dict):
            table = table.setdefault(step, {})
        else:
            table = table[step]
    beside = {
        ("`[[species.exchange]]`", "tilt"): {"dipolar": "1, 1, -2 MHz"},
        ("`[species.width]`", "gaussian"): {"lorentzian": "1 mT"},
        ("`[species.width]`", "b"): {"a": "0.2 mT"},
        ("`[species.width]`", "c"): {"a": "0.2 mT"},
        ("`[[trace]]`", "smoothness"): {"baseline": "smooth"},
        ("`[[trace]]`", "asymmetry"): {"baseline": "asymmetric", "detect": "absorption"},
        ("`[fit]`", "loss_scale"): {"loss": "huber"},
    }
    table |= beside.get((heading, name), {})
    instead = {"element": "isotope", "angles": "position", "field_calibration": "field_unit", "slater": "racah"}
    if heading != "`[sample]`":
        table.pop(instead.get(name, ""), None)
    return tree, table


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Data files by the names of the examples."""
    place = tmp_path_factory.mktemp("keys")
    field = np.linspace(330.0, 342.0, 240)
    signal = np.random.default_rng(3).normal(size=(2, field.size))
    for name, values in (("kiln-07", signal[0]), ("empty-tube", signal[1])):
        np.savetxt(place / f"{name}.csv", np.column_stack([field, values]), delimiter=",", fmt="%.6f")
    return place


def read(tree: dict, folder: Path):
    """Read a file of whichever kind and return what was understood, for comparison."""
    if "ion" in tree:
        (ion,) = crystal_fields_of(tree).values()
        return ion.name, ion.measured, ion.model.parameters, ion.model.reduction, ion.model.space
    if "fit" not in tree:
        model = model_from(tree)
        species = [dataclasses.replace(one, crystal_field=None) for one in model.species]
        return species, model.sweep, model.sample, model.tolerance
    if "lines" in tree:
        text = "angle_deg,field_mT\n" + "\n".join(f"{angle},{330 + angle / 100}" for angle in range(0, 90, 10))
        (folder / "lines.csv").write_text(text, encoding="utf-8")
        tree["lines"][0]["file"] = "lines.csv"
    job = read_job(folder / "job.toml", tables=tree)
    with np.printoptions(threshold=10**6, precision=17):
        return repr(dataclasses.asdict(dataclasses.replace(job, units={})))


CASES = [
    pytest.param(heading, name, key, id=f"{heading.strip('`[]')}.{name}")
    for heading, _, table in PAGES.SECTIONS
    for name, key in table.items()
    if key.example
]


def test_the_page_is_what_the_code_says() -> None:
    assert PAGES.KEYS_PAGE.read_text(encoding="utf-8") == PAGES.keys_page(), "run scripts/make_pages.py"


@pytest.mark.parametrize(("heading", "name", "key"), CASES)
def test_every_key_is_taken_as_the_page_has_it(heading: str, name: str, key: keys.Key, folder: Path) -> None:
    """Its example is read; its default means what leaving it out means; a quantity without a unit is refused."""
    tree, table = around(heading, name)
    table[name] = of(key.example)
    read(tree, folder)
    if key.default:
        tree, table = around(heading, name)
        table[name] = of(key.default)
        written = read(tree, folder)
        tree, table = around(heading, name)
        table.pop(name, None)
        assert read(tree, folder) == written
    kind = re.search(r"(field per voltage|field|energ|frequency|angle|temperature)", key.value)
    if kind is not None:
        tree, table = around(heading, name)
        table[name] = 1.5
        with pytest.raises(InputError) as caught:
            read(tree, folder)
        assert name in str(caught.value)
        wanted = {"energ": "energy"}.get(kind[1], kind[1])
        assert any(unit in caught.value.right for unit in UNITS[wanted])


@pytest.mark.parametrize("heading", [heading for heading in PLACES if heading != "`[species.stevens]`"])
def test_every_key_that_is_taken_stands_on_the_page(heading: str, folder: Path) -> None:
    """A reader that meets a key it cannot know lists all it does know: these are the rows of the page."""
    page = PAGES.KEYS_PAGE.read_text(encoding="utf-8")
    rows = page.split(f"\n## {heading}\n")[1].split("\n## ")[0]
    listed = {name for row in re.findall(r"^\| (`.*?) \|", rows, re.MULTILINE) for name in re.findall(r"`(.*?)`", row)}
    tree, table = around(heading, "")
    table["?"] = 1
    with pytest.raises(InputError) as caught:
        read(tree, folder)
    known = set(caught.value.right.removeprefix("known: ").split(", "))
    if heading == "`[[ion]]`":
        known -= set(keys.FIELD)
    if heading in ("`orbitals`", "`wybourne`, `stevens`"):
        assert known < listed  # those of one shell
    else:
        assert known == listed


def test_every_table_of_keys_stands_on_the_page() -> None:
    shown = {frozenset(table) for _, _, table in PAGES.SECTIONS}
    joined = {frozenset(keys.ION), frozenset(keys.FIELD_FORMS)}  # other tables together, and a part of one
    tables = [value for name, value in vars(keys).items() if name.isupper() and not name.startswith("_")]
    tables = [table for table in tables if isinstance(table, type(keys.SWEEP)) and frozenset(table) not in joined]
    assert len(tables) > 20
    assert [list(table) for table in tables if frozenset(table) not in shown] == []
