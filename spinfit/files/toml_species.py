"""``[[species]]`` tables: spins, tensors, nuclei, couplings, widths and spreads."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from fractions import Fraction
from typing import Any, TypeVar

from spinfit.errors import InputError, nearest
from spinfit.files.keys import (
    CORRELATION,
    EXCHANGE,
    NUCLEUS,
    SPECIES,
    SPIN,
    SPREAD,
    STEVENS,
    TREATMENTS,
    WIDTH,
)
from spinfit.files.toml_crystal_field import field_from_table
from spinfit.files.toml_table import Given, Table, describe, is_finite, is_number
from spinfit.ion.lande import lookup
from spinfit.ion.parameters import start_parameters
from spinfit.ion.species_field import SpeciesField, spin_of
from spinfit.isotopes import isotope, natural
from spinfit.species import NO_TILT, Exchange, Nucleus, Species, Spin, Spread, Width
from spinfit.units import G_ELECTRON

Path = tuple[str | int, ...]
Built = TypeVar("Built")

TENSOR = (1, 2, 3)
LARGEST_DIMENSION = 4096
"""One complex matrix of this size takes 0.27 GB; several are needed at once."""
MOST_NUCLEI = 1000
PARTED = 0.01
"""Half the distance in g that is put between equal components of a start: about 1.5 mT at 9.5 GHz."""


def read_species(
    tables: Sequence[tuple[str, Any]], given: Given, *, form: str, auto: bool, width: bool = True
) -> tuple[Species, ...]:
    """Read every ``[[species]]`` table.

    Parameters
    ----------
    tables : sequence of (place, table)
    given : dict
        Receives the unit of each value that the file gives, by its path in the model.
    form : str
        Of the sample: ``a``, ``b`` and ``c`` are widths of solutions only.
    auto : bool
        Whether starts are guessed: then g and widths may be missing.
    """
    if not tables:
        raise InputError("is missing", 'write [[species]] with name = "...", S = "1/2", g = ...', place="species")
    found: list[Species] = []
    for n, (place, data) in enumerate(tables):
        table = Table(data, place, SPECIES, path=("species", n), given=given)
        name = table.name("name")
        if name is None:
            if len(tables) > 1:
                table.require("name", '"..." (there are several species)')
            name = "species"
        if name == "sample":
            raise table.error("name", '"sample" is the name of the sample', "choose another name")
        if any(other.name == name for other in found):
            raise table.error("name", f'two species are called "{name}"', "give one of them another name")
        found.append(_species(table, name, form, auto, width))
    return tuple(found)


def _species(table: Table, name: str, form: str, auto: bool, needs_width: bool) -> Species:
    ion = _ion(table)
    crystal_field = _crystal_field(table, ion)
    spins = _spins(table, auto, ion) if crystal_field is None else (_spin_of_field(table, crystal_field),)
    nuclei = _nuclei(table, len(spins))
    exchange = _exchange(table, len(spins))
    _check_dimension(table, spins, nuclei)
    amount = table.number("amount")
    if amount is not None and amount < 0:
        raise table.error("amount", f"{amount:g}", "an amount is not negative")
    spread = _spread(table, spins, nuclei, form)
    return _build(
        table,
        Species,
        name=name,
        spins=spins,
        nuclei=nuclei,
        exchange=exchange,
        width=_width(table, spread, form, auto or not needs_width),
        spread=spread,
        amount=1.0 if amount is None else amount,
        populations=_populations(table, spins),
        ion=ion,
        crystal_field=crystal_field,
    )


def _ion(table: Table) -> str | None:
    ion = table.text("ion")
    if ion is not None:
        try:
            lookup(ion)
        except InputError as error:
            raise InputError(error.found, error.right, place=table.at("ion")) from None
    return ion


def _crystal_field(table: Table, ion: str | None) -> SpeciesField | None:
    """Read ``[species.crystal_field]``, which stands in place of g, D and E."""
    data = table.table("crystal_field")
    if data is None:
        return None
    for key in (*SPIN, "spin"):
        if key != "S" and key in table:
            raise table.error(key, "stands beside crystal_field, from which it follows", "take one of the two out")
    if ion is None:
        table.require("ion", '"Cu2+" (the crystal field acts on it)')
    where = (*table.path, "crystal_field")
    return field_from_table(data, str(ion), place=table.at("crystal_field"), path=where, given=table.given)


def _spin_of_field(table: Table, field: SpeciesField) -> Spin:
    """Return the spin that a crystal field leads to; S may stand in the file and must then agree."""
    place = table.at("crystal_field")
    try:
        spin = spin_of(field)
    except InputError as error:
        raise InputError(error.found, error.right, place=place) from None
    if "S" in table and quantum_number(table, "S") != spin.S:
        found = f"{describe(table.data['S'])}, but the ground state of this crystal field has S = {spin.S:g}"
        raise table.error("S", found, "take S out, or change the field")
    return spin


def _build(table: Table, kind: type[Built], **values: Any) -> Built:
    """Make a dataclass; what it refuses is at this table."""
    try:
        return kind(**{key: value for key, value in values.items() if value is not None})
    except InputError as error:
        place = error.place
        raise InputError(error.found, error.right, place=table.at(place) if place else table.place) from None


# Spins -------------------------------------------------------------------------------------------


def _spins(table: Table, auto: bool, ion: str | None) -> tuple[Spin, ...]:
    inner = table.tables("spin")
    if not inner:
        return (_spin(_moved(table, (*table.path, "spins", 0)), auto, ion),)
    for key in SPIN:
        if key in table:
            right = f"move {key} into one of the [[species.spin]] tables"
            raise table.error(key, "stands beside [[species.spin]]", right)
    if len(inner) < 2:
        raise table.error("spin", "is one table", "write S and g in [[species]] itself, or a second [[species.spin]]")
    spins = []
    for n, (place, data) in enumerate(inner):
        spins.append(_spin(Table(data, place, SPIN, path=(*table.path, "spins", n), given=table.given), auto))
    return tuple(spins)


def _moved(table: Table, path: Path) -> Table:
    """Return the same table with its values standing elsewhere in the model."""
    return Table(table.data, table.place, tuple(table.data), path=path, given=table.given)


def quantum_number(table: Table, key: str) -> float:
    """Return a spin written as "3/2", "2", 1.5 or 2."""
    table.require(key, '"1/2"')
    value = table.data[key]
    right = f'write a positive multiple of 1/2, e.g. {key} = "5/2"'
    if isinstance(value, str) and re.fullmatch(r"\s*\d{1,6}(\s*/\s*\d{1,6}|\.\d{1,6})?\s*", value, re.ASCII):
        try:
            number = float(Fraction(value.replace(" ", "")))
        except ZeroDivisionError:
            number = math.nan
    elif is_number(value):
        number = float(value) if is_finite(value) else math.inf
    else:
        raise table.error(key, f"{describe(value)} is not a spin", right)
    if not (math.isfinite(number) and number > 0 and float(2 * number).is_integer()):
        raise table.error(key, f"{describe(value)} is an impossible spin", right)
    return number


def _start_of_g(S: float, ion: str | None) -> tuple[float, ...]:
    """Return g to begin with: that of the ion in its typical field, else the free electron's.

    Three components where they can be told apart, one where D hides them.  Typical fields are axial, and
    where two components coincide chi-squared has no slope that would part them: they are parted a little.
    """
    found = None if ion is None else start_parameters(ion, S)
    if found is None:
        return (G_ELECTRON,) * (3 if S == 0.5 else 1)
    g = found.as_spin().g
    if S != 0.5:
        return (sum(g) / 3,)
    return (g[0] - PARTED, g[1] + PARTED, g[2]) if abs(g[0] - g[1]) < PARTED else g


def _spin(table: Table, auto: bool, ion: str | None = None) -> Spin:
    S = quantum_number(table, "S")
    if not auto:
        table.require("g", "2.0 (or [perpendicular, parallel] or [x, y, z])")
    g = table.numbers("g", TENSOR, "g = [2.05, 2.06, 2.25]")
    if g is None:
        g = _start_of_g(S, ion)
    if not any(g):
        raise table.error("g", "is 0 in every direction", "write g = 2.0 or the like")
    if max(abs(v) for v in g) > 1000:
        raise table.error("g", f"{max(g, key=abs):g} is beyond reason", "g up to 1000 is taken")
    D, E, rhombicity = table.quantity("D", "energy"), table.quantity("E", "energy"), table.number("rhombicity")
    if E is not None and rhombicity is not None:
        raise table.error("rhombicity", "stands beside E", "write one of the two: rhombicity = E/D")
    if rhombicity is not None and D is None:
        raise table.error("rhombicity", "stands there without D", "write D as well: rhombicity = E/D")
    for key, value in (("D", D), ("E", E), ("rhombicity", rhombicity)):
        if S == 0.5 and value:
            raise table.error(key, "has no effect on S = 1/2", f"take {key} out, or give a larger S")
    return _build(
        table,
        Spin,
        S=S,
        g=g,
        D=D,
        E=E,
        rhombicity=rhombicity,
        g_tilt=table.quantities("g_tilt", "angle", 3),
        D_tilt=table.quantities("D_tilt", "angle", 3),
        stevens=_stevens(table, S),
    )


def _stevens(table: Table, S: float) -> tuple[tuple[tuple[int, int], float], ...]:
    data = table.table("stevens")
    if data is None:
        return ()
    place = table.at("stevens")
    found: list[tuple[tuple[int, int], float]] = []
    for key in data:
        match = re.fullmatch(r"B([0-9]{1,3})_(m?)([0-9]{1,3})", key, re.ASCII)
        if match is None:
            right = nearest(key.replace("-", "m"), STEVENS)
            right = right if right.startswith("did") else "write B2_0, B4_3, B4_m3 (q = -3), ..."
            raise InputError(f'"{key:.40}" is no operator', right, place=place)
        k, q = int(match[1]), int(match[3]) * (-1 if match[2] else 1)
        if key not in STEVENS:
            raise InputError(f"there is no operator {key}", "k is 2, 4 or 6 and q from -k (m) to k", place=place)
        if k > 2 * S:
            found_text = f"{key} has no effect on S = {S:g}"
            raise InputError(found_text, f"k goes up to 2S = {2 * S:g}: take it out", place=place)
        inner = Table(data, place, STEVENS, path=(*table.path, "stevens", len(found)), given=table.given)
        found.append(((k, q), inner.quantity(key, "energy", attribute=1) or 0.0))
    return tuple(found)


def _check_dimension(table: Table, spins: Sequence[Spin], nuclei: Sequence[Nucleus]) -> None:
    """Refuse a spin space that no memory holds: electrons, and nuclei that shall be exact."""
    log = sum(math.log10(2 * spin.S + 1) for spin in spins)
    exact = [nucleus for nucleus in nuclei if nucleus.treat == "exact"]
    log += sum(map(_log_states, exact))
    if log <= math.log10(LARGEST_DIMENSION) + 1e-9:
        return
    size = f"{10**log:.0f}" if log < 9 else f"10^{log:.0f}"
    gigabytes = f"{16e-9 * 10 ** (2 * log):.3g}" if log < 100 else f"10^{2 * log - 8:.0f}"
    right = "use fewer or smaller spins"
    if exact:
        weakest = min(exact, key=lambda nucleus: max(map(abs, nucleus.A)))
        which = f"nucleus {nuclei.index(weakest) + 1} ({weakest.isotope or weakest.element})"
        right = f'drop the weakest coupled nuclei, {which} first, or write treat = "second order" for them'
    raise InputError(
        f"its spin space has {size} dimensions, one matrix of which takes {gigabytes} GB",
        f"up to {LARGEST_DIMENSION} is taken: {right}",
        place=table.place,
    )


def _log_states(nucleus: Nucleus) -> float:
    """Return log10 of the states of one exact nucleus; equivalent ones without P count by their total spin."""
    name = nucleus.isotope
    spins = [isotope(name).spin] if name else [one.spin for one in natural(str(nucleus.element)) if one.spin]
    if any(nucleus.P):
        return nucleus.count * math.log10(2 * max(spins) + 1)
    # a mixture of isotopes has one total spin for each kind
    return sum(math.log10(2 * spin * nucleus.count / len(spins) + 1) for spin in spins)


def _populations(table: Table, spins: Sequence[Spin]) -> tuple[float, ...] | None:
    values = table.data.get("populations")
    if values is None:
        return None
    count = round(math.prod(2 * spin.S + 1 for spin in spins))
    if not isinstance(values, list) or not all(is_finite(v) for v in values):
        raise table.error("populations", "is not a list of numbers", f"write {count} numbers, low to high")
    if len(values) != count:
        right = f"write {count}, one for each sublevel, low to high"
        raise table.error("populations", f"has {len(values)} numbers", right)
    if min(values) < 0 or not 0 < sum(values) < 1e9:
        raise table.error("populations", "has a negative number or nothing but 0", "write fractions that sum to 1")
    return tuple(float(v) / sum(values) for v in values)


# Nuclei and couplings ------------------------------------------------------------------------------


def _nuclei(table: Table, spins: int) -> tuple[Nucleus, ...]:
    found: list[Nucleus] = []
    for n, (place, data) in enumerate(table.tables("nucleus")):
        inner = Table(data, place, NUCLEUS, path=(*table.path, "nuclei", n), given=table.given)
        nucleus = _nucleus(inner, spins)
        if nucleus.name and any(other.name == nucleus.name for other in found):
            raise inner.error("name", f'two nuclei are called "{nucleus.name}"', "give one of them another name")
        found.append(nucleus)
    return tuple(found)


def _nucleus(table: Table, spins: int) -> Nucleus:
    name, element = table.text("isotope"), table.text("element")
    if (name is None) == (element is None):
        how = "both isotope and element" if name else "neither isotope nor element"
        raise InputError(f"gives {how}", 'write isotope = "63Cu" or element = "Cu"', place=table.place)
    spin = _nuclear_spin(table, name, element)
    table.require("A", '"-35, -60, -540 MHz"')
    A = table.quantities("A", "energy", TENSOR)
    P = table.quantities("P", "energy", TENSOR)
    if P is not None and any(P) and spin < 1:
        raise table.error("P", f"{name or element} has no quadrupole moment (I < 1)", "take P out")
    if P is not None and not any(P) and len(P) == 1:
        P = None
    label = table.name("name")
    if label in ("width", "spread", "stevens", "crystal_field") or (label or "x").isdigit():
        raise table.error("name", f'"{label}" means something else', "choose another name")
    couples_to = table.integer("couples_to", 1, 1000)
    if couples_to is not None and couples_to > spins:
        right = f"spins are counted from 1 to {spins}" if spins > 1 else "there is one spin: write 1, or nothing"
        raise table.error("couples_to", f"there is no spin {couples_to}", right)
    return _build(
        table,
        Nucleus,
        isotope=name,
        element=element,
        name=label,
        A=A,
        P=P,
        A_tilt=table.quantities("A_tilt", "angle", 3),
        P_tilt=table.quantities("P_tilt", "angle", 3),
        count=table.integer("count", 1, MOST_NUCLEI),
        couples_to=couples_to,
        treat=table.choice("treat", TREATMENTS),
    )


def _nuclear_spin(table: Table, name: str | None, element: str | None) -> float:
    """Return the (largest) nuclear spin, refusing what is unknown or has none."""
    try:
        spin = isotope(name).spin if name else max(one.spin for one in natural(str(element)))
    except InputError as error:
        raise InputError(error.found, error.right, place=table.at("isotope" if name else "element")) from None
    if spin == 0:
        found = f"{name} has no nuclear spin" if name else f"no natural isotope of {element} has a nuclear spin"
        raise table.error("isotope" if name else "element", found, "take this nucleus out")
    return spin


def _exchange(table: Table, spins: int) -> tuple[Exchange, ...]:
    found: list[Exchange] = []
    for n, (place, data) in enumerate(table.tables("exchange")):
        inner = Table(data, place, EXCHANGE, path=(*table.path, "exchange", n), given=table.given)
        if spins < 2:
            raise InputError("there is only one spin to couple", "write two or more [[species.spin]]", place=place)
        inner.require("between", "[1, 2]")
        between = inner.data["between"]
        if not (isinstance(between, list) and len(between) == 2 and all(type(k) is int for k in between)):
            raise inner.error("between", f"{describe(between)} is not a pair of spins", "write between = [1, 2]")
        for k in between:
            if not 1 <= k <= spins:
                raise inner.error("between", f"there is no spin {k}", f"spins are counted from 1 to {spins}")
        if any(set(between) == set(other.between) for other in found):
            right = "write one [[species.exchange]] for a pair"
            raise inner.error("between", f"spins {between[0]} and {between[1]} are coupled twice", right)
        exchange = _build(
            inner,
            Exchange,
            between=(between[0], between[1]),
            J=inner.quantity("J", "energy"),
            dipolar=inner.quantities("dipolar", "energy", TENSOR),
            tilt=inner.quantities("tilt", "angle", 3),
            antisymmetric=inner.quantities("antisymmetric", "energy", 3),
        )
        if exchange.tilt != NO_TILT and not any(exchange.dipolar):
            raise inner.error("tilt", "turns nothing", "write dipolar as well, or take tilt out")
        found.append(exchange)
    return tuple(found)


# Widths and spreads --------------------------------------------------------------------------------


def _width(table: Table, spread: Spread, form: str, auto: bool) -> Width:
    data = table.table("width")
    example = '[species.width] with gaussian = "1 mT"'
    if data is None:
        if not auto:
            raise InputError("is missing", f"write {example}", place=table.at("width"))
        return Width(gaussian=1.0)
    inner = Table(data, table.at("width"), WIDTH, path=(*table.path, "width"), given=table.given)
    for key in ("a", "b", "c"):
        if key in inner and form != "solution":
            right = "write gaussian or lorentzian, or [sample] form"
            raise inner.error(key, f"is a width of solutions and the sample is a {form}", f'{right} = "solution"')
    if "a" not in inner and ("b" in inner or "c" in inner):
        raise inner.error("b" if "b" in inner else "c", "stands there without a", "the width is a + b m + c m^2")
    hidden = inner.quantities("hidden_hyperfine", "energy", TENSOR)
    if hidden is not None and min(hidden) < 0:
        raise inner.error("hidden_hyperfine", f"{describe(inner.data['hidden_hyperfine'])}", "it must not be negative")
    width = Width(
        gaussian=inner.positive("gaussian", "field", zero=True) or 0.0,
        lorentzian=inner.positive("lorentzian", "field", zero=True) or 0.0,
        hidden_hyperfine=hidden or (0.0,),
        a=inner.positive("a", "field"),
        b=inner.quantity("b", "field"),
        c=inner.quantity("c", "field"),
    )
    some = max(width.gaussian, width.lorentzian, width.a or 0.0) > 0
    if not (some or min(width.hidden_hyperfine) > 0 or min(spread.g) > 0):
        raise InputError("no width is positive", f"write {example}", place=inner.place)
    return width


def _spread(table: Table, spins: Sequence[Spin], nuclei: Sequence[Nucleus], form: str) -> Spread:
    data = table.table("spread")
    if data is None:
        return Spread()
    inner = Table(data, table.at("spread"), SPREAD, path=(*table.path, "spread"), given=table.given)
    values: dict[str, Any] = {
        "g": inner.numbers("g", TENSOR, "g = [0.005, 0.005, 0.02]"),
        "D": inner.quantity("D", "energy"),
        "E": inner.quantity("E", "energy"),
        "A": inner.quantities("A", "energy", TENSOR),
        "tilt": inner.quantity("tilt", "angle"),
    }
    if values["tilt"] and form != "crystal":
        raise inner.error("tilt", f"is the mosaic of a crystal and the sample is a {form}", "take it out")
    for key, value in values.items():
        smallest = min(value) if isinstance(value, tuple) else value
        if smallest is not None and smallest < 0:
            raise inner.error(key, f"{describe(inner.data[key])}", "a spread is not negative")
    if all(spin.S == 0.5 for spin in spins):
        for key in ("D", "E"):
            if values[key]:
                raise inner.error(key, "has no effect on S = 1/2", "take it out, or give a larger S")
    if values["A"] and any(values["A"]) and not nuclei:
        raise inner.error("A", "there is no nucleus", "write [[species.nucleus]], or take it out")
    pairs = inner.table("correlation")
    if pairs is not None:
        own = Table(pairs, inner.at("correlation"), CORRELATION, path=inner.path, given=table.given)
        for key in CORRELATION:
            value = own.number(key, attribute=f"correlation_{key}")
            if value is not None and not -1 <= value <= 1:
                raise own.error(key, f"{value:g}", "a correlation lies between -1 and 1")
            values[f"correlation_{key}"] = value
    return _build(inner, Spread, **values)
