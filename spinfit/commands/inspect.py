"""``spinfit inspect``: what is in a data file, before any model."""

from __future__ import annotations

import argparse
from typing import Any

from spinfit.commands.measured import Measured, add_reading_options, read_measured
from spinfit.commands.screen import Screen
from spinfit.errors import InputError

NAME = "inspect"
SUMMARY = "what is in a data file: range, points, noise, turning points and their g"
EXAMPLES = (
    "spinfit inspect kiln-07.csv",
    "spinfit inspect kiln-07/outcome.h5",
    'spinfit inspect home-built.txt --columns 2,1 --field-slope "216 mT/V" --frequency "9.43 GHz" --plot look.png',
)


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("file", metavar="FILE", help="delimited text, JCAMP-DX or HDF5; outcome.h5, batch.h5")
    parser.add_argument("--plot", metavar="FILE", help="draw it, turning points marked (.png, .svg or .pdf)")
    add_reading_options(parser)


def modulation_sentence(modulation: float | None, narrowest: float | None) -> tuple[str, bool | None]:
    """Say whether the field modulation was too large; True when it was, None when that cannot be said."""
    from spinfit.fitting.turning import largest_modulation
    from spinfit.report.numbers import small

    if narrowest is None:
        return "no single line to judge the modulation by", None
    limit = largest_modulation(narrowest)
    seen = f"a third of the narrowest peak-to-peak width ({small(narrowest)} mT)"
    if modulation is None:
        return f"the file does not give the modulation; up to {small(limit)} mT, {seen}, it does no harm", None
    if modulation > limit:
        return f"{modulation:.3g} mT is too large: it broadens the lines; keep it below {small(limit)} mT, {seen}", True
    return f"{modulation:.3g} mT does no harm: it is below {small(limit)} mT, {seen}", False


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Look at the file and print what was seen."""
    from spinfit.fitting.turning import analyse

    if args.plot:
        from spinfit.commands.drawing import picture_kind

        picture_kind(args.plot)
    if _is_archive(args.file):
        return _archive(args, screen)
    trace = read_measured(args.file, args)
    codes = {code for code, _ in trace.notes}
    if args.direction == "both" and "sweeps" in codes:
        # Lines of the two ways stand apart by the detector's lag: laid into each other they are a comb.
        args.direction = "up"
        trace = read_measured(args.file, args)
    found = analyse(trace.field[trace.used], trace.signal[trace.used], frequency=trace.frequency, detect=trace.detect)
    sentence, too_large = modulation_sentence(trace.modulation, found.narrowest)
    screen.emit(_record(args.file, trace, found, too_large))
    screen.say(_text(args.file, trace, found, sentence))
    if args.plot:
        from spinfit.commands.drawing import save_picture
        from spinfit.report.plots import trace_figure

        figure = trace_figure(trace.field, trace.signal, found, frequency=trace.frequency, detect=trace.detect)
        save_picture(args.plot, figure)
        screen.say(f"\npicture: {args.plot}")
    return 0


def _is_archive(file: str) -> bool:
    """Whether a file is an archive of ours; what is wrong with it otherwise is for its reader to say."""
    from spinfit.files.guard import SIGNATURE
    from spinfit.report.archive_reading import kind_of_archive

    try:
        with open(file, "rb") as stream:
            if stream.read(len(SIGNATURE)) != SIGNATURE:
                return False
    except (OSError, ValueError):
        return False
    return kind_of_archive(file) is not None


def _archive(args: argparse.Namespace, screen: Screen) -> int:
    """Say what is in an archive."""
    from spinfit.report.archive_reading import kind_of_archive, read_archive
    from spinfit.report.archive_text import batch_record, batch_text, fit_record, fit_text
    from spinfit.report.batch_archive import read_batch_summary

    if kind_of_archive(args.file) == "batch":
        if args.plot:
            raise InputError("does not go with the archive of a batch", "use spinfit summary", place="--plot")
        summary = read_batch_summary(args.file)
        screen.emit({"file": args.file, **batch_record(summary)})
        screen.say(batch_text(summary, args.file))
        return 0
    archive = read_archive(args.file)
    screen.emit({"file": args.file, **fit_record(archive)})
    screen.say(fit_text(archive, args.file))
    if args.plot:
        from spinfit.commands.drawing import save_picture
        from spinfit.report.plots import fit_figure
        from spinfit.report.positions import positions_figure

        outcome = archive.outcome
        save_picture(args.plot, positions_figure(outcome) if outcome.positions else fit_figure(outcome))
        screen.say(f"\npicture: {args.plot}")
    return 0


def _record(file: str, trace: Measured, found: Any, too_large: bool | None) -> dict[str, Any]:
    import numpy as np

    steps = np.diff(trace.field)
    return {
        "file": file,
        "format": trace.format,
        "points": len(trace.field),
        "points_used": int(trace.used.sum()),
        "field_mT": [float(trace.field[0]), float(trace.field[-1])],
        "spacing_mT": [float(steps.min()), float(np.median(steps)), float(steps.max())],
        "frequency_MHz": trace.frequency,
        "temperature_K": trace.temperature,
        "modulation_mT": trace.modulation,
        "detect": trace.detect,
        "noise": found.noise,
        "white_noise": found.white_noise,
        "peak_to_peak": found.peak_to_peak,
        "signal_to_noise": found.signal_to_noise,
        "narrowest_width_mT": found.narrowest,
        "modulation_too_large": too_large,
        "turning_points": [
            {
                "kind": point.kind,
                "field_mT": point.field,
                "field_uncertainty_mT": point.field_uncertainty,
                "g": point.g,
                "g_uncertainty": point.g_uncertainty,
                "height": point.height,
            }
            for point in found.turning_points
        ],
        "notes": [{"code": code, "text": text} for code, text in trace.notes],
    }


def _text(file: str, trace: Measured, found: Any, modulation: str) -> str:
    import numpy as np

    from spinfit.report.layout import aligned, table, wrapped
    from spinfit.report.numbers import short, small, with_uncertainty

    steps = np.diff(trace.field)
    even = np.ptp(steps) < 0.02 * np.median(steps)
    spacing = f"every {short(float(np.median(steps)), 4)} mT"
    spacing = (
        spacing if even else f"{spacing} (unevenly, {short(float(steps.min()), 3)} to {short(float(steps.max()), 3)})"
    )
    left_out = len(trace.field) - int(trace.used.sum())
    temperature = "" if trace.temperature is None else f", {trace.temperature:g} K"
    frequency = "not given: add --frequency to see g" if trace.frequency is None else f"{trace.frequency / 1e3:.9g} GHz"
    lines = [
        f"{file} ({trace.format}{', ' + trace.header['title'] if trace.header.get('title') else ''})",
        f"  field        {trace.field[0]:.8g} to {trace.field[-1]:.8g} mT, {len(trace.field)} points, {spacing}",
        f"  conditions   frequency {frequency}{temperature}, {trace.detect}",
        f"  signal       noise {small(found.noise)}, peak to peak {short(found.peak_to_peak, 3)}, "
        f"signal to noise {short(found.signal_to_noise, 3)} (largest height over standard deviation)",
        f"  modulation   {modulation}",
    ]
    if found.noise > found.white_noise:
        white = small(found.white_noise)
        lines.append(f"  slow noise   neighbouring points differ by {white} only: a long time constant, or drift")
    if left_out:
        lines.append(f"  left out     {left_out} points")
    lines += ["  note         " + wrapped(text, width=85, indent=" " * 15) for _, text in trace.notes]
    if not found.turning_points:
        return "\n".join([*lines, "", "nothing stands out of the noise"])
    points = found.turning_points
    fields = aligned([with_uncertainty(point.field, point.field_uncertainty) for point in points])
    gs = aligned([with_uncertainty(point.g, point.g_uncertainty) for point in points])
    heights = ["" if point.kind == "crossing" else short(point.height, 3) for point in points]
    rows = list(zip([point.kind for point in points], fields, gs, heights, strict=True))
    # Uncertainties here are those of the noise: the axis's and the frequency's come on top.
    return "\n".join([*lines, "", table(["turning point", "field / mT", "g", "height"], rows)])
