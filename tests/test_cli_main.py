"""The command line itself: help, exit codes, one line on standard error, JSON alone on standard output."""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys

import pytest

from spinfit import __version__, commands
from spinfit.cli import build_parser, main
from spinfit.errors import InputError
from spinfit.threads import COMPILED, THREADS


def test_top_help_names_every_command(capsys):
    for argv in (["--help"], ["-h"], []):
        assert main(argv) == 0
        out, err = capsys.readouterr()
        assert err == ""
        assert all(f"  {name} " in out for name in commands.TABLE)
        assert "example" in out


@pytest.mark.parametrize("name", sorted(commands.TABLE))
def test_help_of_a_command_shows_an_example_that_parses(name, capsys):
    assert main([name, "--help"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "examples:" in out
    import shlex

    for example in commands.TABLE[name].EXAMPLES:
        assert example in out
        inner = re.search(r"\$\((.*)\)", example)  # a shell reads what the command prints
        words = shlex.split(inner[1] if inner else example)
        words = words[: words.index(">")] if ">" in words else words
        assert words[:2] == ["spinfit", name]
        build_parser(name).parse_args(words[2:])  # raises InputError for an option that is not there


def test_version(capsys):
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"spinfit {__version__}\n"


@pytest.mark.parametrize(
    ("argv", "says"),
    [
        (["fti"], 'there is no command "fti"; did you mean "fit"?'),
        (["simulat", "x.toml"], 'did you mean "simulate"?'),
        (["--jsn", "fit"], 'there is no option "--jsn"; did you mean "--json"?'),
        (["fit"], "JOB.toml"),
        (["fit", "a.toml", "b.toml"], '"b.toml" is one argument too many'),
        (["simulate", "x.toml", "--plt", "x.png"], 'there is no option "--plt"; did you mean "--plot"?'),
        (["simulate", "x.toml", "--plt=x.png"], 'did you mean "--plot"?'),
        (["inspect", "x.csv", "--direction", "sideways"], "sideways"),
    ],
)
def test_misuse_is_one_line_and_exit_2(argv, says, capsys):
    assert main(argv) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert says in err


class Raising:
    """A command that does one thing: raise."""

    NAME = "convert"
    SUMMARY = "raises"
    EXAMPLES = ("spinfit convert",)

    def __init__(self, error):
        self.error = error

    def options(self, parser):
        pass

    def run(self, args, screen):
        raise self.error


@pytest.mark.parametrize(
    ("error", "code", "says"),
    [
        (
            InputError("found\nover two lines", "right", place="key", file="f.toml"),
            2,
            "f.toml: key: found over two lines; right",
        ),
        (PermissionError(13, "Permission denied", "there.csv"), 2, "there.csv: Permission denied"),
        (OSError(28, "No space left on device"), 2, "No space left on device"),
        (MemoryError(), 2, "not enough memory"),
        (KeyboardInterrupt(), 1, "stopped"),
        (ValueError("boom\nin two lines"), 3, "ValueError: boom in two lines"),
        (ZeroDivisionError("x"), 3, "report it on the project's issue tracker with the command line and the file"),
    ],
)
def test_what_is_raised_becomes_one_line_and_a_code(error, code, says, monkeypatch, capsys):
    monkeypatch.setitem(commands.TABLE, "convert", Raising(error))
    assert main(["convert"]) == code
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert says in err
    assert "Traceback" not in err


def test_debug_shows_where(monkeypatch, capsys):
    monkeypatch.setitem(commands.TABLE, "convert", Raising(ValueError("boom")))
    assert main(["convert", "--debug"]) == 3
    assert "Traceback" in capsys.readouterr().err


def test_json_and_debug_may_stand_before_the_command(capsys):
    assert main(["--json", "ion", "Er3+"]) == 0
    assert json.loads(capsys.readouterr().out)[0]["term"] == "4I15/2"


def test_a_reader_that_leaves_early_is_no_error(tmp_path):
    model = tmp_path / "m.toml"
    model.write_text(
        '[sweep]\nfrequency = "9.5 GHz"\nfield = "300, 380 mT"\npoints = 200000\n'
        '[[species]]\nS = "1/2"\ng = 2.0\n[species.width]\ngaussian = "1 mT"\n'
    )
    code = f"import sys; from spinfit.cli import main; sys.exit(main(['simulate', {str(model)!r}]))"
    process = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    assert process.stdout.readline() == b"field_mT,signal\n"
    process.stdout.close()
    err = process.stderr.read()
    process.stderr.close()
    assert process.wait(60) == 0
    assert err == b""


@pytest.mark.parametrize("argv", [["--help"], ["fit", "--help"], ["fti"], ["--version"]])
def test_help_and_refusals_import_nothing_heavy(argv):
    script = (
        "import sys\nfrom spinfit.cli import main\n"
        f"main({argv!r})\n"
        "heavy = [m for m in ('numpy', 'scipy', 'scipy.optimize', 'pandas', 'matplotlib', 'lmfit', 'h5py', 'rich')"
        " if m in sys.modules]\n"
        "sys.stderr.write('HEAVY ' + ' '.join(heavy))"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=60, check=True)
    assert done.stderr.rpartition("HEAVY ")[2].split() == []


@pytest.mark.parametrize(("given", "kept"), [(None, "1"), ("3", "3")])
def test_one_thread_unless_the_user_says_otherwise(given, kept):
    """Set before numpy is loaded, since its libraries look only once."""
    code = (
        "import os, sys; from spinfit import cli, threads; assert 'numpy' not in sys.modules; "
        "cli.main(['--version']); print([os.environ[name] for name in threads.THREADS])"
    )
    environment = {name: value for name, value in os.environ.items() if name not in THREADS}
    environment |= {} if given is None else dict.fromkeys(THREADS, given)
    done = subprocess.run([sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == str([kept] * len(THREADS))


def test_odd_numbers_of_threads_change_nothing(tmp_path):
    """Of what the libraries under us refuse some at all; the spectrum is the same to the last bit."""
    model = tmp_path / "m.toml"
    model.write_text(
        '[sweep]\nfrequency = "9.5 GHz"\nfield = "300, 380 mT"\npoints = 50\n'
        '[[species]]\nS = "1/2"\ng = [2.0, 2.1, 2.3]\n[species.width]\ngaussian = "1 mT"\n'
    )
    command = [sys.executable, "-m", "spinfit.cli", "simulate", str(model)]
    said = {}
    for value in ("1", "", "0", "abc", "999", "-1", "1,2"):
        environment = os.environ | dict.fromkeys((*THREADS, COMPILED), value)
        done = subprocess.run(command, env=environment, capture_output=True, text=True, timeout=120)
        assert (done.returncode, done.stderr) == (0, ""), value
        said[value] = done.stdout
    assert len(set(said.values())) == 1
