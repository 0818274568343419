"""``spinfit calibrate``: traces of g standards give the field axis's offset (and scale)."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from spinfit.commands.measured import add_reading_options, read_measured
from spinfit.commands.screen import Screen, number, quantity
from spinfit.errors import InputError, on_one_line

NAME = "calibrate"
SUMMARY = "the field axis's offset, and scale, from traces of g standards"
EXAMPLES = (
    "spinfit calibrate standard.csv --standard dpph",
    'spinfit calibrate standard.csv --g 2.0036 --g-uncertainty 0.0002 --frequency "9.40005 GHz"',
    "spinfit calibrate --list",
    'spinfit calibrate radical.csv chromium.csv --standard dpph --standard "Cr3+ in MgO"',
)


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("trace", nargs="*", metavar="TRACE", help="data file of a standard")
    known = parser.add_mutually_exclusive_group()
    known.add_argument(
        "--standard", action="append", metavar="NAME", help="known standard: once for all traces, or once for each"
    )
    known.add_argument("--g", action="append", metavar="VALUE", help="g of the standard: once, or once for each trace")
    parser.add_argument(
        "--g-uncertainty", action="append", metavar="VALUE", help="standard uncertainty of --g (default: 0)"
    )
    parser.add_argument("--frequency-uncertainty", metavar="QUANTITY", help='such as "0.2 MHz" (default: 0)')
    parser.add_argument("--list", action="store_true", help="list the known standards")
    add_reading_options(parser)


def _for_each(values: list[str] | None, count: int, option: str) -> list[str | None]:
    """Return one value for each trace from an option given once or once for each."""
    if values is None:
        return [None] * count
    if len(values) not in (1, count):
        raise InputError(
            f"given {len(values)} times for {count} traces", "give it once, or once for each", place=option
        )
    return list(values) * (count // len(values))


def _standards(args: argparse.Namespace) -> list[Any]:
    """Return the standard of each trace."""
    from spinfit.fitting.calibrate import Standard, standard

    if args.standard is None and args.g is None:
        raise InputError("no standard is named", "give --standard NAME or --g VALUE", place="calibrate")
    count = len(args.trace)
    if args.standard is not None:
        if args.g_uncertainty:
            raise InputError("stands beside --standard", "it belongs to --g", place="--g-uncertainty")
        return [standard(name) for name in _for_each(args.standard, count, "--standard")]
    sigmas = _for_each(args.g_uncertainty, count, "--g-uncertainty")
    made = []
    for text, sigma in zip(_for_each(args.g, count, "--g"), sigmas, strict=True):
        g = number(text, "--g", positive=True)
        uncertainty = number(sigma, "--g-uncertainty") or 0.0
        if uncertainty < 0:
            raise InputError(f"{sigma}", "an uncertainty is not negative", place="--g-uncertainty")
        made.append(Standard(f"g = {text}", g, uncertainty))
    return made


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Fit the standards' lines and print the correction."""
    from spinfit.fitting.calibrate import calibrate, read_standard, standards

    if args.list:
        return _list(screen, standards().values())
    if not args.trace:
        raise InputError("no trace is named", "give the data file of a standard, or --list", place="calibrate")
    sigma = quantity(args.frequency_uncertainty, "frequency", "--frequency-uncertainty", default=0.0)
    if sigma < 0:
        raise InputError(args.frequency_uncertainty, "an uncertainty is not negative", place="--frequency-uncertainty")
    readings = []
    for path, known in zip(args.trace, _standards(args), strict=True):
        trace = read_measured(path, args, needs_frequency=True)
        try:
            readings.append(
                read_standard(
                    on_one_line(Path(path).name),
                    trace.field[trace.used],
                    trace.signal[trace.used],
                    known,
                    frequency=trace.frequency,
                    frequency_uncertainty=sigma,
                    detect=trace.detect,
                )
            )
        except InputError as error:
            raise error.at(file=path) from error
    result = calibrate(readings)
    lines = job_lines(result)
    screen.emit(_record(result, lines))
    screen.say(_text(result, lines))
    return 0


def _list(screen: Screen, known: Any) -> int:
    from spinfit.report.layout import table
    from spinfit.report.numbers import with_uncertainty

    screen.emit([{"name": s.name, "g": s.g, "uncertainty": s.uncertainty, "source": s.source} for s in known])
    rows = [[s.name, with_uncertainty(s.g, s.uncertainty), s.description, s.source] for s in known]
    screen.say(table(["standard", "g", "what it is", "source"], rows, left=(0, 1, 2, 3)))
    return 0


def job_lines(result: Any) -> list[str]:
    """Return the lines to paste under a job's [[trace]]; the last digit is a tenth of the uncertainty's first."""
    from math import floor, log10

    sigma = result.field_uncertainty
    decimals = max(2, 1 - floor(log10(sigma))) if sigma > 0 else 6
    lines = [f'field_offset = "{result.offset:.{decimals}f} mT"']
    if result.scale_uncertainty is not None:
        lines.append(f"field_scale = {result.scale:.9g}")
    return [*lines, f'field_uncertainty = "{sigma:.2g} mT"']


def _record(result: Any, lines: list[str]) -> dict[str, Any]:
    return {
        "field_offset_mT": result.offset,
        "field_uncertainty_mT": result.field_uncertainty,
        "field_scale": result.scale,
        "field_scale_uncertainty": result.scale_uncertainty,
        "standards": [
            {
                "trace": r.trace,
                "standard": r.standard.name,
                "g": r.standard.g,
                "g_uncertainty": r.standard.uncertainty,
                "frequency_MHz": r.frequency,
                "indicated_mT": r.line.centre,
                "indicated_uncertainty_mT": r.line.uncertainty,
                "known_mT": r.known,
                "offset_mT": r.offset,
                "uncertainty_mT": r.uncertainty,
                "shape": r.line.shape,
                "width_mT": r.line.width,
                "phase_rad": r.line.phase,
            }
            for r in result.readings
        ],
        "job_lines": lines,
    }


def _text(result: Any, lines: list[str]) -> str:
    from math import degrees

    from spinfit.report.layout import table, wrapped
    from spinfit.report.numbers import small, with_uncertainty

    rows = [
        [
            r.trace,
            r.standard.name,
            with_uncertainty(r.standard.g, r.standard.uncertainty),
            with_uncertainty(r.line.centre, r.line.uncertainty),
            with_uncertainty(r.known, (r.g_part**2 + r.frequency_part**2) ** 0.5),
            with_uncertainty(r.offset, r.uncertainty),
            f"{r.line.shape} {r.line.width:.3g}",
            f"{degrees(r.line.phase):.1f}",
        ]
        for r in result.readings
    ]
    headings = [
        "trace",
        "standard",
        "g",
        "indicated / mT",
        "known / mT",
        "offset / mT",
        "line, width / mT",
        "phase / deg",
    ]
    budget = [
        f"{r.trace}: of the uncertainty {small(r.line.uncertainty)} mT is the fit's, {small(r.g_part)} mT that of the "
        f"standard's g, {small(r.frequency_part)} mT that of the frequency"
        for r in result.readings
    ]
    remarks = []
    if result.scale_uncertainty is not None:
        remarks.append(
            f"scale {with_uncertainty(result.scale, result.scale_uncertainty)}: the uncertainty of the field is that "
            "between the standards and grows outside them"
        )
    if result.chi2 is not None and result.chi2 > 9 * (len(result.readings) - 1):
        remarks.append(
            "the standards disagree by more than their uncertainties: check the traces and their frequencies"
        )
    remarks += [
        f"{r.trace}: the line's shape is not met by the fit ({100 * r.line.misfit:.0f} % off at worst)"
        for r in result.readings
        if r.line.misfit > 0.1
    ]
    text = [table(headings, rows, left=(0, 1)), "", *map(wrapped, budget), *map(wrapped, remarks)]
    return "\n".join([*text, "", "for the [[trace]] of a job:", "", *(f"    {line}" for line in lines)])
