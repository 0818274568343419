"""``spinfit ion``: configuration, ground term and level, Landé g and moments of free ions."""

from __future__ import annotations

import argparse
from typing import Any

from spinfit.commands.screen import Screen, number

NAME = "ion"
SUMMARY = "free ions: configuration, ground term and level, Landé g, moments"
EXAMPLES = ("spinfit ion Er3+ Cu2+", 'spinfit ion "Cr(III)" --g-spin 2', "spinfit ion 3d7 4F9/2 --json")


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument(
        "name", nargs="+", metavar="NAME", help="Er3+, Er(III), Er+3, a configuration (3d7) or level (4F9/2)"
    )
    parser.add_argument("--g-spin", metavar="G", help="g of the spin (default: the free electron's, CODATA)")
    parser.add_argument("--g-orbital", metavar="G", help="g of the orbital moment (default: 1)")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Look the ions up and print them."""
    from spinfit.ion import lookup
    from spinfit.report.tables import table, wrapped

    g_spin, g_orbital = number(args.g_spin, "--g-spin"), number(args.g_orbital, "--g-orbital")
    found = [lookup(name, g_spin=g_spin, g_orbital=1.0 if g_orbital is None else g_orbital) for name in args.name]
    screen.emit([level.as_record() for level in found])
    headings = ["ion", "configuration", "level", "S", "L", "J", "g_J", "p / muB", "spin only", "lambda / cm^-1"]
    screen.say(table(headings, [_row(level) for level in found], left=(0, 1, 2)))
    for note in dict.fromkeys(f"{level.ion}: {level.note}" for level in found if level.note):
        screen.say(wrapped(note))
    return 0


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
