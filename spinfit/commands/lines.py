"""``spinfit lines``: every resonance of a model at chosen directions of the field, as csv."""

from __future__ import annotations

import argparse
from typing import Any

from spinfit.commands.screen import Screen, quantity
from spinfit.errors import InputError

NAME = "lines"
SUMMARY = "resonance fields of a model at chosen directions, as csv; against direction, as pictures"
EXAMPLES = (
    'spinfit lines chromium.toml --direction "30, 0 deg"',
    'spinfit lines chromium.toml --direction "0, 0 deg" --direction "90, 0 deg" --json',
    "spinfit lines crystal.toml -o lines.csv --plot rotation.png",
    'spinfit lines chromium.toml -o lines.csv --map where.png --at "282 mT"',
)
STEPS = 90
"""Directions from one axis to the next in the picture of a powder."""
COLUMNS = ("theta_deg", "phi_deg", "field_mT", "weight", "lower", "upper", "slope_MHz_per_mT")


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument(
        "model", metavar="MODEL.toml", help="model file; or a job that fits line positions, whose start is then shown"
    )
    parser.add_argument(
        "--direction",
        action="append",
        metavar="QUANTITY",
        help='theta and phi of the field in molecular axes, such as "30, 0 deg"; may be repeated '
        "(default: the angles of a crystal, at every site, else the axes x, y and z)",
    )
    parser.add_argument("-o", "--output", metavar="FILE.csv", help="write there instead of to standard output")
    parser.add_argument(
        "--plot",
        metavar="FILE",
        help="draw resonance fields as the crystal turns, else on circles between the molecular axes "
        "(.png, .svg or .pdf)",
    )
    parser.add_argument(
        "--map",
        metavar="FILE",
        help="draw where on the sphere each transition of the first species has its field (.png, .svg or .pdf)",
    )
    parser.add_argument(
        "--at",
        metavar="QUANTITY",
        help='with --map: at this field, such as "335 mT", draw which directions of each species absorb',
    )


def _directions(args: argparse.Namespace, model: Any) -> tuple[Any, Any]:
    """Return field directions (theta, phi in rad), shape (d, 2), and microwave directions or None."""
    import numpy as np

    from spinfit.crystal import site_directions
    from spinfit.units import parse

    if args.direction:
        angles = [parse(text, "angle", "--direction", count=2)[0] for text in args.direction]
        return np.array(angles), None
    if model.sample.form == "crystal":
        _, field, microwave, *_ = site_directions(model.sample, model.sample.angles)
        theta = np.arccos(np.clip(field[:, 2], -1, 1))
        return np.stack([theta, np.arctan2(field[:, 1], field[:, 0]) + 0.0], axis=1), microwave
    if model.sample.form == "solution":
        return np.zeros((1, 2)), None
    half = np.pi / 2
    return np.array([[half, 0.0], [half, half], [0.0, 0.0]]), None


def _unit_vectors(angles: Any) -> Any:
    import numpy as np

    theta, phi = angles.T
    return np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=1)


MOST_STATES = 64
"""Levels up to which every nucleus is in the matrices: more make thousands of lines a direction."""


def _systems(one: Any, model: Any, screen: Screen) -> Any:
    """Return the matrices of a species; those of many nuclei follow their treatment, which is said."""
    from spinfit.hamiltonian import systems
    from spinfit.isotropic import isotropic
    from spinfit.treatment import decided, whole_states

    one = isotropic(one) if model.sample.form == "solution" else one
    if whole_states(one) <= MOST_STATES:
        return systems(one)
    sweep = model.sweep
    scale = max(one.width.gaussian, one.width.lorentzian) or 1.0
    several = systems(
        decided(one, sweep.frequency, sweep.field, scale, 1e-2, sweep.microwave).species, perturb=True
    )
    weak = dict.fromkeys(f"{nucleus.count} {nucleus.name}" for nucleus in several[0].weak)
    if weak:
        text = f"{one.name}: {', '.join(weak)} split every line further; given are the lines without them"
        screen.aside(f'{text} (treat = "exact" makes lines of their own)')
    return several


def rows_of(model: Any, angles: Any, microwave: Any, screen: Screen) -> list[dict[str, Any]]:
    """Return one row a resonance, by species, system, direction and field."""
    import numpy as np

    from spinfit.resonance import find

    sweep = model.sweep
    along = sweep.microwave if microwave is None or sweep.microwave == "parallel" else microwave
    degrees = np.rad2deg(angles)
    rows = []
    for one in model.species:
        several = _systems(one, model, screen)
        for system in several:
            got = find(
                system,
                _unit_vectors(angles),
                sweep.frequency,
                sweep.field,
                microwave=along,
                temperature=sweep.temperature,
                populations=None if model.sample.form == "solution" else one.populations,
            )
            for k, which in enumerate(got.direction):
                row = {
                    "theta_deg": float(degrees[which, 0]),
                    "phi_deg": float(degrees[which, 1]),
                    "field_mT": float(got.field[k]),
                    "weight": float(got.weight[k] * system.weight * one.amount),
                    "lower": int(got.lower[k]) + 1,
                    "upper": int(got.upper[k]) + 1,
                    "slope_MHz_per_mT": float(got.slope[k]),
                }
                row |= {"species": one.name} if len(model.species) > 1 else {}
                row |= {"system": system.label} if len(several) > 1 else {}
                rows.append(row)
    return rows


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Find the resonances and print them."""
    from spinfit.files.atomic import write_text

    at = _checked_pictures(args)
    model, measured = _read(args, screen)
    angles, microwave = _directions(args, model)
    try:
        rows = rows_of(model, angles, microwave, screen)
        _draw(args, model, at, measured)
    except InputError as error:
        raise error.at(file=args.model) from error
    extra = [key for key in ("species", "system") if any(key in row for row in rows)]
    columns = [*COLUMNS, *extra]
    text = "\n".join([",".join(columns), *(",".join(_cell(row.get(c, "")) for c in columns) for row in rows)]) + "\n"
    if args.output:
        write_text(args.output, text)
    elif not screen.as_json:
        screen.raw(text)
    screen.emit(rows)
    return 0


def _read(args: argparse.Namespace, screen: Screen) -> tuple[Any, Any]:
    """Read a model; of a job that fits line positions, its start and the first table that was turned."""
    from dataclasses import replace

    from spinfit.files.job import Model, read_job, read_model
    from spinfit.files.toml_table import load_toml
    from spinfit.sweep import Sweep

    tables, _ = load_toml(args.model)
    if "lines" not in tables or "sweep" in tables:
        return read_model(args.model), None
    job = read_job(args.model)
    turned = [table for table in job.lines if table.angle is not None]
    if not turned:
        right = "give angle_deg in the table, or write a model with [sweep]"
        raise InputError("no table of lines has angles of rotation", right, place="lines", file=args.model)
    table = turned[0]
    if len(turned) > 1:
        screen.aside(f"{table.name} is shown, the first of {len(turned)} tables of lines")
    field = table.field * table.field_scale + table.field_offset
    room = 0.1 * float(field.max() - field.min()) or 10.0
    window = (max(float(field.min()) - room, 0.0), float(field.max()) + room)
    sweep = Sweep(table.frequency, window, temperature=table.temperature, microwave=table.microwave)
    angles = tuple(sorted({float(angle) for angle in table.angle}))
    sample = replace(job.sample, angles=angles)
    if table.axis is not None:
        sample = replace(sample, axis=table.axis)
    if table.start is not None:
        sample = replace(sample, start=table.start)
    return Model(job.species, sweep, sample, name=job.name, path=job.path), table


def _checked_pictures(args: argparse.Namespace) -> float | None:
    """Refuse pictures that cannot be drawn; return the field of --at, mT."""
    from spinfit.commands.drawing import picture_kind

    for option, path in (("--plot", args.plot), ("--map", args.map)):
        if path is not None:
            picture_kind(path, option)
    at = quantity(args.at, "field", "--at")
    if at is not None and args.map is None:
        raise InputError("says at which field to draw a map", "add --map FILE.png", place="--at")
    if at is not None and at <= 0:
        raise InputError(f"{at:g} mT", "write a positive field", place="--at")
    return at


def _draw(args: argparse.Namespace, model: Any, at: float | None, measured: Any) -> None:
    """Draw what is asked for."""
    from spinfit.commands.drawing import save_picture

    if model.sample.form == "solution" and (args.plot or args.map):
        right = "leave it out, or take the sample as a powder"
        raise InputError("a solution has no directions", right, place="--plot" if args.plot else "--map")
    if args.plot:
        save_picture(args.plot, _dependence(model, measured))
    if args.map:
        save_picture(args.map, _map(model, at))


def _dependence(model: Any, measured: Any) -> Any:
    """Return resonance fields as the crystal turns, or along circles between the molecular axes."""
    import numpy as np

    from spinfit.dependence import great_circles, path, rotation
    from spinfit.report.dependence_plots import path_figure, rotation_figure

    sweep, names = model.sweep, [one.name for one in model.species]
    if model.sample.form != "crystal":
        strands = path(model.species, sweep, model.sample, great_circles(STEPS))
        return path_figure(strands, names, steps=STEPS, frequency=sweep.frequency, window=sweep.field)
    angles = model.sample.angles
    first, last = (min(angles), max(angles)) if len(angles) > 1 else (angles[0], angles[0] + np.pi)
    turned = np.linspace(first, last, max(181, round(float(np.rad2deg(last - first))) + 1))
    strands = rotation(model.species, sweep, model.sample, turned)
    marked = angles if measured is None and len(angles) < 40 else ()
    return rotation_figure(
        strands, turned, names, frequency=sweep.frequency, window=sweep.field, measured=measured, marked=marked
    )


def _map(model: Any, at: float | None) -> Any:
    """Return maps on the sphere: of fields for each transition, or of what absorbs at one field."""
    from spinfit.dependence import over_sphere
    from spinfit.report.dependence_plots import absorption_figure, fields_figure

    sweep = model.sweep
    if at is None:
        one = model.species[0]
        return fields_figure(over_sphere(one, sweep, model.sample), one.name, frequency=sweep.frequency)
    found = []
    for one in model.species:
        width = max(one.width.gaussian, one.width.lorentzian) or 1.0
        found.append((one.name, over_sphere(one, sweep, model.sample), width))
    return absorption_figure(found, at, frequency=sweep.frequency)


def _cell(value: Any) -> str:
    if isinstance(value, float):
        return f"{value:.10g}"
    text = str(value)
    return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',"\n') else text
