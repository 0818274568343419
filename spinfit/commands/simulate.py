"""``spinfit simulate``: the spectrum of a model."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from spinfit.commands.screen import Screen
from spinfit.errors import InputError, nearest

NAME = "simulate"
SUMMARY = "the spectrum of a model file"
EXAMPLES = (
    "spinfit simulate copper.toml > copper.csv",
    "spinfit simulate copper.toml -o copper.jdx --plot copper.png",
)
SUFFIXES = (".csv", ".jdx", ".h5")


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("model", metavar="MODEL.toml", help="model file")
    parser.add_argument(
        "-o", "--output", metavar="FILE", help="write there (.csv, .jdx or .h5) instead of csv on standard output"
    )
    parser.add_argument("--plot", metavar="FILE", help="draw it as well (.png, .svg or .pdf)")
    parser.add_argument("--species", action="store_true", help="csv: one more column for each species")


def _check_names(args: argparse.Namespace) -> None:
    """Refuse what cannot be written before anything is computed."""
    if args.output is not None:
        suffix = Path(args.output).suffix.lower()
        if suffix not in SUFFIXES:
            found = f'"{suffix}" is not a format to write' if suffix else "the name has no suffix"
            hint = nearest(suffix, SUFFIXES) if suffix else ""
            right = hint if hint.startswith("did") else "end the name in " + ", ".join(SUFFIXES)
            raise InputError(found, right, place="-o", file=args.output)
        if args.species and suffix != ".csv":
            raise InputError("columns for species go to csv only", "end the name in .csv", place="--species")
    if args.plot is not None:
        from spinfit.commands.drawing import picture_kind

        picture_kind(args.plot)


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Simulate and write."""
    from spinfit.files.job import read_model
    from spinfit.spectrum import simulate

    _check_names(args)
    model = read_model(args.model)
    try:
        spectrum = simulate(model.species, model.sweep, model.sample, tolerance=model.tolerance)
    except InputError as error:
        raise error.at(file=args.model) from error
    parts = {one.name: one.amount * part for one, part in zip(model.species, spectrum.parts, strict=True)}
    for warning in spectrum.warnings:
        screen.aside(f"warning: {warning[1] if isinstance(warning, tuple) else warning}")
    _write(args, screen, model, spectrum, parts)
    if args.plot:
        _draw(args.plot, model, spectrum, parts)
    return 0


def _write(args: argparse.Namespace, screen: Screen, model: Any, spectrum: Any, parts: dict[str, Any]) -> None:
    """Write the numbers where they are wanted."""
    from spinfit.files.atomic import write_text
    from spinfit.files.curves import csv_text, write_spectrum

    columns = {"field_mT": spectrum.fields, "signal": spectrum.signal, **(parts if args.species else {})}
    sweep = model.sweep
    if args.output is not None and Path(args.output).suffix.lower() == ".csv":
        write_text(args.output, csv_text(columns))
    elif args.output is not None:
        header = {
            "title": Path(args.model).stem,
            "frequency": sweep.frequency,
            "temperature": sweep.temperature,
            "modulation": sweep.modulation or None,
            "microwave": sweep.microwave,
            "detect": sweep.detect,
        }
        write_spectrum(args.output, spectrum.fields, spectrum.signal, header=header)
    elif not screen.as_json:
        screen.raw(csv_text(columns))
    screen.emit(
        {
            "frequency_MHz": sweep.frequency,
            "file": args.output,
            "plot": args.plot,
            **({} if args.output else columns),
            "report": spectrum.report,
            "warnings": [list(w) if isinstance(w, tuple) else w for w in spectrum.warnings],
        }
    )


def _draw(path: str, model: Any, spectrum: Any, parts: dict[str, Any]) -> None:
    from spinfit.commands.drawing import save_picture
    from spinfit.report.plots import spectrum_figure

    figure = spectrum_figure(
        spectrum.fields, spectrum.signal, frequency=model.sweep.frequency, detect=model.sweep.detect, parts=parts
    )
    save_picture(path, figure)
