"""``spinfit lines``: every resonance of a model at chosen directions of the field, as csv."""

from __future__ import annotations

import argparse
from typing import Any

from spinfit.commands.screen import Screen
from spinfit.errors import InputError

NAME = "lines"
SUMMARY = "resonance fields of a model at chosen directions, as csv"
EXAMPLES = (
    'spinfit lines chromium.toml --direction "30, 0 deg"',
    'spinfit lines chromium.toml --direction "0, 0 deg" --direction "90, 0 deg" --json',
)
COLUMNS = ("theta_deg", "phi_deg", "field_mT", "weight", "lower", "upper", "slope_MHz_per_mT")


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("model", metavar="MODEL.toml", help="model file")
    parser.add_argument(
        "--direction",
        action="append",
        metavar="QUANTITY",
        help='theta and phi of the field in molecular axes, such as "30, 0 deg"; may be repeated '
        "(default: the angles of a crystal, at every site, else the axes x, y and z)",
    )
    parser.add_argument("-o", "--output", metavar="FILE.csv", help="write there instead of to standard output")


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


def rows_of(model: Any, angles: Any, microwave: Any) -> list[dict[str, Any]]:
    """Return one row a resonance, by species, system, direction and field."""
    import numpy as np

    from spinfit.hamiltonian import systems
    from spinfit.isotropic import isotropic
    from spinfit.resonance import find

    sweep = model.sweep
    along = sweep.microwave if microwave is None or sweep.microwave == "parallel" else microwave
    degrees = np.rad2deg(angles)
    rows = []
    for one in model.species:
        several = systems(isotropic(one) if model.sample.form == "solution" else one)
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
    from spinfit.files.job import read_model

    model = read_model(args.model)
    angles, microwave = _directions(args, model)
    try:
        rows = rows_of(model, angles, microwave)
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


def _cell(value: Any) -> str:
    if isinstance(value, float):
        return f"{value:.10g}"
    text = str(value)
    return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',"\n') else text
