"""Options and reading shared by the commands that look at a measured trace without a job."""

from __future__ import annotations

import argparse
from typing import Any, NamedTuple

from spinfit.commands.screen import quantity
from spinfit.errors import InputError, nearest

DETECT = ("derivative", "absorption", "second derivative")


class Measured(NamedTuple):
    """A trace as a data file has it: field in mT, frequency in MHz or None, conditions, notes."""

    field: Any
    signal: Any
    used: Any
    frequency: float | None
    modulation: float | None
    temperature: float | None
    detect: str
    header: dict[str, Any]
    format: str
    notes: tuple[tuple[str, str], ...]


def add_reading_options(parser: argparse.ArgumentParser) -> None:
    """Add the options that say how a data file is to be read."""
    reading = parser.add_argument_group("how the file is read (by default as its header says)")
    reading.add_argument("--frequency", metavar="QUANTITY", help='microwave frequency, such as "9.43 GHz"')
    reading.add_argument("--field-unit", metavar="UNIT", help="unit of the field column: mT, T or G")
    reading.add_argument("--columns", metavar="F,S", help="field and signal column, counted from 1, such as 2,1")
    reading.add_argument("--field-slope", metavar="QUANTITY", help='for a field column in volts, such as "216 mT/V"')
    reading.add_argument("--field-zero", metavar="QUANTITY", help='field at 0 V, such as "3 mT" (default: 0)')
    reading.add_argument(
        "--direction", choices=("up", "down", "both"), default="both", help="part of an up-and-down sweep"
    )
    reading.add_argument("--modulation", metavar="QUANTITY", help='peak to peak, such as "0.2 mT"')
    reading.add_argument("--detect", metavar="WHAT", help='"derivative" (default), "absorption" or "second derivative"')


def _columns(text: str | None) -> dict[str, int] | None:
    if text is None:
        return None
    words = text.split(",")
    if len(words) != 2 or not all(word.strip().isdigit() for word in words):
        raise InputError(f'"{text}"', "write field and signal column, such as 1,2", place="--columns")
    return {"field": int(words[0]), "signal": int(words[1])}


def _calibration(args: argparse.Namespace) -> tuple[float, float] | None:
    slope = quantity(args.field_slope, "field per voltage", "--field-slope")
    zero = quantity(args.field_zero, "field", "--field-zero")
    if slope is None:
        if zero is not None:
            raise InputError("stands without --field-slope", "give both", place="--field-zero")
        return None
    return slope, zero or 0.0


# What a job writes and what stands for it on the command line.
_OPTIONS = {
    "columns": "add --columns 1,2 with the numbers of the field and the signal column",
    "field_unit": "add --field-unit mT (or T, G)",
    "field_calibration": 'add --field-slope "216 mT/V" and --field-zero "3 mT"',
}


def _as_options(error: InputError) -> InputError:
    """Return the same error, advising the command's option where a job's key is named."""
    right = _OPTIONS.get(error.place or "", error.right)
    return InputError(error.found, right, place=error.place, file=error.file)


def read_measured(path: str, args: argparse.Namespace, *, needs_frequency: bool = False) -> Measured:
    """Read a data file with the command's options; what an option says wins over the header.

    Raises
    ------
    InputError
        For a file that cannot be read, or a missing frequency where it is needed.
    """
    from spinfit.files.reading import assemble, read

    frequency = quantity(args.frequency, "frequency", "--frequency")
    modulation = quantity(args.modulation, "field", "--modulation")
    for option, value in (("--frequency", frequency), ("--modulation", modulation)):
        if value is not None and value <= 0:
            raise InputError(f"{value:g}", "write a positive value", place=option)
    if args.detect is not None and args.detect not in DETECT:
        raise InputError(f'"{args.detect}" is not known', nearest(args.detect, DETECT), place="--detect")
    columns, calibration = _columns(args.columns), _calibration(args)
    raw = read(path)
    try:
        trace = assemble(
            raw, columns=columns, field_unit=args.field_unit, field_calibration=calibration, direction=args.direction
        )
    except InputError as error:
        raise _as_options(error) from error
    header = raw.header
    frequency = header.get("frequency") if frequency is None else frequency
    if frequency is None and needs_frequency:
        raise InputError(
            "the file does not give the frequency", 'add --frequency "9.43 GHz"', place="frequency", file=path
        )
    if len(trace.field) < 8:
        raise InputError(f"{len(trace.field)} points", "a trace has at least 8", file=path)
    return Measured(
        field=trace.field,
        signal=trace.signal,
        used=trace.used,
        frequency=frequency,
        modulation=header.get("modulation") if modulation is None else modulation,
        temperature=header.get("temperature"),
        detect=args.detect or header.get("detect") or "derivative",
        header=dict(header),
        format=raw.format,
        notes=trace.notes,
    )
