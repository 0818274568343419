"""``spinfit fit``: the main job, from a measured trace to a g-tensor with uncertainties."""

from __future__ import annotations

import argparse
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

from spinfit.commands.screen import Screen
from spinfit.errors import InputError

NAME = "fit"
SUMMARY = "fit a model to measured traces: values, uncertainties, pictures"
EXAMPLES = ("spinfit fit kiln-07.toml", "spinfit fit kiln-07.toml --out kiln-07", "spinfit fit kiln-07.toml --json")
# Seconds between lines of progress where nobody watches a terminal.
PROGRESS_EVERY = 5.0


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("job", metavar="JOB.toml", help="job file")
    parser.add_argument(
        "--out",
        metavar="DIR",
        help="write outcome.json, curves.csv, fit.png, report.html and outcome.h5 there; without it nothing is written",
    )


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Fit, print, write."""
    from spinfit.files.job import read_job
    from spinfit.fitting.driver import fit

    job = read_job(args.job)
    is_new = args.out is not None and not Path(args.out).exists()
    folder = None if args.out is None else ready_folder(args.out)
    points = max(1, sum(int(trace.used.sum()) for trace in job.traces) + sum(len(one.field) for one in job.lines))
    try:
        with shown_progress(screen, points) as progress:
            outcome = fit(job, progress=progress)
        written = [] if folder is None else write_outcome(folder, outcome)
    except BaseException:
        if is_new and folder is not None:  # a refused fit leaves no empty folder behind
            with suppress(OSError):
                folder.rmdir()
        raise
    _say(screen, outcome, folder, written)
    return 0 if outcome.quality.converged and outcome.quality.finished else 1


def _say(screen: Screen, outcome: Any, folder: Path | None, written: list[str]) -> None:
    from spinfit.report.outcome_json import outcome_record
    from spinfit.report.tables import outcome_lines

    screen.emit(outcome_record(outcome))
    screen.say(outcome_lines(outcome))
    screen.say()
    if folder is None:
        screen.say(f"{outcome.seconds:.1f} s; nothing was written: add --out DIR to keep curves, picture and report")
    else:
        screen.say(f"{outcome.seconds:.1f} s; written to {folder}: {', '.join(written)}")


def ready_folder(out: str) -> Path:
    """Return the folder to write to, made if need be, and known to be writable before the fit begins.

    Raises
    ------
    InputError
        When a file stands in its place or nothing can be written there.
    """
    from spinfit.files.atomic import whole_file

    folder = Path(out)
    if folder.exists() and not folder.is_dir():
        raise InputError("is a file", "name a folder for the results", place="--out", file=out)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(
            f"cannot be made ({error.strerror})", "name a folder that can be written to", place="--out", file=out
        ) from error
    try:
        with whole_file(folder / "outcome.json"):
            raise _Tried
    except _Tried:
        return folder


class _Tried(Exception):
    """Leaves a file that was only opened to see whether it can be."""


def write_outcome(folder: Path, outcome: Any) -> list[str]:
    """Write every file of an outcome, all or none: they are moved to their places when all are complete."""
    from contextlib import ExitStack

    from spinfit.files.atomic import whole_file
    from spinfit.report.archive import archive_bytes
    from spinfit.report.html import report_text
    from spinfit.report.outcome_json import curves_text, outcome_text
    from spinfit.report.plots import fit_figure, picture_bytes

    picture = picture_bytes(fit_figure(outcome))
    contents = {
        "outcome.json": outcome_text(outcome).encode(),
        "curves.csv": curves_text(outcome).encode(),
        "fit.png": picture,
        "report.html": report_text(outcome, picture).encode(),
        "outcome.h5": archive_bytes(outcome),
    }
    with ExitStack() as stack:
        places = {name: stack.enter_context(whole_file(folder / name)) for name in contents}
        for name, content in contents.items():
            places[name].write_bytes(content)
    return list(contents)


@contextmanager
def shown_progress(screen: Screen, points: int) -> Iterator[Any]:
    """Give a callback for the fit: a live line on a terminal, plain lines otherwise, None with --json."""
    if screen.as_json:
        yield None
    elif screen.is_terminal:
        from rich.console import Console
        from rich.text import Text

        console = Console(file=screen.err, stderr=True)
        with console.status("fitting") as status:

            def live(number: int, chi2: float, values: Mapping[str, float]) -> None:
                # Cut to one line beside the spinner; Text, so that nothing in a name is taken for markup.
                line = Text(progress_line(number, chi2 / points, values))
                line.truncate(max(20, console.width - 3), overflow="ellipsis")
                status.update(line)

            yield live
    else:
        last = time.monotonic()

        def plain(number: int, chi2: float, values: Mapping[str, float]) -> None:
            nonlocal last
            if time.monotonic() - last >= PROGRESS_EVERY:
                last = time.monotonic()
                screen.aside(progress_line(number, chi2 / points, values))

        yield plain


def progress_line(number: int, chi2: float, values: Mapping[str, float], *, most: int = 6) -> str:
    """Return one line on how the fit goes."""
    named = ", ".join(f"{name} {value:.6g}" for name, value in list(values.items())[:most])
    more = ", ..." if len(values) > most else ""
    return f"fitting: {number} evaluations, chi-square per point {chi2:.4g}; {named}{more}"
