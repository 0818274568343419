"""What is in an archive, for people and for programs."""

from __future__ import annotations

import hashlib
from collections import Counter
from collections.abc import Mapping
from typing import Any

from spinfit.report.archive_reading import Archive
from spinfit.report.batch_archive import BatchSummary
from spinfit.report.layout import wrapped
from spinfit.report.outcome_json import value_record
from spinfit.report.tables import outcome_lines

MOST_LISTED = 30


def _versions(archive: Archive) -> dict[str, str]:
    stated = archive.outcome.provenance.get("versions")
    return {str(name): str(text) for name, text in stated.items()} if isinstance(stated, Mapping) else {}


def fit_record(archive: Archive) -> dict[str, Any]:
    """Return what an archive of one fit holds, as plain types."""
    outcome = archive.outcome
    return {
        "archive": "fit",
        "format": archive.format,
        "name": outcome.name,
        "can_be_rerun": bool(archive.files),
        "files": [
            {"name": name, "bytes": len(content), "sha256": hashlib.sha256(content).hexdigest()}
            for name, content in archive.files.items()
        ],
        "traces": [{"name": c.trace, "points": len(c.field), "frequency_MHz": c.frequency} for c in outcome.curves],
        "lines": [{"name": t.name, "lines": len(t.measured)} for t in outcome.positions],
        "versions": _versions(archive),
        "job": archive.job,
        "parameters": {name: value_record(value) for name, value in outcome.parameters.items()},
        "warnings": [{"code": one.code, "text": one.text} for one in outcome.warnings],
    }


def fit_text(archive: Archive, file: str) -> str:
    """Return what an archive of one fit holds, and the fit as `spinfit fit` prints it."""
    outcome = archive.outcome
    lines = [f"{file} (archive of a fit, format {archive.format}: {outcome.name})"]

    def item(label: str, text: str) -> None:
        lines.append(f"  {label:<12} " + wrapped(text, width=100, indent=" " * 15))

    for curves in outcome.curves:
        item(
            "trace",
            f"{curves.trace}: {len(curves.field)} points, {curves.field[0]:.8g} to {curves.field[-1]:.8g} mT, "
            f"{curves.frequency / 1e3:.9g} GHz",
        )
    for table in outcome.positions:
        item("lines", f"{table.name}: {len(table.measured)} lines, {table.frequency / 1e3:.9g} GHz")
    for name, content in archive.files.items():
        shown = name if name.isprintable() else ascii(name)
        item("file", f"{shown}, {len(content)} bytes, SHA-256 {hashlib.sha256(content).hexdigest()[:16]}...")
    item("content", "as it was written: its digest agrees" if archive.format > 1 else "format 1 has no digest to check")
    item("versions", ", ".join(f"{name} {text}" for name, text in _versions(archive).items()) or "not stated")
    again = f"spinfit rerun {file} repeats the fit" if archive.files else "it holds no input files: it cannot be rerun"
    item("rerun", again)
    return "\n".join([*lines, "", outcome_lines(outcome)])


def batch_record(summary: BatchSummary) -> dict[str, Any]:
    """Return what an archive of a batch holds, as plain types."""
    return {
        "archive": "batch",
        "fits": list(summary.fits),
        "skipped": dict(summary.skipped),
        "columns": list(summary.table),
        "status": dict(Counter(map(str, summary.table.get("status", [])))),
    }


def batch_text(summary: BatchSummary, file: str) -> str:
    """Return what an archive of a batch holds."""
    counts = Counter(map(str, summary.table.get("status", [])))
    lines = [f"{file} (archive of a batch: {len(summary.fits)} fits)"]

    def item(label: str, text: str) -> None:
        lines.append(f"  {label:<12} " + wrapped(text, width=100, indent=" " * 15))

    if counts:
        item("table", ", ".join(f"{number} {status}" for status, number in counts.items()))
    listed = ", ".join(summary.fits[:MOST_LISTED])
    more = len(summary.fits) - MOST_LISTED
    item("fits", listed + (f" and {more} more" if more > 0 else ""))
    for name, reason in list(summary.skipped.items())[:MOST_LISTED]:
        item("left out", f"{name}: {reason}")
    item("rerun", f"spinfit rerun {file} --trace {summary.fits[0] if summary.fits else 'NAME'} repeats one")
    return "\n".join(lines)
