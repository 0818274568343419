"""``spinfit rerun``: repeat a fit from its archive alone, and say whether the numbers are still the same."""

from __future__ import annotations

import argparse
from contextlib import suppress
from pathlib import Path
from typing import Any

from spinfit.commands.fit import kept, ready_folder, shown_progress
from spinfit.commands.screen import Screen
from spinfit.errors import InputError, on_one_line

NAME = "rerun"
SUMMARY = "repeat a fit from its archive alone and say whether the numbers agree"
EXAMPLES = (
    "spinfit rerun kiln-07/outcome.h5",
    "spinfit rerun kiln-07/outcome.h5 --out again",
    "spinfit rerun season/batch.h5 --trace kiln_07",
)
MOST_SHOWN = 20


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("archive", metavar="FILE.h5", help="outcome.h5 of a fit, or batch.h5 with --trace")
    parser.add_argument("--trace", metavar="NAME", help="which fit of a batch")
    parser.add_argument("--out", metavar="DIR", help="write the repeated fit there, as spinfit fit does")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Read, fit, compare."""
    from spinfit.fitting.agreement import compare_outcomes
    from spinfit.fitting.driver import fit
    from spinfit.report.archive_reading import read_archive

    archive = read_archive(args.archive, args.trace)
    job = _job(archive, args.archive)
    is_new = args.out is not None and not Path(args.out).exists()
    folder = None if args.out is None else ready_folder(args.out)
    points = max(1, sum(int(trace.used.sum()) for trace in job.traces) + sum(len(one.field) for one in job.lines))
    try:
        with shown_progress(screen, points) as progress:
            outcome = fit(job, progress=progress)
        written, trouble = kept(folder, job, outcome)
        found = compare_outcomes(archive.outcome, outcome)
        screen.emit(_record(args, archive, found))
        screen.say(_text(archive, found))
        if trouble is not None:
            raise trouble
    except BaseException:
        if is_new and folder is not None:
            with suppress(OSError):
                folder.rmdir()
        raise
    if folder is not None:
        screen.say(f"\nwritten to {on_one_line(str(folder))}: {', '.join(written)}")
    return 0 if found.agrees else 1


def _job(archive: Any, file: str) -> Any:
    """Return the archive's job, read from what it kept and nothing else."""
    from spinfit.files.job import job_of

    if not archive.files:
        found = f"is an archive of format {archive.format}, which kept no input files"
        if archive.format > 1:
            found = "kept no input files"
        raise InputError(found, "it can be inspected; fit again from the files", file=file)
    inputs = archive.outcome.provenance.get("input")
    named = [one for one in inputs.values() if isinstance(one, dict)] if isinstance(inputs, dict) else []
    hashes = {one.get("sha256") for one in named}
    job = job_of(archive.job, archive.outcome.name, archive.files)
    used = {one.sha256 for one in (*job.traces, *job.lines)}
    if hashes and not used <= hashes:
        found = "the files that it kept are not those that its results were found from"
        raise InputError(found, "take an undamaged copy", file=file)
    return job


def _change_record(change: Any) -> dict[str, Any]:
    one = change.before or change.after
    return {
        "name": change.name,
        "unit": one.unit,
        "before": None if change.before is None else change.before.value,
        "now": None if change.after is None else change.after.value,
        "shift_in_uncertainties": change.shift,
        "agrees": change.agrees,
    }


def _record(args: argparse.Namespace, archive: Any, found: Any) -> dict[str, Any]:
    return {
        "file": args.archive,
        "trace": args.trace,
        "name": archive.outcome.name,
        "agrees": found.agrees,
        "bit_for_bit": found.identical,
        "changes": [_change_record(one) for one in found.changes],
        "remarks": list(found.remarks),
        "versions": {name: {"before": a or None, "now": b or None} for name, (a, b) in found.versions.items()},
    }


def _verdict(found: Any) -> str:
    if found.identical:
        return "the numbers agree bit for bit"
    if not found.agrees:
        return "the numbers do not agree"
    shifts = [one for one in found.changes if one.shift is not None]
    if not shifts:
        return "the numbers agree; curves or correlations differ in their last digits"
    worst = max(shifts, key=lambda one: one.shift)
    return f"the numbers agree: the largest shift is {worst.shift:.2g} standard uncertainties ({worst.name})"


def _text(archive: Any, found: Any) -> str:
    from spinfit.report.layout import table
    from spinfit.report.numbers import short, with_uncertainty

    versions = [f"{name} {a or 'none'} before, {b or 'none'} now" for name, (a, b) in found.versions.items()]
    lines = [
        f"{archive.outcome.name}: {_verdict(found)}",
        "versions: " + ("; ".join(versions) if versions else "the same as before"),
        *found.remarks,
    ]
    if {"profiles", "bootstrap"} & set(archive.record):
        lines.append("profiles and bootstrap are kept in the archive and were not repeated")

    def cell(value: Any) -> str:
        return "" if value is None else with_uncertainty(value.value, value.uncertainty)

    rows = [
        [one.name, (one.before or one.after).unit, cell(one.before), cell(one.after), short(one.shift, 2),
         "" if one.agrees else "differs"]
        for one in found.changes[:MOST_SHOWN]
    ]  # fmt: skip
    if rows and not found.agrees:
        headings = ["parameter", "unit", "before", "now", "shift / uncertainty", ""]
        lines += ["", table(headings, rows, left=(0, 1, 5))]
        left_out = len(found.changes) - len(rows)
        lines += [f"and {left_out} more"] if left_out > 0 else []
    return "\n".join(lines)
