"""How a batch goes: a live bar on a terminal, plain lines elsewhere."""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from spinfit.commands.screen import Screen

# Seconds between lines of progress where nobody watches a terminal.
EVERY = 10.0


def _span(seconds: float | None) -> str:
    """Write a time as a person says it: "40 s", "12 min", "3 h 05 min"."""
    if seconds is None:
        return "-"
    if seconds < 90:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    return f"{minutes} min" if minutes < 90 else f"{minutes // 60} h {minutes % 60:02d} min"


def _rate(progress: Any) -> str:
    elapsed = time.monotonic() - progress.began
    if not progress.ended or elapsed <= 0:
        return "-"
    rate = progress.ended / elapsed
    return f"{rate:.1f} a second" if rate >= 1 else f"{60 * rate:.1f} a minute"


def progress_line(progress: Any) -> str:
    """Return how far the batch is, on one line."""
    poor = progress.ended - progress.counts.get("good", 0) - progress.counts.get("failed", 0)
    parts = [f"{progress.kept + progress.ended} of {progress.total} done"]
    parts += [f"{progress.counts['failed']} failed"] if progress.counts.get("failed") else []
    parts += [f"{poor} not good"] if poor else []
    parts += [_rate(progress), f"{_span(progress.left)} left"] if progress.ended else []
    return ", ".join(parts)


def record_line(record: dict[str, Any], *, most: int = 4) -> str:
    """Return what came of one trace, on one line."""
    from spinfit.report.numbers import with_uncertainty

    head = f"{record['trace']}: {record['status']}"
    values = [
        f"{name} {with_uncertainty(value, uncertainty)} {unit}".rstrip()
        for name, (value, uncertainty, unit) in list(record.get("parameters", {}).items())[:most]
    ]
    said = [record["reason"]] if record.get("reason") else []
    return "; ".join([head, *values, *said]) if said else ", ".join([head, *values])


@contextmanager
def shown(screen: Screen, args: argparse.Namespace) -> Iterator[Callable[[Any, Any], None]]:
    """Give the listener of a batch that shows what is asked for."""
    if screen.is_terminal and not (screen.as_json or args.quiet):
        with _bar(screen, args.verbose) as listener:
            yield listener
    else:
        yield _plain(screen, args)


def _said(record: Any, verbose: bool, quiet: bool = False) -> bool:
    """Whether the end of a fit is worth a line: failures always are, but for those who want to hear nothing."""
    return record is not None and (verbose or (record["status"] == "failed" and not quiet))


def _plain(screen: Screen, args: argparse.Namespace) -> Callable[[Any, Any], None]:
    last = time.monotonic()

    def listener(progress: Any, record: Any) -> None:
        nonlocal last
        if _said(record, args.verbose):
            screen.aside(record_line(record))
        if not (args.quiet or screen.as_json) and time.monotonic() - last >= EVERY:
            last = time.monotonic()
            screen.aside(progress_line(progress))

    return listener


@contextmanager
def _bar(screen: Screen, verbose: bool) -> Iterator[Callable[[Any, Any], None]]:
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn
    from rich.text import Text

    console = Console(file=screen.err, stderr=True)
    columns = (BarColumn(bar_width=24), TextColumn("{task.description}", markup=False))
    with Progress(*columns, console=console, transient=True) as bar:
        task = bar.add_task("starting", total=None)

        def listener(progress: Any, record: Any) -> None:
            if _said(record, verbose):
                console.print(Text(f"spinfit: {record_line(record)}"))
            done = progress.kept + progress.ended
            bar.update(task, total=progress.total, completed=done, description=progress_line(progress))

        yield listener
