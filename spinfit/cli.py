"""``spinfit``: find the command, run it, turn what it raises into one line and an exit code.

Exit codes: 0 done; 1 ran, but the result is not good; 2 bad input; 3 a fault of ours.
"""

from __future__ import annotations

import argparse
import os
import sys
import traceback
import warnings
from collections.abc import Sequence
from contextlib import suppress
from typing import Any

from spinfit import __version__
from spinfit.commands import TABLE
from spinfit.commands.screen import Screen
from spinfit.errors import InputError, SpinfitError, nearest, on_one_line
from spinfit.threads import one_thread

COMMON = ("--json", "--debug")


class _Parser(argparse.ArgumentParser):
    """An argument parser that raises `InputError` where argparse would print its usage and exit."""

    def _print_message(self, message: str, file: Any = None) -> None:
        (file or sys.stderr).write(message)  # argparse passes over a full disk

    def error(self, message: str) -> None:
        raise InputError(message, f'see "{self.prog} --help"', place=self.prog.removeprefix("spinfit").strip() or None)


def _top_help() -> str:
    width = max(map(len, TABLE))
    listed = "\n".join(f"  {name:<{width}}  {module.SUMMARY}" for name, module in TABLE.items())
    return f"""usage: spinfit COMMAND ... [--json] [--debug]
       spinfit COMMAND --help

From a measured magnetic-resonance trace to a g-tensor that stands up.

commands:
{listed}

options:
  --help     this text; after a command, its own with an example
  --version  the version
  --json     standard output holds one JSON document and nothing else
  --debug    show where in the program an error arose

example:
  spinfit fit kiln-07.toml --out kiln-07

exit codes: 0 done; 1 ran, but the result is not good; 2 bad input; 3 a fault of spinfit
"""


def build_parser(name: str) -> argparse.ArgumentParser:
    """Return the parser of one command."""
    module = TABLE[name]
    parser = _Parser(
        prog=f"spinfit {name}",
        description=module.SUMMARY[0].upper() + module.SUMMARY[1:] + ".",
        epilog="examples:\n" + "\n".join(f"  {line}" for line in module.EXAMPLES),
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    module.options(parser)
    parser.add_argument("--json", action="store_true", help="print one JSON document and nothing else")
    parser.add_argument("--debug", action="store_true", help="show where in the program an error arose")
    return parser


def _parsed(name: str, arguments: list[str]) -> argparse.Namespace:
    """Parse a command's arguments; unknown options are refused with the nearest known."""
    parser = build_parser(name)
    known = {option for action in parser._actions for option in action.option_strings}
    for argument in arguments:
        if argument == "--":
            break
        option = argument.partition("=")[0]
        if option.startswith("--") and option not in known:
            raise InputError(f'there is no option "{option}"', nearest(option, known), place=name)
    args, extra = parser.parse_known_args(arguments)
    if extra:
        raise InputError(f'"{extra[0]}" is one argument too many', f'see "spinfit {name} --help"', place=name)
    return args


def _run(argv: list[str]) -> int:
    """Run a command line and return its exit code."""
    before: list[str] = []
    while argv and argv[0] in COMMON:
        before.append(argv.pop(0))
    if not argv or argv[0] in ("--help", "-h", "help"):
        sys.stdout.write(_top_help())
        return 0
    if argv[0] == "--version":
        print(f"spinfit {__version__}")
        return 0
    name = argv.pop(0)
    if name not in TABLE:
        kind = "option" if name.startswith("-") else "command"
        words = TABLE if kind == "command" else ("--help", "--version", *COMMON)
        raise InputError(f'there is no {kind} "{name}"', nearest(name, words))
    args = _parsed(name, argv + before)
    return TABLE[name].run(args, Screen(as_json=args.json))


def _one_line(text: object) -> str:
    return on_one_line(str(text))


def _verdict(error: BaseException) -> tuple[str, int]:
    """Return what to say of an error, in one line, and the exit code."""
    if isinstance(error, KeyboardInterrupt):
        return "stopped", 1
    if isinstance(error, SpinfitError):
        return _one_line(error), error.exit_code
    if isinstance(error, MemoryError):
        return f"not enough memory ({_one_line(error) or 'none left'}); ask for fewer points or smaller spins", 2
    if isinstance(error, OSError):
        where = f"{error.filename}: " if error.filename else ""
        return _one_line(f"{where}{error.strerror or error}; check the name, the permissions and the free space"), 2
    what = _one_line(f"{type(error).__name__}: {error}")
    report = "please report it on the project's issue tracker with the command line and the file"
    return f"a fault of spinfit, not yours: {what}; {report} (--debug shows where it arose)", 3


def _open_streams() -> None:
    """Put something in the place of standard streams that are closed, as under some schedulers.

    The next file that is opened would get a closed stream's number, and what a library says there would go into it.
    """
    for number in range(3):
        try:
            os.fstat(number)
        except OSError:
            opened = os.open(os.devnull, os.O_RDWR)
            if opened != number:
                os.dup2(opened, number)
                os.close(opened)
    for name in ("stdout", "stderr"):
        stream = getattr(sys, name)
        if stream is None:  # it was closed before Python began
            setattr(sys, name, open(os.devnull, "w", encoding="utf-8"))
        elif hasattr(stream, "reconfigure"):  # a terminal that cannot show a character shows "?" in its place
            stream.reconfigure(errors="replace")


def _leave_quietly(stream: Any) -> None:
    """Point a stream at nothing, so that the interpreter's last flush finds no broken pipe and no full disk."""
    with suppress(OSError, ValueError, AttributeError):  # it has no file descriptor
        os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())


def _complain(message: str) -> None:
    """Write a line on standard error, where there is room for it."""
    try:
        print(f"spinfit: {message}", file=sys.stderr, flush=True)
    except OSError:
        _leave_quietly(sys.stderr)


def main(argv: Sequence[str] | None = None) -> int:
    """Run ``spinfit`` with `argv` (by default the process's own) and return the exit code."""
    one_thread()
    arguments = list(sys.argv[1:] if argv is None else argv)
    debug = "--debug" in arguments
    _open_streams()
    with warnings.catch_warnings():
        if not debug and not sys.warnoptions:
            warnings.simplefilter("ignore")  # a library's own warnings are not for users; ours are in the outcome
        try:
            try:
                code = _run(arguments)
            except SystemExit as leaving:  # argparse's --help
                code = leaving.code if isinstance(leaving.code, int) else 0
            sys.stdout.flush()
            return code
        except BrokenPipeError:  # whoever read our output has seen enough: "spinfit simulate ... | head"
            _leave_quietly(sys.stdout)
            return 0
        except (Exception, KeyboardInterrupt) as error:
            if debug:
                with suppress(OSError):
                    traceback.print_exception(error)
            message, code = _verdict(error)
            _complain(message)
            try:
                sys.stdout.flush()
            except OSError:  # what could not be written cannot be written at the end either
                _leave_quietly(sys.stdout)
            return code


if __name__ == "__main__":
    sys.exit(main())
