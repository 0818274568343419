"""Crystal fields in TOML: a file with one ``[[ion]]`` table an ion, or the table of one species.

::

    [[ion]]
    name = "Cu2+"
    source = "this glass, band maxima"       # printed with every result
    zeta = "829 cm^-1"                       # else from the table of constants
    reduction = 0.85                         # k of k L in the Zeeman operator
    covalency = 0.85                         # or k of L and of zeta together
    racah = {B = "900 cm^-1", C = "3800 cm^-1"}
    space = "configuration"                  # "configuration", "term", "level"
    measured = "2.05, 2.06, 2.33(1)"

and one form of the field: ``[ion.orbitals]``, ``[ion.octahedral]``, ``[[ion.ligand]]``, ``[ion.geometry]``,
``[ion.wybourne]`` or ``[ion.stevens]``.
"""

from __future__ import annotations

import math
import re
from collections.abc import Collection, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from spinfit.errors import InputError, nearest
from spinfit.files.keys import (
    BOND,
    COEFFICIENTS,
    FIELD,
    FIELD_FORMS,
    GEOMETRY,
    ION,
    LIGAND,
    OCTAHEDRAL,
    ORBITALS,
    RACAH,
    SLATER,
)
from spinfit.files.toml_table import Given, Table, load_toml
from spinfit.ion.crystal_field import (
    CrystalField,
    Ligand,
    from_octahedral,
    from_orbitals,
    from_overlap,
    from_stevens,
    from_wybourne,
    parameter_name,
)
from spinfit.ion.defaults import default_slater, default_space, default_zeta, open_shell
from spinfit.ion.model import SPACES, IonModel, racah_to_slater
from spinfit.ion.names import Shell, parse_name
from spinfit.ion.quench import MeasuredG, parse_measured
from spinfit.ion.species_field import FACTORS, LARGEST_FACTOR, SpeciesField, species_field

_EXAMPLE = "[ion.octahedral] with ten_Dq, [ion.orbitals], [[ion.ligand]], [ion.geometry], [ion.wybourne]"


@dataclass(frozen=True)
class GivenIon:
    """One ion of a crystal-field file."""

    name: str
    model: IonModel
    measured: MeasuredG | None = None


def read_crystal_fields(path: str | Path) -> dict[str, GivenIon]:
    """Read a crystal-field file.

    Returns
    -------
    dict of ion (canonical name) -> GivenIon

    Raises
    ------
    InputError
        Naming file, key, what was found and what would be right.
    """
    data, _ = load_toml(path)
    try:
        return crystal_fields_of(data)
    except InputError as error:
        raise error.at(file=path) from None


def crystal_fields_of(data: Mapping[str, Any]) -> dict[str, GivenIon]:
    """Make the ions of parsed TOML (see `read_crystal_fields`)."""
    table = Table(data, "", ("ion",))
    found: dict[str, GivenIon] = {}
    entries = table.tables("ion")
    if not entries:
        raise InputError("has no ion", 'write [[ion]] with name = "Cu2+" and a crystal field')
    for place, entry in entries:
        given = _read_ion(entry, place)
        if given.name in found:
            raise InputError(f"{given.name} stands there twice", "take one of the two out", place=place)
        found[given.name] = given
    return found


def _read_ion(entry: object, place: str) -> GivenIon:
    table = Table(entry, place, ION)
    table.require("name", '"Cu2+"')
    name = table.text("name") or ""
    try:
        canonical = parse_name(name).name
        shell = open_shell(name)
    except InputError as error:
        raise InputError(error.found, error.right, place=table.at("name")) from None
    measured = None
    if "measured" in table:
        try:
            measured = parse_measured(table.text("measured") or "")
        except InputError as error:
            raise InputError(error.found, error.right, place=table.at("measured")) from None
    return GivenIon(canonical, _model(table, canonical, shell), measured)


def model_from_table(data: Mapping[str, Any], ion: str, *, place: str = "crystal_field") -> IonModel:
    """Return the model of a table such as ``[species.crystal_field]``; the ion is the species' own.

    Raises
    ------
    InputError
    """
    table = Table(dict(data), place, FIELD)
    try:
        shell = open_shell(ion)
    except InputError as error:
        raise InputError(error.found, error.right, place=place) from None
    return _model(table, parse_name(ion).name, shell)


def field_from_table(
    data: object, ion: str, *, place: str, path: tuple[str | int, ...] = (), given: Given | None = None
) -> SpeciesField:
    """Return the crystal field of a species, and note the unit of each of its values.

    Parameters
    ----------
    path : tuple
        Where the field stands in the model.
    given : dict, optional
        Receives the units, by path.

    Raises
    ------
    InputError
    """
    noted: Given = {}
    table = Table(data, place, FIELD, given=noted)
    try:
        shell = open_shell(ion)
    except InputError as error:
        raise InputError(error.found, error.right, place=place) from None
    base, covalency = _bare_model(table, parse_name(ion).name, shell)
    racah = None
    if "racah" in table and base.slater:
        F2, F4 = base.slater[2], base.slater[4]
        racah = (F2 - 5 * F4 / 9) / 49, 5 * F4 / 63  # the inverse of racah_to_slater
    field = species_field(base, covalency=covalency, racah=racah)
    for k, name in enumerate(field.names):
        unit = _unit_of(name, noted)
        if given is not None:
            given[(*path, "values", k)] = unit
    return field


def _unit_of(name: str, noted: Given) -> str:
    """Return the unit in which the table gave a parameter, else that of wave numbers."""
    if name in FACTORS:
        return ""
    # e_sigma_O stands under the key e_sigma, e_pi under e_pi or e_pi_x.
    keys = sorted((path for path in noted if noted[path]), key=lambda path: path[-1] != name)
    alike = [path for path in keys if name.startswith(str(path[-1])) or str(path[-1]).startswith(f"{name}_")]
    return noted[alike[0]] if alike else "cm^-1"


def _model(table: Table, name: str, shell: Shell) -> IonModel:
    """Build the model from a checked table."""
    model, covalency = _bare_model(table, name, shell)
    return model if covalency is None else model.with_covalency(covalency)


def _bare_model(table: Table, name: str, shell: Shell) -> tuple[IonModel, float | None]:
    """Build the model without its covalency, and return that beside it."""
    field = _field(table, shell)
    zeta = table.quantity("zeta", "energy")
    if zeta is None:
        try:
            zeta = default_zeta(name)
        except InputError as error:
            raise InputError(error.found, error.right, place=table.at("zeta")) from None
    slater = _slater(table, name, shell)
    space = table.choice("space", SPACES)
    several = shell.count not in (1, 4 * shell.l + 1)
    if several and not slater and (space == "configuration" or (space is None and shell.l < 3)):
        form = (
            'racah = {B = "900 cm^-1", C = "3800 cm^-1"}' if shell.l == 2 else "slater = {F2 = ..., F4 = ..., F6 = ...}"
        )
        raise InputError(
            f"the whole configuration of {shell} needs its electron repulsion",
            f'write {form}, or space = "term" for its ground term alone',
            place=table.place,
        )
    model = IonModel(shell, zeta, slater, field, space=space or default_space(shell, slater), name=name)
    factors = {key: _factor(table, key) for key in FACTORS}
    if None not in factors.values():
        raise table.error(
            "covalency", "stands beside reduction", "write one: reduction acts on L, covalency on L and zeta"
        )
    if factors["reduction"] is not None:
        model = replace(model, reduction=factors["reduction"])
    return model, factors["covalency"]


def _factor(table: Table, key: str) -> float | None:
    value = table.number(key)
    if value is not None and not 0 < value <= LARGEST_FACTOR:
        raise table.error(key, f"{value:g}", "write a factor above 0 and near 1")
    return value


def _slater(table: Table, name: str, shell: Shell) -> dict[int, float]:
    """Read racah or slater; f ions fall back on the table of repulsion parameters."""
    if "racah" in table and "slater" in table:
        raise table.error("racah", "stands beside slater", "write one of the two")
    if "racah" in table:
        if shell.l != 2:
            raise table.error("racah", f"does not belong to {shell}", "write slater = {F2 = ..., F4 = ..., F6 = ...}")
        inner = _inner(table, "racah", RACAH)
        values = []
        for key in RACAH:
            inner.require(key, '"900 cm^-1"')
            values.append(inner.quantity(key, "energy") or 0.0)
        return racah_to_slater(*values)
    if "slater" in table:
        keys = SLATER[shell.l]
        inner = _inner(table, "slater", keys)
        for key in keys:
            inner.require(key, '"60000 cm^-1"')
        return {int(key[1:]): inner.quantity(key, "energy") or 0.0 for key in keys}
    return default_slater(name) if shell.l == 3 else {}


# ---------------------------------------------------------------- the forms


def _field(table: Table, shell: Shell) -> CrystalField:
    """Read the one form of the field that is given."""
    forms = [form for form in FIELD_FORMS if form in table]
    if not forms:
        raise InputError("has no crystal field", f"write one: {_EXAMPLE}", place=table.place)
    if len(forms) > 1:
        raise table.error(forms[1], f"stands beside {forms[0]}", "give the field in one form")
    form = forms[0]
    remark = table.text("source") or f"{form} field as given"
    reader = {
        "orbitals": _orbitals,
        "octahedral": _octahedral,
        "ligand": _ligands,
        "geometry": _geometry,
        "wybourne": _coefficients,
        "stevens": _coefficients,
    }[form]
    try:
        return replace(reader(table, shell, form), remark=remark)
    except InputError as error:
        # What the forms themselves refuse knows its inner place only.
        inner = error.place or ""
        place = inner if inner.startswith(table.place) else ".".join(p for p in (table.at(form), inner) if p)
        raise InputError(error.found, error.right, place=place) from None


def _inner(table: Table, key: str, keys: Collection[str]) -> Table:
    """Return an inner table that notes its units beside the outer one's."""
    return Table(table.table(key), table.at(key), keys, path=(*table.path, key), given=table.given)


def _orbitals(table: Table, shell: Shell, form: str) -> CrystalField:
    inner = _inner(table, form, ORBITALS[shell.l])
    return from_orbitals(shell.l, {key: inner.quantity(key, "energy") or 0.0 for key in inner.data})


def _octahedral(table: Table, shell: Shell, form: str) -> CrystalField:
    if shell.l != 2:
        raise table.error(form, f"is a form for d shells, not {shell}", "give wybourne or stevens coefficients")
    inner = _inner(table, form, OCTAHEDRAL)
    inner.require("ten_Dq", '"12000 cm^-1"')
    values = [inner.quantity(key, "energy") or 0.0 for key in OCTAHEDRAL]
    return from_octahedral(*values)


def _coefficients(table: Table, shell: Shell, form: str) -> CrystalField:
    keys = {parameter_name(k, q): (k, q) for k in range(2, 2 * shell.l + 1, 2) for q in range(-k, k + 1)}
    inner = _inner(table, form, COEFFICIENTS[shell.l])
    if not inner.data:
        raise table.error(form, "is empty", 'write coefficients such as B4_0 = "-1750 cm^-1"')
    values = {keys[key]: inner.quantity(key, "energy") or 0.0 for key in inner.data}
    return from_wybourne(shell.l, values) if form == "wybourne" else from_stevens(shell, values)


def _bond(table: Table) -> dict[str, float]:
    """Read e_sigma and e_pi of a ligand or of a kind of ligands."""
    table.require("e_sigma", '"7000 cm^-1"')
    sigma = table.quantity("e_sigma", "energy") or 0.0
    if "e_pi" in table and ("e_pi_x" in table or "e_pi_y" in table):
        raise table.error("e_pi", "stands beside e_pi_x or e_pi_y", "write e_pi, or the two")
    both = table.quantity("e_pi", "energy") or 0.0
    pi_x, pi_y = (table.quantity(key, "energy") for key in ("e_pi_x", "e_pi_y"))
    return {
        "e_sigma": sigma,
        "e_pi_x": both if pi_x is None else pi_x,
        "e_pi_y": both if pi_y is None else pi_y,
    }


def _ligands(table: Table, shell: Shell, form: str) -> CrystalField:
    """Read [[ligand]] tables: a position or two angles, with e_sigma and e_pi."""
    ligands = []
    for place, entry in table.tables(form):
        inner = Table(entry, place, LIGAND, path=(place,), given=table.given)
        if ("position" in inner) == ("angles" in inner):
            raise InputError(
                "needs exactly one of position and angles",
                'write position = [0, 0, 2.1] or angles = "0, 0 deg" (theta, phi)',
                place=place,
            )
        if "position" in inner:
            x, y, z = inner.numbers("position", (3,), "position = [0, 0, 2.1]") or (0.0, 0.0, 0.0)
        else:
            theta, phi = inner.quantities("angles", "angle", 2) or (0.0, 0.0)
            x, y, z = math.sin(theta) * math.cos(phi), math.sin(theta) * math.sin(phi), math.cos(theta)
        turn = inner.quantity("turn", "angle") or 0.0
        ligands.append(Ligand((x, y, z), kind=inner.name("kind") or "", turn=turn, **_bond(inner)))
    return from_overlap(shell.l, ligands)


def _geometry(table: Table, shell: Shell, form: str) -> CrystalField:
    """Read [geometry]: an xyz-style list (symbol x y z a line, the metal first) and bonds by symbol."""
    inner = _inner(table, form, GEOMETRY)
    inner.require("xyz", '"""\nCu 0 0 0\nO 0 0 2.1\n"""')
    text = inner.data["xyz"]
    if not isinstance(text, str):
        raise inner.error("xyz", "is not a text", "write lines of symbol x y z in triple quotes, the metal first")
    atoms = parse_xyz(text, place=inner.at("xyz"))
    bonds = inner.table("bonds")
    if bonds is None:
        raise inner.error(
            "bonds", "is missing", f'write [{inner.at("bonds")}.{atoms[1][0]}] with e_sigma = "7000 cm^-1"'
        )
    metal = atoms[0][1]
    known = tuple(dict.fromkeys(symbol for symbol, _ in atoms[1:]))
    energies = {}
    for symbol, entry in bonds.items():
        if symbol not in known:
            raise InputError(f'no atom "{symbol}" in xyz', nearest(symbol, known), place=inner.at("bonds"))
        energies[symbol] = _bond(Table(entry, f"{inner.at('bonds')}.{symbol}", BOND, path=(symbol,), given=table.given))
    missing = [symbol for symbol in known if symbol not in energies]
    if missing:
        raise InputError(
            f'the bond of "{missing[0]}" is missing', 'write e_sigma = "..." for it', place=inner.at("bonds")
        )
    ligands = [
        Ligand((at[0] - metal[0], at[1] - metal[1], at[2] - metal[2]), kind=symbol, **energies[symbol])
        for symbol, at in atoms[1:]
    ]
    return from_overlap(shell.l, ligands)


def parse_xyz(text: str, *, place: str = "xyz") -> list[tuple[str, tuple[float, float, float]]]:
    """Read an xyz-style list: symbol x y z a line; a count and a comment line in front are skipped.

    Symbols may carry a label ("O1" and "O2" are then different kinds).
    """
    lines = [line.strip() for line in text.strip().splitlines()]
    if lines and re.fullmatch(r"\d+", lines[0]):
        lines = lines[2:]
    atoms = []
    for number, line in enumerate(lines, 1):
        if not line or line.startswith("#"):
            continue
        words = line.split()
        numbers = words[1:4]
        if len(words) != 4 or not re.fullmatch(r"[A-Za-z][A-Za-z0-9]*", words[0]) or not all(map(_is_float, numbers)):
            raise InputError(f'"{line:.40}" is not an atom', 'write "O 0.0 0.0 2.1"', place=f"{place}, line {number}")
        x, y, z = map(float, numbers)
        atoms.append((words[0], (x, y, z)))
    if len(atoms) < 2:
        raise InputError(f"{len(atoms)} atoms", "write the metal and at least one ligand", place=place)
    return atoms


def _is_float(word: str) -> bool:
    try:
        return math.isfinite(float(word))
    except ValueError:
        return False
