"""``spinfit tune``: find the start of a fit by hand, with sliders on a live picture."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from spinfit.commands.screen import Screen
from spinfit.errors import InputError

NAME = "tune"
SUMMARY = "move the start values of a job by sliders in a window, and save them into the job file"
EXAMPLES = ("spinfit tune kiln-07.toml",)


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("job", metavar="JOB.toml", help="job file; save changes the values of what it varies, no more")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Open the window and wait until it is closed."""
    from spinfit.files.job import read_job

    job = read_job(args.job)
    check_job(job, args.job)
    pyplot = _pyplot()
    figure = pyplot.figure(figsize=(10, 7.5), num=f"spinfit tune {job.name}")
    keeper = Keeper(args.job, job)
    from spinfit.report.tuner import Tuner

    tuner = Tuner(figure, job, keeper.save)
    pyplot.show()
    screen.emit({"saved": keeper.saved is not None, "values": keeper.saved or {}, "last": tuner.values()})
    if keeper.saved is None:
        screen.say("nothing was written: the job file is as it was")
    else:
        listed = ", ".join(f"{name} = {value:.7g}" for name, value in keeper.saved.items())
        screen.say(f"written to {args.job}: {listed}")
    return 0


def check_job(job: Any, path: str) -> None:
    """Refuse a job that takes no start values.

    Raises
    ------
    InputError
    """
    if job.start == "auto":
        raise InputError('"auto"', 'write start = "given" and values to start from', place="fit.start", file=path)


class Keeper:
    """Writes start values into the job file it was made for, and into no other version of it.

    Parameters
    ----------
    path : str
    job : Job
        As read from there.

    Attributes
    ----------
    saved : mapping of name -> value, or None
        What was written last.
    """

    def __init__(self, path: str, job: Any) -> None:
        from spinfit.fitting.parameters import Binding

        self.path, self.saved = path, None
        self._text = Path(path).read_bytes().decode("utf-8")
        self._binding = Binding(job.species, job.sample, (*job.traces, *job.lines), units=job.units)

    def save(self, values: dict[str, float]) -> str:
        """Write the values and say so.

        Raises
        ------
        InputError
            When the file was changed by somebody else meanwhile, or cannot be written.
        """
        from spinfit.files.atomic import write_bytes
        from spinfit.files.toml_values import with_values

        if Path(self.path).read_bytes().decode("utf-8") != self._text:
            raise InputError("was changed meanwhile", "close the window and tune the new file", file=self.path)
        text, left_out = with_values(self._text, values, self._binding)
        write_bytes(self.path, text.encode("utf-8"))
        self._text = text
        self.saved = {name: value for name, value in values.items() if name not in left_out}
        said = f"saved into {self.path}"
        return f"{said}, but not {', '.join(left_out)}: the file has no key for that" if left_out else said


def _pyplot() -> Any:
    """Return pyplot with a window behind it.

    Raises
    ------
    InputError
        On a machine without a screen, or where Python can open no window.
    """
    from matplotlib import pyplot
    from matplotlib.backends.registry import BackendFilter, backend_registry

    right = "tune where there is a screen, or look at a start with spinfit simulate MODEL.toml --plot FILE.png"
    try:
        name = pyplot.get_backend().lower()
    except ImportError as error:
        raise InputError(f"no window can be opened ({error})", right, place="tune") from None
    if name not in {each.lower() for each in backend_registry.list_builtin(BackendFilter.INTERACTIVE)}:
        raise InputError(
            "no window can be opened: there is no screen, or this Python has neither tkinter nor Qt",
            right,
            place="tune",
        )
    return pyplot
