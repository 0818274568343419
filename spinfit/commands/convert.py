"""``spinfit convert``: any two of g, field and frequency give the third; energies between units."""

from __future__ import annotations

import argparse
from typing import Any

from spinfit.commands.screen import Screen, number, quantity
from spinfit.errors import InputError

NAME = "convert"
SUMMARY = "any two of g, field and frequency give the third; energies between units"
EXAMPLES = (
    'spinfit convert --g 2.0036 --frequency "9.43 GHz"',
    'spinfit convert --field "336.2 mT" --frequency "9.43 GHz"',
    'spinfit convert "0.3 cm^-1"',
    'spinfit convert "-540 MHz" --g 2.26',
)
ENERGY_UNITS = ("MHz", "GHz", "cm^-1", "K", "meV", "eV")
FIELD_UNITS = ("mT", "T", "G")


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("quantity", nargs="?", metavar="QUANTITY", help='an energy or field, such as "0.3 cm^-1"')
    parser.add_argument("--g", help="g value")
    parser.add_argument("--field", help='such as "336.2 mT"')
    parser.add_argument("--frequency", help='such as "9.43 GHz"')


def third(g: float | None, field: float | None, frequency: float | None) -> tuple[float, float, float]:
    """Return g, field (mT) and frequency (MHz) from any two of them."""
    from spinfit.units import field_of, frequency_of, g_of

    if sum(value is None for value in (g, field, frequency)) != 1:
        raise InputError(
            "wanted are exactly two of --g, --field and --frequency",
            'such as --g 2.0036 --frequency "9.43 GHz", or a quantity such as "0.3 cm^-1"',
            place="convert",
        )
    for option, value in (("--g", g), ("--field", field), ("--frequency", frequency)):
        if value is not None and value <= 0:
            raise InputError(f"{value:g}", "write a positive value", place=option)
    if frequency is None:
        return g, field, frequency_of(g, field)
    return (g_of(field, frequency), field, frequency) if g is None else (g, field_of(g, frequency), frequency)


def all_units(text: str, g: float | None) -> dict[str, float]:
    """Return a quantity in every unit of its kind and, with a g, as field or energy as well."""
    from spinfit.units import MU_B_OVER_H, kind_of, parse, to_unit

    # The kind is in the unit, which only `parse` can find: energies first, then fields.
    try:
        value = parse(text, "energy", "QUANTITY")[0][0]
        kind = "energy"
    except InputError as error:
        unit = text.strip().rpartition(" ")[2]
        try:
            if kind_of(unit) != "field":
                raise error
        except InputError:
            raise error from None
        value, kind = parse(text, "field", "QUANTITY")[0][0], "field"
    if g == 0:
        raise InputError("0 turns no energy into a field", "write a g that is not 0", place="--g")
    own = {unit: to_unit(value, unit, kind) for unit in (ENERGY_UNITS if kind == "energy" else FIELD_UNITS)}
    if g is None:
        return own
    other = value / (g * MU_B_OVER_H) if kind == "energy" else value * g * MU_B_OVER_H
    kind = "field" if kind == "energy" else "energy"
    return own | {unit: to_unit(other, unit, kind) for unit in (FIELD_UNITS if kind == "field" else ENERGY_UNITS)}


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Convert and print."""
    from spinfit.report.layout import table

    g = number(args.g, "--g")
    if args.quantity is not None:
        for option, given in (("--field", args.field), ("--frequency", args.frequency)):
            if given is not None:
                raise InputError("stands beside a quantity", "give one or the other", place=option)
        values = all_units(args.quantity, g)
        screen.emit({"quantity": args.quantity, "g": g, "values": values})
        screen.say(table(["value", "unit"], [[f"{value:.9g}", unit] for unit, value in values.items()], left=(1,)))
        return 0
    found = third(g, quantity(args.field, "field", "--field"), quantity(args.frequency, "frequency", "--frequency"))
    record: dict[str, Any] = dict(zip(("g", "field_mT", "frequency_MHz"), found, strict=True))
    screen.emit(record)
    screen.say(f"g = {found[0]:.8g}, field = {found[1]:.8g} mT, frequency = {found[2] / 1e3:.9g} GHz")
    return 0
