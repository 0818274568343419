"""``spinfit quantify``: how many spins a trace stands for, relative to a reference."""

from __future__ import annotations

import argparse
import math
from typing import Any

from spinfit.commands.measured import add_reading_options
from spinfit.commands.screen import Screen, quantity
from spinfit.errors import InputError

NAME = "quantify"
SUMMARY = "relative number of spins: a trace's double integral, or fitted area, against a reference's"
EXAMPLES = (
    "spinfit quantify glaze.csv --reference standard.csv --gain 2000 --reference-gain 500",
    "spinfit quantify glaze.csv --reference standard.csv --conditions bench.toml --baseline 2",
    "spinfit quantify glaze.toml --reference standard.toml --json",
)
HIGHEST_ORDER = 6


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument(
        "trace", metavar="TRACE", help="data file; a job (.toml) is fitted and its area compared too; or an outcome"
    )
    parser.add_argument("--reference", metavar="TRACE", required=True, help="what to compare with, in the same forms")
    parser.add_argument(
        "--conditions", metavar="FILE.toml", help="[trace] and [reference] with the conditions below, in one file"
    )
    for prefix, of in (("", "the trace"), ("reference-", "the reference")):
        group = parser.add_argument_group(f"conditions of {of} (each for both, or for neither when it was the same)")
        group.add_argument(f"--{prefix}gain", metavar="VALUE", help="receiver gain, on a linear scale")
        group.add_argument(f"--{prefix}scans", metavar="N", help="sweeps that were added up; 1 for an average")
        group.add_argument(f"--{prefix}power", metavar="QUANTITY", help='microwave power, such as "2 mW"')
        group.add_argument(f"--{prefix}temperature", metavar="QUANTITY", help='such as "77 K"')
        group.add_argument(f"--{prefix}g", metavar="VALUES", help='"2.0036", "2.05, 2.26" or "2.04, 2.06, 2.26"')
        group.add_argument(f"--{prefix}spin", metavar="S", help='such as "1/2"')
        if prefix:
            group.add_argument(f"--{prefix}frequency", metavar="QUANTITY", help='such as "9.43 GHz"')
            group.add_argument(f"--{prefix}modulation", metavar="QUANTITY", help='peak to peak, such as "0.2 mT"')
    integration = parser.add_argument_group("integration")
    integration.add_argument(
        "--baseline",
        metavar="ORDER",
        default="1",
        help='polynomial order in the trace as measured (default: 1), or "asymmetric" for asymmetric least squares',
    )
    integration.add_argument("--smoothness", metavar="QUANTITY", help='of an asymmetric baseline, such as "40 mT"')
    for prefix in ("", "reference-"):
        integration.add_argument(f"--{prefix}range", metavar="FIELDS", help='integrate over "310, 360 mT" only')
        integration.add_argument(
            f"--{prefix}baseline-range",
            metavar="FIELDS",
            action="append",
            help='fields without lines, such as "310, 320 mT", once or more (default: a tenth of it at each end)',
        )
    add_reading_options(parser)


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Compare and print; 1 when an integral does not stand out of its noise."""
    from spinfit.commands.sides import side_of
    from spinfit.fitting.quantify import compare_spins

    order, smoothness = _baseline(args)
    sides = []
    for which, path in (("trace", args.trace), ("reference", args.reference)):
        window, baseline = _fields(args, which, order, smoothness)
        sides.append(side_of(path, which, args, screen, window, baseline))
    found = compare_spins(*sides)
    screen.emit(_record(found, *sides))
    screen.say(_text(found, *sides))
    return 0 if found.good else 1


def _baseline(args: argparse.Namespace) -> tuple[int | str, float | None]:
    smoothness = quantity(args.smoothness, "field", "--smoothness")
    if smoothness is not None and smoothness <= 0:
        raise InputError(f"{smoothness:g} mT", "write a positive length", place="--smoothness")
    if args.baseline == "asymmetric":
        return args.baseline, smoothness
    if smoothness is not None:
        raise InputError("stands without an asymmetric baseline", "add --baseline asymmetric", place="--smoothness")
    if not args.baseline.isdigit() or int(args.baseline) > HIGHEST_ORDER:
        raise InputError(f'"{args.baseline}"', f'write 0 to {HIGHEST_ORDER}, or "asymmetric"', place="--baseline")
    return int(args.baseline), None


def _fields(args: argparse.Namespace, which: str, order: int | str, smoothness: float | None) -> tuple[Any, Any]:
    """Return the window and the baseline of one side."""
    from spinfit.fitting.integral import Baseline
    from spinfit.units import parse

    prefix = "" if which == "trace" else "reference_"
    option = "--" + prefix.replace("_", "-")

    def pair(text: str, place: str) -> tuple[float, float]:
        low, high = parse(text, "field", place, count=2)[0]
        if not low < high:
            raise InputError(f'"{text}"', "write the smaller field first", place=place)
        return low, high

    window = getattr(args, prefix + "range")
    ranges = getattr(args, prefix + "baseline_range") or ()
    return (
        None if window is None else pair(window, f"{option}range"),
        Baseline(order, tuple(pair(text, f"{option}baseline-range") for text in ranges), smoothness),
    )


def _share(one: Any) -> dict[str, Any] | None:
    if one is None:
        return None
    return {"value": one.value, "uncertainty": one.uncertainty, "relative_parts": one.parts}


def _side(side: Any) -> dict[str, Any]:
    record: dict[str, Any] = {"name": side.name, "detect": side.detect}
    one = side.integral
    if one is not None:
        record["integral"] = {
            "value": one.value,
            "uncertainty": one.uncertainty,
            "uncertainty_noise": one.noise,
            "uncertainty_baseline": one.baseline,
            "uncertainty_truncation": one.truncation,
            "lost_if_gaussian": one.lost[0],
            "lost_if_lorentzian": one.lost[1],
            "tails_at_most": one.tails,
            "other_baselines": dict(one.others),
            "range_mT": [one.field[0], one.field[-1]],
            "centre_mT": one.centre,
            "narrowest_width_mT": one.width,
        }
    if side.fitted is not None:
        record["fitted_area"] = {"value": side.fitted.value, "uncertainty": side.fitted.uncertainty}
        record["fractions"] = {name: {"value": v, "uncertainty": s} for name, (v, s) in side.fitted.fractions.items()}
    return record


def _record(found: Any, trace: Any, reference: Any) -> dict[str, Any]:
    return {
        "ratio": _share(found.ratio),
        "ratio_fitted": _share(found.fitted),
        "species": {name: _share(one) for name, one in found.species.items()},
        "factors": [
            {"name": f.name, "trace": f.trace, "reference": f.reference, "factor": f.factor} for f in found.factors
        ],
        "trace": _side(trace),
        "reference": _side(reference),
        "warnings": [{"code": code, "text": text} for code, text in found.notes],
    }


def _text(found: Any, trace: Any, reference: Any) -> str:
    from spinfit.report.layout import table, wrapped
    from spinfit.report.numbers import short, with_uncertainty

    blocks = [f"{trace.name} against {reference.name}, numbers of spins"]
    rows = []
    for words, one in (("by integration", found.ratio), ("by fitted areas", found.fitted)):
        if one is not None:
            rows.append(
                [words, with_uncertainty(one.value, one.uncertainty), _percent(one.uncertainty / abs(one.value))]
            )
    rows += [
        [f"{name} alone", with_uncertainty(one.value, one.uncertainty), _percent(one.uncertainty / abs(one.value))]
        for name, one in found.species.items()
    ]
    blocks.append(
        table(["spins, trace / reference", "ratio", "uncertainty"], rows) if rows else "no ratio can be given"
    )
    integrals = [(side, side.integral) for side in (trace, reference) if side.integral is not None]
    if integrals:
        heads = ["integral of", "value", "noise", "baseline", "tails", "lost if Gaussian", "if Lorentzian"]
        heads += ["tails at most", "range / mT"]
        blocks.append(
            table(
                heads,
                [
                    [
                        side.name,
                        short(one.value, 5),
                        *(_percent(part / abs(one.value)) for part in (one.noise, one.baseline, one.truncation)),
                        *map(_percent, (*one.lost, one.tails)),
                        f"{one.field[0]:.5g} to {one.field[-1]:.5g}",
                    ]
                    for side, one in integrals
                ],
            )
        )
        names = [name for name, _ in integrals[0][1].others]
        rows = [[name, *(_changed(dict(one.others).get(name), one.value) for _, one in integrals)] for name in names]
        blocks.append(table(["with another baseline", *(side.name for side, _ in integrals)], rows))
    rows = [[f.name, f.trace, f.reference, short(f.factor, 5)] for f in found.factors]
    blocks.append(table(["correction", "trace", "reference", "factor"], rows) if rows else "no corrections")
    blocks.append("\n".join(wrapped(f"warning: {text}") for _, text in found.notes))
    return "\n\n".join(block for block in blocks if block)


def _percent(part: float) -> str:
    if not math.isfinite(part):
        return "-"
    return "0 %" if abs(part) < 5e-5 else f"{100 * part:.{2 if abs(part) < 0.995 else 3}g} %"


def _changed(other: float | None, value: float) -> str:
    return "-" if other is None or not value else f"{100 * (other / value - 1):+.1f} %"
