"""``spinfit batch``: many fits, in parallel, that go on where they were cut short."""

from __future__ import annotations

import argparse
import os
import signal
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from spinfit.commands.screen import Screen, quantity
from spinfit.errors import InputError, on_one_line

NAME = "batch"
SUMMARY = "fit many traces in parallel into one table; the same command goes on where it was cut short"
EXAMPLES = (
    "spinfit batch jobs/*.toml --out results",
    "spinfit batch --template kiln.toml traces/*.csv --out results",
    "spinfit batch --template kiln.toml --values series.csv --out results --workers 4",
    'spinfit batch jobs/*.toml --out results --time-limit "60 s" --no-pictures',
    "spinfit batch --template kiln.toml traces/*.csv --out results --cluster tcp://node-1:8786",
)
MOST_WORKERS = 1024
# Failed traces named in the JSON document; the table has all of them.
MOST_NAMED = 100


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("files", metavar="FILE", nargs="*", help="job files; with --template, the traces")
    parser.add_argument("--out", metavar="DIR", required=True, help="folder for the table and one folder a trace")
    parser.add_argument("--template", metavar="JOB.toml", help="a job whose one [[trace]] stands for each FILE in turn")
    parser.add_argument(
        "--values",
        metavar="TABLE.csv",
        help="csv with a row a trace: its file, then columns such as temperature_K, frequency, name, or your own; "
        "without FILE the table says which traces",
    )
    parser.add_argument("--workers", metavar="N", help="processes side by side; by default one a core")
    parser.add_argument("--cluster", metavar="ADDRESS", help="hand the fits to the Dask scheduler there")
    parser.add_argument(
        "--time-limit", metavar="QUANTITY", help='for each fit, such as "60 s"; its best so far is kept'
    )
    parser.add_argument("--no-pictures", action="store_true", help="leave out fit.png, fit.svg and report.html")
    parser.add_argument("--no-archive", action="store_true", help="leave out batch.h5, which holds every outcome again")
    parser.add_argument("--retry", action="store_true", help="repeat what did not come out good though nothing changed")
    parser.add_argument("--parquet", action="store_true", help="write summary.parquet as well (needs pyarrow)")
    parser.add_argument("--quiet", action="store_true", help="say nothing but what went wrong")
    parser.add_argument("--verbose", action="store_true", help="a line for each trace that ends")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Plan, fit, report."""
    from spinfit.batch.run import run_batch
    from spinfit.commands.batch_screen import shown

    _check(args)
    limit = quantity(args.time_limit, "time", "--time-limit")
    if limit is not None and limit <= 0:
        raise InputError(f'"{args.time_limit}"', 'write a time such as "60 s"', place="--time-limit")
    plan = _plan(args)
    with _executor(args) as (executor, in_flight), _terminable(), shown(screen, args) as listener:
        report = run_batch(
            plan,
            args.out,
            executor=executor,
            in_flight=in_flight,
            time_limit=limit,
            pictures=not args.no_pictures,
            retry=args.retry,
            listener=listener,
        )
    written = [report.summary.name]
    if args.parquet and report.summary.exists():
        written.append(_write_parquet(report.summary))
    wrong = [] if report.stopped else _more(report, written, archive=not args.no_archive)
    _say(args, screen, report, written, wrong)
    return 0 if report.good and not wrong else 1


def _check(args: argparse.Namespace) -> None:
    """Refuse what does not go together."""
    if args.values is not None and args.template is None:
        raise InputError("goes with --template only", "add --template JOB.toml, or take it out", place="--values")
    if not args.files and args.values is None:
        what = "traces" if args.template else "job files"
        raise InputError(f"no {what}", f"name one or more {what}", place="batch")
    if args.workers is not None and args.cluster is not None:
        raise InputError(
            "does not go with --cluster", "the cluster has its own workers: take it out", place="--workers"
        )
    if args.quiet and args.verbose:
        raise InputError("does not go with --verbose", "take one of the two out", place="--quiet")
    if args.parquet:
        _pyarrow()
    if args.template is None:
        for file in args.files:
            if not file.lower().endswith(".toml"):
                right = "give job files, or add --template JOB.toml in front of the traces"
                raise InputError("is not a job file", right, place="batch", file=file)


def _plan(args: argparse.Namespace) -> Any:
    from spinfit.batch.tasks import jobs_plan, template_plan
    from spinfit.batch.template import Template
    from spinfit.batch.values import read_values

    if args.template is None:
        return jobs_plan(args.files)
    values = None if args.values is None else read_values(args.values)
    return template_plan(Template(args.template), args.files, values)


def _workers(text: str | None) -> int:
    if text is None:
        return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    if not text.isdigit() or not 1 <= int(text) <= MOST_WORKERS:
        raise InputError(f'"{text}"', f"write a whole number from 1 to {MOST_WORKERS}", place="--workers")
    return int(text)


@contextmanager
def _executor(args: argparse.Namespace) -> Iterator[tuple[Any, int | None]]:
    """Give where the fits run, and how many are handed out at a time."""
    if args.cluster is None:
        from spinfit.batch.records import WORK
        from spinfit.batch.workers import process_pool

        count = _workers(args.workers)
        yield lambda: process_pool(count, preload=(WORK,)), None
        return
    from spinfit.commands.cluster import connected

    with connected(args.cluster) as (executor, threads):
        yield executor, 2 * threads


@contextmanager
def _terminable() -> Iterator[None]:
    """Let SIGTERM, which queues send before they kill, end the batch as Ctrl-C does: with its table written."""

    def stop(number: int, frame: object) -> None:
        raise KeyboardInterrupt

    try:
        before = signal.signal(signal.SIGTERM, stop)
    except ValueError:  # not in the main thread, where no signal arrives
        yield
        return
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _pyarrow() -> Any:
    try:
        import pyarrow.csv
        import pyarrow.parquet
    except ImportError:
        raise InputError("pyarrow is not installed", "install it, or leave this out", place="--parquet") from None
    return pyarrow


def _write_parquet(summary: Path) -> str:
    """Write the table once more as parquet; pyarrow tells numbers from words as pandas does."""
    from spinfit.batch.table import TEXTS
    from spinfit.files.atomic import whole_file

    pyarrow = _pyarrow()
    # Said for the columns of texts, so that tables of several batches fit together where one has no text.
    types = pyarrow.csv.ConvertOptions(column_types=dict.fromkeys(TEXTS, pyarrow.string()))
    table = pyarrow.csv.read_csv(summary, convert_options=types)
    path = summary.with_suffix(".parquet")
    with whole_file(path) as beside:
        pyarrow.parquet.write_table(table, beside)
    return path.name


def _more(report: Any, written: list[str], *, archive: bool) -> list[str]:
    """Make archive and report where they are not up to date; what goes wrong costs nothing of what is written."""
    from spinfit.batch.journal import journal_records
    from spinfit.report.batch_archive import write_batch_archive
    from spinfit.report.batch_html import write_batch_report

    folder, wrong = report.summary.parent, []

    def archived(folder: Path) -> Path:
        # Those that wrote them have put down what they wrote.
        known = {one["trace"]: one["archive"] for one in journal_records(folder) if "archive" in one}
        return write_batch_archive(folder, known)

    makers = {"batch.h5": archived} if archive else {}
    for name, make in (makers | {"report.html": write_batch_report}).items():
        if not report.changed and (folder / name).exists():
            continue
        try:
            written.append(make(folder).name)
        except (InputError, OSError, MemoryError) as error:
            wrong.append(f"{name} was not written: {error}")
    if not archive and report.changed:
        (folder / "batch.h5").unlink(missing_ok=True)  # it would tell of another batch
    return wrong


def _say(args: argparse.Namespace, screen: Screen, report: Any, written: list[str], wrong: list[str]) -> None:
    """Say what came of it."""
    screen.emit(
        {
            "folder": args.out,
            "written": written,
            "traces": sum(report.counts.values()),
            "counts": report.counts,
            "fitted": report.fitted,
            "kept": report.kept,
            "stopped": report.stopped or None,
            "failed": _failed(report.summary, MOST_NAMED),
            "wrong": wrong,
            "seconds": round(report.seconds, 3),
        }
    )
    for line in wrong:
        screen.aside(line)
    if report.stopped:
        screen.aside(f"{report.stopped}; what is finished is kept, and the same command goes on from there")
    if args.quiet:
        return
    counts = ", ".join(f"{number} {status}" for status, number in report.counts.items())
    screen.say(f"{counts or 'nothing'} ({report.fitted} fitted now, {report.kept} before); {report.seconds:.1f} s")
    if report.changed:
        screen.say(f"written to {on_one_line(args.out)}: {', '.join(written)}, and a folder a trace")
    screen.say(f"spinfit summary {on_one_line(args.out)} shows the table")


def _failed(summary: Path, most: int) -> list[dict[str, str]]:
    """Return the first failed rows of a table with their reasons."""
    import csv
    from itertools import islice

    if not summary.exists():
        return []
    with open(summary, encoding="utf-8", newline="") as stream:
        rows = (row for row in csv.DictReader(stream) if row["status"] == "failed")
        return [{"trace": row["trace"], "reason": row["reason"]} for row in islice(rows, most)]
