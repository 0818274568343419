"""``spinfit ion``: configuration, ground term and level, Landé g and moments of free ions."""

from __future__ import annotations

import argparse
from typing import Any

from spinfit.commands.screen import Screen, number
from spinfit.errors import InputError

NAME = "ion"
SUMMARY = "free ions: configuration, ground term and level, Landé g, moments"
EXAMPLES = (
    "spinfit ion Er3+ Cu2+",
    'spinfit ion "Cr(III)" --g-spin 2',
    "spinfit ion 3d7 4F9/2 --json",
    "spinfit ion Co2+ --levels --terms --plot cobalt.png",
)


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument(
        "name", nargs="+", metavar="NAME", help="Er3+, Er(III), Er+3, a configuration (3d7) or level (4F9/2)"
    )
    parser.add_argument("--g-spin", metavar="G", help="g of the spin (default: the free electron's, CODATA)")
    parser.add_argument("--g-orbital", metavar="G", help="g of the orbital moment (default: 1)")
    parser.add_argument("--terms", action="store_true", help="all LS terms of the configuration")
    parser.add_argument(
        "--levels", action="store_true", help="levels of the ground term, and of the whole configuration where known"
    )
    parser.add_argument("--plot", metavar="FILE", help="one ion's ground term in a field (.png, .svg or .pdf)")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Look the ions up and print them."""
    from spinfit.ion import lookup
    from spinfit.report.layout import table, wrapped

    if args.plot is not None:
        from spinfit.commands.drawing import picture_kind

        picture_kind(args.plot)
        if len(args.name) != 1:
            raise InputError(f"{len(args.name)} ions", "name one ion to draw it", place="--plot")
    g_spin, g_orbital = number(args.g_spin, "--g-spin"), number(args.g_orbital, "--g-orbital")
    found = [lookup(name, g_spin=g_spin, g_orbital=1.0 if g_orbital is None else g_orbital) for name in args.name]
    more = [_details(args, level) for level in found] if args.terms or args.levels else [{} for _ in found]
    screen.emit([level.as_record() | extra for level, extra in zip(found, more, strict=True)])
    headings = ["ion", "configuration", "level", "S", "L", "J", "g_J", "p / muB", "spin only", "lambda / cm^-1"]
    screen.say(table(headings, [_row(level) for level in found], left=(0, 1, 2)))
    for note in dict.fromkeys(f"{level.ion}: {level.note}" for level in found if level.note):
        screen.say(wrapped(note))
    if args.terms or args.levels:
        from spinfit.report.ion_tables import details_text

        for level, extra in zip(found, more, strict=True):
            screen.say(f"\n{details_text(level, extra)}")
    if args.plot is not None:
        _plot(args.plot, found[0])
    return 0


def _details(args: argparse.Namespace, level: Any) -> dict[str, Any]:
    """Return terms and levels of one ion for the JSON document and the screen."""
    from spinfit.ion.details import level_details, term_details

    return (term_details(level) if args.terms else {}) | (level_details(level) if args.levels else {})


def _plot(path: str, level: Any) -> None:
    """Draw the ground term in a field."""
    from spinfit.commands.drawing import save_picture
    from spinfit.ion.lande import numbers_of
    from spinfit.report.ion_plots import term_figure
    from spinfit.units import MHZ_PER_WAVENUMBER

    lam = None if level.spin_orbit is None else level.spin_orbit.lambda_cm1
    if lam is None:
        raise InputError(f"no lambda of {level.ion} is known", "name an ion of the table", place="--plot")
    S, L, J = numbers_of(level)
    save_picture(path, term_figure(S, int(L), J, lam * MHZ_PER_WAVENUMBER, g_spin=level.g_spin))


def _row(level: Any) -> list[str]:
    coupling = level.spin_orbit
    return [
        level.ion,
        level.configuration or "-",
        level.term,
        level.S,
        level.L,
        level.J,
        "-" if level.g_J is None else f"{level.g_J:.5f}",
        f"{level.moment:.3f}",
        f"{level.spin_only_moment:.3f}",
        "-" if coupling is None or coupling.lambda_cm1 is None else f"{coupling.lambda_cm1:.6g}",
    ]
