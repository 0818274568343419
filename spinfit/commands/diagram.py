"""``spinfit diagram``: energy levels against the field in one direction, with the transitions."""

from __future__ import annotations

import argparse
import math
from typing import Any

from spinfit.commands.screen import Screen
from spinfit.errors import InputError, nearest

NAME = "diagram"
SUMMARY = "energy levels of a model against the field, with the transitions between them"
EXAMPLES = (
    "spinfit diagram chromium.toml --plot chromium.png",
    'spinfit diagram chromium.toml --direction "30, 0 deg" --field "0, 800 mT" -o levels.csv',
)
ROWS = 6
"""Fields at which levels are printed."""
LEVELS = 8
"""Levels that are printed; all of them are in the csv and the JSON document."""


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("model", metavar="MODEL.toml", help="model file")
    parser.add_argument(
        "--direction",
        metavar="QUANTITY",
        help='theta and phi of the field in molecular axes, such as "30, 0 deg" (default: the first angle of a '
        "crystal at its first site, else the axis z)",
    )
    parser.add_argument(
        "--field", metavar="QUANTITY", help='fields, such as "0, 800 mT" (default: 0 to the sweep\'s last)'
    )
    parser.add_argument("--points", metavar="N", default="401", help="number of fields (default: 401)")
    parser.add_argument("--species", metavar="NAME", help="which species (default: the first)")
    parser.add_argument("--plot", metavar="FILE", help="draw it (.png, .svg or .pdf)")
    parser.add_argument("-o", "--output", metavar="FILE.csv", help="write the levels at every field")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Compute the levels, print, write and draw them."""
    from spinfit.files.job import read_model

    if args.plot:
        from spinfit.commands.drawing import picture_kind

        picture_kind(args.plot)
    model = read_model(args.model)
    one = _species(args, model)
    direction, microwave, angles = _direction(args, model)
    fields, points = _fields(args, model)
    try:
        system, left_out, several = _system(one, model)
        found = _found(one, model, system, (direction, microwave), fields, points)
    except InputError as error:
        raise error.at(file=args.model) from error
    for text in _remarks(one, system, left_out, several):
        screen.aside(text)
    _write(args, model, found)
    if not screen.as_json:
        screen.say(_text(one.name, found, angles, model.sweep.frequency))
    screen.emit(
        {
            "species": one.name,
            "system": system.label,
            "theta_deg": angles[0],
            "phi_deg": angles[1],
            "frequency_MHz": model.sweep.frequency,
            "field_mT": found.fields,
            "energy_MHz": found.energies.T,
            "transitions": _rows(found),
        }
    )
    return 0


def _species(args: argparse.Namespace, model: Any) -> Any:
    names = [one.name for one in model.species]
    if args.species is None:
        return model.species[0]
    if args.species not in names:
        raise InputError(f'there is no species "{args.species}"', nearest(args.species, names), place="--species")
    return model.species[names.index(args.species)]


def _direction(args: argparse.Namespace, model: Any) -> tuple[Any, Any, tuple[float, float]]:
    """Return the static field's direction, the microwave field's, and theta and phi in degrees."""
    import numpy as np

    from spinfit.crystal import site_directions
    from spinfit.units import parse

    microwave: Any = model.sweep.microwave
    if args.direction is not None:
        theta, phi = parse(args.direction, "angle", "--direction", count=2)[0]
    elif model.sample.form == "crystal":
        _, field, wave, *_ = site_directions(model.sample, model.sample.angles)
        theta, phi = math.acos(max(-1.0, min(1.0, field[0, 2]))), math.atan2(field[0, 1], field[0, 0]) + 0.0
        microwave = microwave if microwave == "parallel" else wave[:1]
    else:
        theta = phi = 0.0
    way = np.array([math.sin(theta) * math.cos(phi), math.sin(theta) * math.sin(phi), math.cos(theta)])
    return way, microwave, (round(math.degrees(theta), 9), round(math.degrees(phi), 9))


def _fields(args: argparse.Namespace, model: Any) -> tuple[tuple[float, float], int]:
    from spinfit.units import parse

    fields = (0.0, model.sweep.field[1])
    if args.field is not None:
        first, last = parse(args.field, "field", "--field", count=2)[0]
        if not 0 <= first < last:
            right = 'write first and last field, not negative, such as "0, 800 mT"'
            raise InputError(f"{first:g} to {last:g} mT", right, place="--field")
        fields = (float(first), float(last))
    try:
        points = int(args.points)
    except ValueError as error:
        raise InputError(f'"{args.points}" is not a whole number', "write 2 to 100000", place="--points") from error
    if not 2 <= points <= 100_000:
        raise InputError(f"{points} points", "write 2 to 100000", place="--points")
    return fields, points


def _system(one: Any, model: Any) -> tuple[Any, tuple[str, ...], int]:
    """Return the most abundant system of a species, the weak nuclei left out of it and how many systems there are."""
    from spinfit.hamiltonian import systems
    from spinfit.isotropic import isotropic
    from spinfit.treatment import decided

    sweep = model.sweep
    if model.sample.form == "solution":
        settled = isotropic(one)
    else:
        scale = max(one.width.gaussian, one.width.lorentzian) or 1.0
        settled = decided(one, sweep.frequency, sweep.field, scale, 1e-2, sweep.microwave).species
    every = systems(settled, perturb=True)
    system = max(every, key=lambda each: each.weight)
    return system, tuple(weak.name for weak in system.weak), len(every)


def _found(one: Any, model: Any, system: Any, ways: tuple[Any, Any], fields: tuple[float, float], points: int) -> Any:
    from spinfit.diagram import diagram

    direction, microwave = ways
    return diagram(
        system,
        direction,
        model.sweep.frequency,
        fields,
        points=points,
        microwave=microwave,
        temperature=model.sweep.temperature,
        populations=None if model.sample.form == "solution" else one.populations,
    )


def _remarks(one: Any, system: Any, left_out: tuple[str, ...], several: int) -> list[str]:
    said = []
    if several > 1:
        said.append(f"{one.name}: the most abundant of {several} systems is shown ({system.label or 'no nuclei'})")
    if left_out:
        said.append(f"{one.name}: weakly coupled nuclei are left out ({', '.join(left_out)})")
    return said


def _rows(found: Any) -> list[dict[str, Any]]:
    got = found.resonances
    return [
        {
            "field_mT": float(got.field[k]),
            "lower": int(got.lower[k]) + 1,
            "upper": int(got.upper[k]) + 1,
            "weight": float(got.weight[k]),
            "slope_MHz_per_mT": float(got.slope[k]),
            "lower_MHz": float(found.ends[0, k]),
            "upper_MHz": float(found.ends[1, k]),
        }
        for k in range(len(got.field))
    ]


def _text(name: str, found: Any, angles: tuple[float, float], frequency: float) -> str:
    """Return levels at a few fields and the transitions, as tables."""
    import numpy as np

    from spinfit.report.layout import table

    n = found.energies.shape[1]
    levels = range(min(n, LEVELS))
    at = np.unique(np.linspace(0, len(found.fields) - 1, ROWS).round().astype(int))
    title = f"{name}: field at theta {angles[0]:g}, phi {angles[1]:g} deg; E/h in MHz"
    title += "" if n <= LEVELS else f"; the lowest {LEVELS} of {n} levels"
    rows = [[f"{found.fields[i]:.2f}", *(f"{found.energies[i, k]:.2f}" for k in levels)] for i in at]
    text = title + "\n" + table(["field_mT", *(f"level {k + 1}" for k in levels)], rows, left=())
    lines = _rows(found)
    if not lines:
        return f"{text}\n\nno transition at {frequency / 1e3:.6g} GHz in these fields"
    top = max(abs(row["weight"]) for row in lines) or 1.0
    cells = [
        [
            f"{row['lower']}-{row['upper']}",
            f"{row['field_mT']:.3f}",
            f"{row['weight'] / top:.4f}",
            f"{row['slope_MHz_per_mT']:.3f}",
        ]
        for row in lines
        if abs(row["weight"]) >= 1e-4 * top
    ]
    headings = ["levels", "field_mT", "weight / largest", "slope_MHz_per_mT"]
    return f"{text}\n\ntransitions at {frequency / 1e3:.6g} GHz\n{table(headings, cells)}"


def _write(args: argparse.Namespace, model: Any, found: Any) -> None:
    """Write the csv and the picture that are wanted."""
    if args.output:
        from spinfit.files.atomic import write_text
        from spinfit.files.curves import csv_text

        columns = {f"level_{k + 1}_MHz": column for k, column in enumerate(found.energies.T)}
        write_text(args.output, csv_text({"field_mT": found.fields, **columns}))
    if args.plot:
        from spinfit.commands.drawing import save_picture
        from spinfit.report.diagram_plots import diagram_figure

        save_picture(args.plot, diagram_figure(found, frequency=model.sweep.frequency))
