"""Typical crystal fields and repulsion parameters, from the package's tables; never used without being named."""

from __future__ import annotations

from functools import lru_cache

from spinfit.errors import InputError
from spinfit.ion.crystal_field import CrystalField, from_octahedral, from_orbitals, from_wybourne
from spinfit.ion.model import IonModel, racah_to_slater
from spinfit.ion.names import Shell, parse_name
from spinfit.ion.spin_orbit import read_table, spin_orbit_table
from spinfit.units import MHZ_PER_WAVENUMBER


@lru_cache(maxsize=1)
def _fields() -> dict[str, dict[str, str]]:
    return {row["ion"]: row for row in read_table("default_fields.csv")}


@lru_cache(maxsize=1)
def _repulsions() -> dict[str, dict[str, str]]:
    return {row["ion"]: row for row in read_table("repulsion.csv")}


@lru_cache(maxsize=1)
def _racahs() -> dict[str, dict[str, str]]:
    return {row["ion"]: row for row in read_table("racah.csv")}


def free_ion(name: str) -> tuple[IonModel, str]:
    """Return a free ion with repulsion and spin-orbit constants of the tables, and where they stand.

    Raises
    ------
    InputError
        When a constant that is needed is in no table.
    """
    shell, ion = open_shell(name), parse_name(name).name
    zeta, source = default_zeta(ion), [f"zeta: {spin_orbit_table()[ion].source}"]
    slater: dict[int, float] = {}
    if shell.count not in (1, 4 * shell.l + 1):
        row = _repulsions().get(ion) or _racahs().get(ion)
        if row is None:
            raise InputError(f"no repulsion parameters of {ion} are in the tables", "give a file with racah or slater")
        slater = default_slater(ion)
        if not slater:
            slater = racah_to_slater(*(float(row[key]) * MHZ_PER_WAVENUMBER for key in ("B_cm1", "C_cm1")))
        source.append(f"repulsion: {row['source']}")
    return IonModel(shell, zeta, slater, name=ion), "; ".join(source)


def ions_with_default() -> tuple[str, ...]:
    """Return the ions for which a typical field is at hand."""
    return tuple(_fields())


def _pairs(text: str) -> dict[str, float]:
    """Read "ten_Dq=8500;Ds=0" with energies in cm^-1 into MHz."""
    return {
        name: float(value) * MHZ_PER_WAVENUMBER for name, value in (part.split("=") for part in text.split(";") if part)
    }


def open_shell(name: str) -> Shell:
    """Return the one open p, d or f shell of an ion in a solid.

    A singly charged ion's s electron is counted into the d shell, as it goes in crystals (Fe+ is 3d7 there).

    Raises
    ------
    InputError
        Where there is no such shell, or more than one.
    """
    named = parse_name(name)
    if not named.shells:
        raise InputError(
            f"{named.name} is a level without a configuration", 'name an ion such as "Cu2+" or a configuration "3d9"'
        )
    shells = [s for s in named.open_shells if s.l > 0]
    d_shells = [s for s in named.shells if s.l == 2 and s.count]
    s_electrons = sum(s.count for s in named.open_shells if s.l == 0)
    if named.charge is not None and named.charge > 0 and s_electrons and d_shells:
        d = d_shells[-1]
        if d.count + s_electrons < d.capacity:
            return Shell(d.n, 2, d.count + s_electrons)
    if len(shells) != 1 or s_electrons:
        found = " and ".join(str(s) for s in named.open_shells) or "only closed shells"
        raise InputError(f"{named.name} has {found}", "a crystal field acts on an ion with one open p, d or f shell")
    return shells[0]


def default_slater(name: str) -> dict[int, float]:
    """Return F2, F4, F6 of an f ion from the table, MHz; empty where it has none."""
    row = _repulsions().get(name)
    return {} if row is None else {k: float(row[f"F{k}_cm1"]) * MHZ_PER_WAVENUMBER for k in (2, 4, 6)}


def default_zeta(name: str) -> float:
    """Return zeta of an ion from the table, MHz.

    Raises
    ------
    InputError
        When the table does not hold the ion.
    """
    constant = spin_orbit_table().get(name)
    if constant is None:
        raise InputError(f"no spin-orbit constant of {name} is known", 'give zeta, e.g. zeta = "450 cm^-1"')
    return constant.zeta_cm1 * MHZ_PER_WAVENUMBER


def default_space(shell: Shell, slater: dict[int, float]) -> str:
    """Return the whole configuration where its repulsion is known (or there is none), else Hund's term."""
    return "configuration" if slater or shell.count in (1, 4 * shell.l + 1) else "term"


def default_model(name: str) -> IonModel:
    """Return an ion in its typical field.

    The field's `remark` says what it is; print it with every result.

    Raises
    ------
    InputError
        When no typical field is at hand.
    """
    shell = open_shell(name)
    ion = parse_name(name).name
    row = _fields().get(ion)
    if row is None:
        raise InputError(
            f"no typical crystal field of {ion} is at hand", f"give one in a file, or use {', '.join(_fields())}"
        )
    field = _build(row, shell)
    racah = _pairs(row["repulsion"])
    slater = racah_to_slater(racah["B"], racah["C"]) if racah else default_slater(ion)
    model = IonModel(shell, default_zeta(ion), slater, field, space=default_space(shell, slater), name=ion)
    return model.with_covalency(float(row["reduction"]))


def _build(row: dict[str, str], shell: Shell) -> CrystalField:
    values = _pairs(row["parameters"])
    remark = row["remark"]
    if row["form"] == "orbitals":
        return from_orbitals(shell.l, values, remark=remark)
    if row["form"] == "octahedral":
        return from_octahedral(values["ten_Dq"], values["Ds"], values["Dt"], remark=remark)
    coefficients = {(int(name[1]), int(name[3:].replace("m", "-"))): value for name, value in values.items()}
    return from_wybourne(shell.l, coefficients, remark=remark)
