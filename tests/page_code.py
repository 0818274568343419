"""Code blocks of the pages: found, told apart, run.  Shared by the tests and ``scripts/campaign pages``.

A block is a fence that names its language.  What is done with it follows from the language and from a comment on the
line above the fence, which a rendered page does not show:

=====================  ====================================================================================
``sh``                 every line is run, in the page's own folder; exit code 0, or ``<!-- exit: N -->``
``python``             run, one namespace a page
``<!-- file: F -->``   a ``toml`` or ``text`` block is written there
``<!-- into: F -->``   a part of a ``toml`` file: read, and put into the file that is there
``<!-- output -->``    ``text``: what the block above prints; a line of ``...`` leaves something out
``<!-- picture: F -->``  above a picture: where the code of the page draws it
``<!-- formula -->``   ``text``: nothing to run
``<!-- checked by: T -->``  the test T runs it or compares it
``<!-- slow -->``      run by ``scripts/campaign pages`` only, as is what is said to come out of it
``<!-- not run: R -->``  with the reason R
=====================  ====================================================================================
"""

from __future__ import annotations

import contextlib
import glob
import io
import json
import os
import re
import shlex
import subprocess
import sys
import textwrap
import tomllib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import tomlkit
from page_files import FILES

from spinfit.cli import main

ROOT = Path(__file__).resolve().parents[1]
MARKS = ("file", "into", "output", "picture", "formula", "checked by", "slow", "not run", "exit")
NEEDS_TEXT = ("file", "into", "picture", "checked by", "not run", "exit")
LANGUAGES = ("sh", "python", "toml", "text")
# Said on standard error while something takes long, so only on slow machines.
PROGRESS = re.compile(r"^spinfit: (?:fitting\b|\d+ of \d+ done).*\n?", re.MULTILINE)
FENCE = re.compile(r"^( *)(```+)(\S*) *$")
COMMENT = re.compile(r"^ *<!-- *(.*?) *--> *$")
PICTURE = re.compile(r"^!\[[^\]]*\]\(([^)]+)\)")
SHELL = set("|&;<>$`(){}!=~")
# The pages that the code writes whole, and the test that compares them with it.
MADE = {"docs/commands.md": "tests/test_docs.py", "docs/keys.md": "tests/test_keys.py"}


class BadPage(AssertionError):
    """A page does not do what it shows; the text says where."""


@dataclass(frozen=True)
class Block:
    """A fenced block, or a picture, with what stands above it."""

    page: Path
    line: int
    language: str
    text: str
    marks: dict[str, str] = field(default_factory=dict)

    @property
    def where(self) -> str:
        return f"{self.page.relative_to(ROOT)}:{self.line}"

    @property
    def slow(self) -> bool:
        return "slow" in self.marks

    @property
    def fate(self) -> str:
        """Return what is done with the block; raise where nothing says so."""
        asked = [mark for mark in self.marks if mark not in ("slow", "exit")]
        fits = {"toml": ("file", "into"), "text": ("file", "output", "formula"), "sh": (), "python": ("file",)}
        if self.language == "picture":
            return "picture"
        if len(asked) > 1:
            raise BadPage(f"{self.where}: {' and '.join(asked)} contradict each other")
        if asked and asked[0] in ("not run", "checked by", *fits.get(self.language, ())):
            return asked[0]
        if not asked and self.language in ("sh", "python"):
            return "run"
        raise BadPage(
            f"{self.where}: a block of {self.language or 'no language'} marked {asked or 'with nothing'}: say above the"
            f" fence what it is, <!-- MARK --> with MARK one of {', '.join(MARKS)}"
        )


def marks_of(line: str) -> dict[str, str]:
    """Return the marks that a comment holds; none when it is another comment, or none."""
    found = COMMENT.match(line)
    marks = {}
    for part in found[1].split(";") if found else ():
        name, _, value = (piece.strip() for piece in part.partition(":"))
        if name not in MARKS:
            raise BadPage(f'there is no mark "{name}" of blocks: {line.strip()}')
        if (name in NEEDS_TEXT) != bool(value):
            raise BadPage(f'the mark "{name}" {"needs" if name in NEEDS_TEXT else "takes no"} text: {line.strip()}')
        marks[name] = value
    return marks


def blocks_of(page: Path) -> Iterator[Block]:
    """Yield every block of a page, and the pictures that are marked as drawn by it."""
    lines = page.read_text(encoding="utf-8").splitlines()
    at = 0
    while at < len(lines):
        fence = FENCE.match(lines[at])
        marks = marks_of(lines[at - 1]) if at else {}
        if fence is None:
            picture = PICTURE.match(lines[at])
            if picture and "picture" in marks:
                yield Block(page, at + 1, "picture", picture[1], marks)
            elif lines[at].startswith("    ") and at and not lines[at - 1].strip() and not in_a_list(lines, at):
                raise BadPage(f"{page.name}:{at + 1}: code without a fence; put ```sh, ```python, ```toml or ```text")
            at += 1
            continue
        end = next((n for n in range(at + 1, len(lines)) if lines[n].strip() == fence[2]), None)
        if end is None:
            raise BadPage(f"{page.name}:{at + 1}: the fence is never closed")
        if not fence[3].startswith("{"):  # a directive of the site
            yield Block(page, at + 1, fence[3], textwrap.dedent("\n".join(lines[at + 1 : end])) + "\n", marks)
        at = end + 1


def in_a_list(lines: list[str], at: int) -> bool:
    """Say whether an indented line goes on with an item of a list."""
    above = next((lines[n] for n in range(at - 1, -1, -1) if lines[n].strip() and not lines[n].startswith(" ")), "")
    return re.match(r"([-*]|\d+\.) ", above) is not None


# What comes out, compared with what is shown.

WITH_UNCERTAINTY = re.compile(r"^(-?\d+)(?:\.(\d+))?\((\d+)(?:\.(\d+))?\)$")
NUMBER = re.compile(r"^[-+]?\d+(?:\.\d+)?(?:[eE][-+]?\d+)?$")


def same_word(shown: str, printed: str, small: float = 0.0) -> bool:
    """Compare two words: numbers to a tenth of themselves, values with uncertainties to one of these.

    Platforms differ in the last bits, and a fit may stop a hundredth of an uncertainty away.  What is below `small`, a
    fiftieth of the whole uncertainty, may be anything as small: it is what the engine's own error makes of it.
    """
    if shown == printed:
        return True
    a, b = (word.strip("(),;:%=") for word in (shown, printed))
    if WITH_UNCERTAINTY.match(shown) and WITH_UNCERTAINTY.match(printed):
        (x, dx), (y, dy) = map(value_of, (shown, printed))
        return abs(x - y) <= max(dx, dy) and max(dx, dy) <= 1.5 * min(dx, dy)
    if NUMBER.match(a) and NUMBER.match(b):
        larger = max(abs(float(a)), abs(float(b)))
        return larger < small or abs(float(a) - float(b)) <= 0.1 * larger
    return False


def value_of(text: str) -> tuple[float, float]:
    """Return 2.0061 and 0.0002 of ``2.0061(2)``, 129.9 and 1.0 of ``129.9(1.0)``."""
    whole, decimals, digits, more = WITH_UNCERTAINTY.match(text).groups()
    value = float(f"{whole}.{decimals or 0}")
    return value, float(f"{digits}.{more}") if more else int(digits) * 10.0 ** -len(decimals or "")


def same_line(shown: str, printed: str) -> bool:
    """Compare two lines word by word; how long something took may be anything."""
    a, b = (re.sub(r"\b[\d.]+ s\b", "N s", line).split() for line in (shown, printed))
    uncertain = next((value_of(word)[1] for word in a if WITH_UNCERTAINTY.match(word)), 0.0)
    rules = all(set(word) <= {"-"} for word in a) and all(set(word) <= {"-"} for word in b)
    return len(a) == len(b) and (rules or all(same_word(x, y, 0.02 * uncertain) for x, y in zip(a, b, strict=True)))


def compare(block: Block, printed: str) -> None:
    """Raise where a page shows what was not printed."""
    left = [line for line in printed.splitlines() if line.strip()]
    gap = False
    for shown in (line for line in block.text.splitlines() if line.strip()):
        if shown.strip() == "...":
            gap = True
            continue
        reach = len(left) if gap else 1
        at = next((n for n, line in enumerate(left[:reach]) if same_line(shown, line)), None)
        if at is None:
            raise BadPage(f"{block.where}: not printed: {shown}\nbut:\n{printed}")
        left, gap = left[at + 1 :], False
    if left and not gap:
        raise BadPage(f"{block.where}: not shown: {left[0]}")


# Running.


@contextlib.contextmanager
def standing_in(folder: Path) -> Iterator[None]:
    """Work in a folder as a person at a terminal of 100 columns does, with a command ``spinfit`` that is this one."""
    programs = folder / ".programs"
    programs.mkdir(exist_ok=True)
    for name, call in (("spinfit", "-m spinfit.cli"), ("python3", "")):
        (programs / name).write_text(f'#!/bin/sh\nexec "{sys.executable}" {call} "$@"\n')
        (programs / name).chmod(0o755)
    paths = (str(ROOT), os.environ.get("PYTHONPATH", ""))
    more = {"COLUMNS": "100", "PATH": f"{programs}:{os.environ['PATH']}", "PYTHONPATH": ":".join(filter(None, paths))}
    before, here = {name: os.environ.get(name) for name in more}, Path.cwd()
    os.environ.update(more)
    os.chdir(folder)
    try:
        yield
    finally:
        os.chdir(here)
        for name, value in before.items():
            os.environ.pop(name, None) if value is None else os.environ.update({name: value})


def plain_command(line: str) -> list[str] | None:
    """Return the arguments of a line that is one call of spinfit and nothing for a shell; names expanded."""
    if SHELL & set(re.sub(r"\"[^\"$`]*\"|'[^']*'", "", line)):
        return None
    try:
        words = shlex.split(line, comments=True)
    except ValueError:  # a text that goes on in the next line
        return None
    if words[:1] != ["spinfit"]:
        return None
    return [name for word in words[1:] for name in (sorted(glob.glob(word)) if set(word) & set("*?[") else [word])]


def shell(block: Block, folder: Path) -> str:
    """Run a block's lines and return what they print: in this process where they only call spinfit, else in bash."""
    lines = [line for line in block.text.replace("\\\n", " ").splitlines() if line.split("#")[0].strip()]
    calls = [plain_command(line) for line in lines]
    wanted = int(block.marks.get("exit", 0))
    if None in calls:
        done = subprocess.run(["bash", "-ec", block.text], cwd=folder, capture_output=True, text=True, timeout=600)
        code, said = done.returncode, done.stdout + done.stderr
    else:
        said, code = "", 0
        for call in calls:
            out, err = io.StringIO(), io.StringIO()
            with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
                code = main(call) or code
            said += out.getvalue() + err.getvalue()
    if code != wanted:
        raise BadPage(f"{block.where}: exit code {code} in place of {wanted}\n{said}")
    return PROGRESS.sub("", said)


def put_into(file: Path, text: str) -> None:
    """Put the tables of a part of a job into a whole one; of lists of tables, the first into the first."""

    def merge(old: dict, new: dict) -> None:
        for key, value in new.items():
            if isinstance(value, list) and value and isinstance(value[0], dict):
                merge(old.setdefault(key, [{}])[0], value[0])
            elif isinstance(value, dict):
                merge(old.setdefault(key, {}), value)
            else:
                old[key] = value

    whole = tomllib.loads(file.read_text(encoding="utf-8"))
    merge(whole, tomllib.loads(text))
    file.write_text(tomlkit.dumps(whole), encoding="utf-8")


class Runner:
    """Runs the blocks of one page in order, in a folder that holds what its reader has.

    Parameters
    ----------
    folder : Path
        Where the page's files are, and where its code puts others.
    slow : bool
        Whether to run what is marked as slow.
    """

    def __init__(self, folder: Path, *, slow: bool = False) -> None:
        self.folder, self.slow = folder, slow
        self.names: dict[str, object] = {"__name__": "page"}
        self.printed: str | None = None
        self.ran = 0
        for name in ("demo_spectra", "scripts"):
            if not (folder / name).exists():
                (folder / name).symlink_to(ROOT / name)

    def run(self, block: Block) -> None:
        """Do with a block what it says."""
        fate = block.fate
        if fate in ("formula", "not run", "checked by") or (block.slow and not self.slow):
            # What a block that did not run prints is not known; its output is marked alike.
            return
        with standing_in(self.folder):
            if fate == "file":
                Path(block.marks["file"]).parent.mkdir(parents=True, exist_ok=True)
                Path(block.marks["file"]).write_text(block.text, encoding="utf-8")
            elif fate == "into":
                put_into(Path(block.marks["into"]), block.text)
            elif fate == "output":
                if self.printed is None:
                    raise BadPage(f"{block.where}: nothing was run above this output")
                compare(block, self.printed)
            elif fate == "picture":
                drawn = Path(block.marks["picture"])
                if not drawn.is_file() or drawn.read_bytes()[:4] != b"\x89PNG":
                    raise BadPage(f"{block.where}: {drawn} was not drawn")
            elif block.language == "sh":
                self.printed = shell(block, self.folder)
                self.ran += 1
            else:
                said = io.StringIO()
                with contextlib.redirect_stdout(said):
                    exec(compile(block.text, block.where, "exec"), self.names)
                self.printed = said.getvalue()
                self.ran += 1


def run_page(
    page: Path, folder: Path, *, slow: bool = False, seen: Callable[[Block, Runner], None] | None = None
) -> int:
    """Run a page's code in a folder and return how many blocks were run; `seen` is told of each block."""
    files = FILES.get(page.relative_to(ROOT).as_posix())
    runner = Runner(folder, slow=slow)
    with contextlib.redirect_stdout(io.StringIO()):
        if files:
            files(folder)
    for block in blocks_of(page):
        parsed(block.text, block.language)
        if seen:
            seen(block, runner)
        runner.run(block)
    return runner.ran


def parsed(text: str, language: str) -> None:
    """Raise where a block is not what its language says: run or not, it has to be readable."""
    if language == "toml":
        tomllib.loads(text)
    elif language == "python":
        compile(text, "page", "exec")
    elif language == "json":
        json.loads(text)
