"""``spinfit simulate``: the spectrum of a model."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from spinfit.commands.screen import Screen, number, quantity
from spinfit.errors import InputError

NAME = "simulate"
SUMMARY = "the spectrum of a model file"
EXAMPLES = (
    "spinfit simulate copper.toml > copper.csv",
    "spinfit simulate copper.toml -o copper.jdx --plot copper.png",
    "spinfit simulate copper.toml --parts",
    "spinfit simulate copper.toml -o practice.jdx --noise 0.02 --seed 7",
)
SUFFIXES = (".csv", ".jdx", ".h5")


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("model", metavar="MODEL.toml", help="model file")
    parser.add_argument(
        "-o", "--output", metavar="FILE", help="write there (.csv, .jdx or .h5) instead of csv on standard output"
    )
    parser.add_argument("--plot", metavar="FILE", help="draw it as well (.png, .svg or .pdf)")
    parser.add_argument(
        "--angle", metavar="QUANTITY", help='crystal or aligned sample: this angle only, such as "30 deg"'
    )
    parser.add_argument("--species", action="store_true", help="csv: one more column for each species")
    parser.add_argument(
        "--parts",
        action="store_true",
        help="list the transitions: levels, fields, where on the sphere, share of the intensity, and what lies outside "
        "the sweep (without -o in place of the csv)",
    )
    parser.add_argument(
        "--noise",
        metavar="FRACTION",
        help="add Gaussian noise of this standard deviation, as a fraction of the largest signal: a trace to practise "
        "on, or to see what an experiment could tell",
    )
    parser.add_argument(
        "--seed", type=int, metavar="N", help="which noise: the same N gives the same noise (default 1)"
    )


def _check_names(args: argparse.Namespace) -> None:
    """Refuse what cannot be written before anything is computed."""
    if args.output is not None:
        suffix = Path(args.output).suffix.lower()
        if suffix not in SUFFIXES:
            found = f'"{suffix}" is not a format to write' if suffix else "the name has no suffix"
            raise InputError(found, "end the name in " + ", ".join(SUFFIXES), place="-o", file=args.output)
        if args.species and suffix != ".csv":
            raise InputError("columns for species go to csv only", "end the name in .csv", place="--species")
    if args.plot is not None:
        from spinfit.commands.drawing import picture_kind

        picture_kind(args.plot)
    if args.seed is not None and (args.noise is None or args.seed < 0):
        found = "there is no noise to choose" if args.noise is None else f"{args.seed}"
        raise InputError(found, "add --noise" if args.noise is None else "write 0 or more", place="--seed")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Simulate and write."""
    import numpy as np

    from spinfit.files.job import read_model
    from spinfit.spectrum import simulate

    _check_names(args)
    noise = number(args.noise, "--noise", positive=True)
    model = read_model(args.model)
    angles = _angles(args, model)
    try:
        spectra = [
            simulate(model.species, model.sweep, model.sample, tolerance=model.tolerance, angle=angle, parts=args.parts)
            for angle in angles
        ]
    except InputError as error:
        raise error.at(file=args.model) from error
    tables = []
    for angle, spectrum in zip(angles, spectra, strict=True):
        parts = {one.name: one.amount * part for one, part in zip(model.species, spectrum.parts, strict=True)}
        turned = (
            {"angle_deg": np.full(len(spectrum.fields), round(float(np.rad2deg(angle)), 9))} if len(angles) > 1 else {}
        )
        tables.append({**turned, "field_mT": spectrum.fields, "signal": spectrum.signal, **parts})
    if noise is not None:
        _add_noise(tables, noise, 1 if args.seed is None else args.seed)
    warnings = list(dict.fromkeys(_said(warning) for spectrum in spectra for warning in spectrum.warnings))
    for text in warnings:
        screen.aside(f"warning: {text}")
    several = {key: np.concatenate([table[key] for table in tables]) for key in tables[0]}
    names = [one.name for one in model.species]
    columns = {key: column for key, column in several.items() if args.species or key not in names}
    _write(args, screen, model, columns, angles)
    if args.parts:
        _say_parts(screen, model, spectra, angles)
    screen.emit(
        {
            "frequency_MHz": model.sweep.frequency,
            "file": args.output,
            "plot": args.plot,
            **({} if args.output else columns),
            "report": [_record(spectrum.report) for spectrum in spectra],
            "warnings": warnings,
        }
    )
    if args.plot:
        _draw(args.plot, model, tables, angles)
    return 0


def _add_noise(tables: list[dict[str, Any]], fraction: float, seed: int) -> None:
    """Add noise to the signals, each point and each angle its own; the columns of species stay without."""
    import numpy as np

    deviation = fraction * max(float(np.abs(table["signal"]).max()) for table in tables)
    draws = np.random.default_rng(seed)
    for table in tables:
        table["signal"] = table["signal"] + draws.normal(0.0, deviation, len(table["signal"]))


def _said(warning: Any) -> str:
    return str(warning[1]) if isinstance(warning, tuple) else str(warning)


def _angles(args: argparse.Namespace, model: Any) -> list[float | None]:
    """Return the angles to simulate, rad; [None] where the sample has none."""
    if args.angle is not None:
        if model.sample.form not in ("crystal", "aligned"):
            raise InputError(f"a {model.sample.form} has no angle", "leave it out", place="--angle")
        return [quantity(args.angle, "angle", "--angle")]
    angles = list(model.sample.angles) if model.sample.form == "crystal" else [None]
    if len(angles) > 1 and args.output is not None and Path(args.output).suffix.lower() != ".csv":
        raise InputError(f"{len(angles)} angles do not fit in one such file", "add --angle, or write .csv", place="-o")
    return angles


def _write(
    args: argparse.Namespace, screen: Screen, model: Any, columns: dict[str, Any], angles: list[float | None]
) -> None:
    """Write the numbers where they are wanted."""
    from spinfit.files.atomic import write_text
    from spinfit.files.curves import csv_text, write_spectrum

    if args.output is not None and Path(args.output).suffix.lower() == ".csv":
        write_text(args.output, csv_text(columns))
    elif args.output is not None:
        sweep = model.sweep
        header = {
            "title": Path(args.model).stem,
            "frequency": sweep.frequency,
            "temperature": sweep.temperature,
            "modulation": sweep.modulation or None,
            "microwave": sweep.microwave,
            "detect": sweep.detect,
            "angle": angles[0],
        }
        write_spectrum(args.output, columns["field_mT"], columns["signal"], header=header)
    elif not (screen.as_json or args.parts):
        screen.raw(csv_text(columns))


def _record(report: Any) -> dict[str, Any]:
    """Return what an engine used, its transitions in the units of the JSON document."""
    from spinfit.report.transitions import survey_record

    return {
        name: {key: survey_record(value) if key == "transitions" else value for key, value in used.items()}
        for name, used in report.items()
    }


def _say_parts(screen: Screen, model: Any, spectra: list[Any], angles: list[float | None]) -> None:
    """List the transitions of every species, angle by angle."""
    import numpy as np

    from spinfit.report.transitions import survey_text

    texts = []
    for angle, spectrum in zip(angles, spectra, strict=True):
        at = f", {np.rad2deg(angle):.6g} deg" if angle is not None else ""
        for one in model.species:
            survey = spectrum.report[one.name]["transitions"]
            texts.append(survey_text(one.name + at, survey, model.sweep.field, signs=one.populations is not None))
    screen.say("\n\n".join(texts))


def _draw(path: str, model: Any, tables: list[dict[str, Any]], angles: list[float | None]) -> None:
    """Draw one spectrum with its species, or several angles above each other."""
    from spinfit.commands.drawing import save_picture
    from spinfit.report.plots import angles_figure, spectrum_figure

    sweep = model.sweep
    fields, signals = tables[0]["field_mT"], [table["signal"] for table in tables]
    if len(angles) > 1:
        figure = angles_figure(fields, signals, angles, frequency=sweep.frequency, detect=sweep.detect)
    else:
        parts = {one.name: tables[0][one.name] for one in model.species}
        figure = spectrum_figure(fields, signals[0], frequency=sweep.frequency, detect=sweep.detect, parts=parts)
    save_picture(path, figure)
