"""``spinfit fit``: the main job, from a measured trace to a g-tensor with uncertainties."""

from __future__ import annotations

import argparse
import os
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from dataclasses import replace
from pathlib import Path
from typing import Any

from spinfit.commands.screen import Screen
from spinfit.errors import InputError, on_one_line

NAME = "fit"
SUMMARY = "fit a model to measured traces: values, uncertainties, pictures"
EXAMPLES = (
    "spinfit fit kiln-07.toml",
    "spinfit fit kiln-07.toml --out kiln-07",
    "spinfit fit kiln-07.toml --json",
    "spinfit fit kiln-07.toml --out kiln-07 --profile cu.g_z --bootstrap 200",
    "spinfit fit kiln-07.toml --sample 1000",
    "spinfit fit axial.toml rhombic.toml --compare",
)
# Seconds between lines of progress where nobody watches a terminal.
PROGRESS_EVERY = 5.0


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("job", metavar="JOB.toml", nargs="+", help="job file; several with --compare")
    parser.add_argument(
        "--out",
        metavar="DIR",
        help="write outcome.json, curves.csv, fit.png, fit.svg, report.html and outcome.h5 there; "
        "without it nothing is written",
    )
    parser.add_argument(
        "--profile",
        metavar="NAME",
        nargs="+",
        action="extend",
        default=[],
        help="hold a varied parameter at values around the best and refit the others; give NAMEs after the job",
    )
    parser.add_argument(
        "--bootstrap", metavar="N", help="refit N traces of resampled residuals; 200 give an uncertainty to 5 %%"
    )
    parser.add_argument(
        "--sample", metavar="N", help="sample the posterior by walkers of N steps (needs emcee); 1000 is a beginning"
    )
    parser.add_argument(
        "--compare", action="store_true", help="fit several jobs to the same data and say which model it supports"
    )


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Fit, print, write."""
    from spinfit.files.job import read_job

    resamples = _count(args.bootstrap)
    steps = _count(args.sample, "--sample", "1000")
    if args.compare:
        return _compare(args, screen)
    if len(args.job) > 1:
        raise InputError(
            f'"{args.job[1]}" is one argument too many', "fit jobs one by one, or add --compare", place="fit"
        )
    job = read_job(args.job[0])
    _check_profiled(job, args.profile, resamples)
    if steps:
        from spinfit.fitting.sampling import check_sampling

        check_sampling(job, steps)
    is_new = args.out is not None and not Path(args.out).exists()
    folder = None if args.out is None else ready_folder(args.out)
    try:
        outcome, tried = _fitted(job, args.profile, resamples, steps, screen)
        written, trouble = kept(folder, job, outcome, **tried)
        _say(screen, outcome, folder, written, **tried)
        if trouble is not None:
            raise trouble
    except BaseException:
        if is_new and folder is not None:  # a refused fit leaves no empty folder behind
            with suppress(OSError):
                folder.rmdir()
        raise
    return _code(outcome)


def _code(outcome: Any) -> int:
    return 0 if outcome.quality.converged and outcome.quality.finished else 1


def _count(text: str | None, option: str = "--bootstrap", example: str = "200") -> int:
    """Return the number of resamples or steps, 0 for none."""
    if text is None:
        return 0
    if not text.isdigit() or not 2 <= int(text) <= 100_000:
        raise InputError(f'"{text}"', f"write a whole number from 2 to 100000, such as {example}", place=option)
    return int(text)


def _check_profiled(job: Any, names: list[str], resamples: int) -> None:
    """Refuse names that cannot be profiled before the fit, not after it."""
    from spinfit.fitting.parameters import Binding, expand_vary, members

    if job.lines and (names or resamples):
        option = "--profile" if names else "--bootstrap"
        raise InputError("the job fits line positions", f"take {option} out: it is for traces", place=option)
    if not names:
        return
    parameters = Binding(job.species, job.sample, job.traces).parameters
    varied = expand_vary(job.vary, parameters)
    for name in names:
        if not any(member in varied for member in members(name, parameters, place="--profile")):
            raise InputError(f'"{name}" is not varied', "name one of " + ", ".join(varied[:8]), place="--profile")


def _fitted(job: Any, profiled: list[str], resamples: int, steps: int, screen: Screen) -> tuple[Any, dict[str, Any]]:
    """Fit, then whatever was asked for beyond it: profiles, resampled, posterior."""
    from spinfit.fitting.driver import fit
    from spinfit.fitting.parameters import Binding, members
    from spinfit.fitting.resample import bootstrap, profile
    from spinfit.fitting.sampling import sample

    points = max(1, sum(int(trace.used.sum()) for trace in job.traces) + sum(len(one.field) for one in job.lines))
    with shown_progress(screen, points) as progress:
        outcome = fit(job, progress=progress)
        profiles, resampled, posterior = (), None, None
        if outcome.quality.finished and profiled:
            every = Binding(job.species, job.sample, job.traces).parameters
            asked = [m for name in profiled for m in members(name, every, place="--profile")]
            known = [m for m in dict.fromkeys(asked) if outcome.parameters[m].uncertainty_noise is not None]
            profiles = profile(job, outcome, known, progress=progress) if known else ()
        if outcome.quality.finished and resamples:
            resampled = bootstrap(job, outcome, resamples, progress=progress)
        if outcome.quality.finished and steps:
            posterior = sample(job, outcome, steps, progress=progress)
            outcome = replace(outcome, warnings=(*outcome.warnings, *posterior.notes))
    return outcome, {"profiles": profiles, "resampled": resampled, "posterior": posterior}


def _compare(args: argparse.Namespace, screen: Screen) -> int:
    """Fit every job and rank the models; with --out each job has a folder of its own in it."""
    from spinfit.files.job import read_job
    from spinfit.fitting.comparison import compare

    for option, given in (("--profile", args.profile), ("--bootstrap", args.bootstrap), ("--sample", args.sample)):
        if given:
            raise InputError("does not go with --compare", f"take {option} out", place=option)
    if len(args.job) < 2:
        raise InputError("one job", "name two or more job files to compare", place="--compare")
    jobs = [read_job(path) for path in args.job]
    names = [job.name for job in jobs]
    for name in names:
        if names.count(name) > 1:
            raise InputError(f'two jobs are called "{name}"', "give their files different names", place="--compare")
        if name.startswith("."):  # the stem of "...toml" is ".."
            raise InputError(
                f'"{name}" cannot be the name of a folder', "give the file another name", place="--compare"
            )
    paths = [] if args.out is None else [Path(args.out), *(Path(args.out) / name for name in names)]
    fresh = [path for path in paths if not path.exists()]
    folders = [None if args.out is None else ready_folder(str(Path(args.out) / name)) for name in names]
    outcomes, troubles = [], []
    try:
        for job, folder in zip(jobs, folders, strict=True):
            outcome, _ = _fitted(job, [], 0, 0, screen)
            troubles.append(kept(folder, job, outcome)[1])
            outcomes.append(outcome)
        found = compare(outcomes)
        _say_comparison(screen, outcomes, found)
        for trouble in filter(None, troubles):
            raise trouble
    except BaseException:
        for path in reversed(fresh):  # those that hold nothing go again
            with suppress(OSError):
                path.rmdir()
        raise
    if args.out is not None:
        screen.say(f"\nwritten to {on_one_line(args.out)}: {', '.join(names)}")
    return max(map(_code, outcomes))


def _say_comparison(screen: Screen, outcomes: list[Any], found: Any) -> None:
    from spinfit.report.outcome_json import outcome_record
    from spinfit.report.tables import outcome_lines
    from spinfit.report.tried import comparison_lines

    records = {one.name: outcome_record(one) for one in outcomes}
    screen.emit({"comparison": found, "outcomes": records})
    for outcome in outcomes:
        screen.say(outcome_lines(outcome))
        screen.say()
    screen.say(comparison_lines(found))


def _say(
    screen: Screen,
    outcome: Any,
    folder: Path | None,
    written: list[str],
    *,
    profiles: Any = (),
    resampled: Any = None,
    posterior: Any = None,
) -> None:
    from spinfit.report.outcome_files import more_record
    from spinfit.report.outcome_json import outcome_record
    from spinfit.report.tables import outcome_lines
    from spinfit.report.tried import bootstrap_table, budget_table, posterior_table, profile_table

    screen.emit(outcome_record(outcome, more_record(profiles, resampled, posterior)))
    blocks = (
        outcome_lines(outcome),
        budget_table(outcome),
        profile_table(profiles),
        bootstrap_table(resampled, outcome),
        posterior_table(posterior, outcome),
    )
    screen.say("\n\n".join(block for block in blocks if block))
    screen.say()
    if folder is None:
        screen.say(f"{outcome.seconds:.1f} s; nothing was written: add --out DIR to keep curves, picture and report")
    elif written:
        screen.say(f"{outcome.seconds:.1f} s; written to {on_one_line(str(folder))}: {', '.join(written)}")
    else:
        screen.say(f"{outcome.seconds:.1f} s; nothing could be written: the numbers above are all that is left of it")


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


def kept(folder: Path | None, job: Any, outcome: Any, **tried: Any) -> tuple[list[str], Exception | None]:
    """Write an outcome; return the files' names, or none and what went wrong: what was fitted is to be shown first."""
    if folder is None:
        return [], None
    try:
        return write_outcome(folder, job, outcome, **tried), None
    except Exception as error:
        return [], error


def write_outcome(
    folder: Path, job: Any, outcome: Any, *, profiles: Any = (), resampled: Any = None, posterior: Any = None
) -> list[str]:
    """Write every file of an outcome, all or none: they are moved to their places when all are complete."""
    from contextlib import ExitStack

    from spinfit.files.atomic import whole_file
    from spinfit.report.outcome_files import outcome_files

    contents = outcome_files(outcome, job=job, profiles=profiles, resampled=resampled, posterior=posterior)
    with ExitStack() as stack:
        places = {name: stack.enter_context(whole_file(folder / name)) for name in contents}
        for name, content in contents.items():
            with open(places[name], "wb") as stream:
                stream.write(content)
                stream.flush()
                os.fsync(stream.fileno())  # some systems find only here that there is no room
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
