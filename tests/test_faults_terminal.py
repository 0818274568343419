"""Terminals of 40 columns: nothing is cut in the middle of a word, and nothing is lost."""

from __future__ import annotations

import io
import re

import batch_jobs
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spinfit.commands.screen import Screen
from spinfit.report.layout import narrowed, table

word = st.text("abcdefg.()0123456789", min_size=1, max_size=12)


@settings(derandomize=True, deadline=None, max_examples=100)
@given(st.data())
def test_every_cell_stands_beside_its_heading(data):
    count = data.draw(st.integers(1, 8))
    headings = data.draw(st.lists(word, min_size=count, max_size=count, unique=True))
    rows = data.draw(st.lists(st.lists(word, min_size=count, max_size=count), max_size=4))
    text = table(headings, rows, left=(0, 2))
    short = narrowed(f"before\n\n{text}\n\nafter", 40)
    if max(map(len, text.split("\n"))) <= 40:
        assert text in short
        return
    expected = [
        f"{headings[0]}: {cell}" if n == 0 else f"  {headings[n]}: {cell}" for row in rows for n, cell in enumerate(row)
    ]
    assert short.split("\n") == ["before", "", *expected, "", "after"]


def test_sentences_wrap_at_blanks():
    text = "  warning: " + "somewhat long " * 9 + "x" * 50
    short = narrowed(text, 40)
    assert " ".join(short.split()) == " ".join(text.split())
    assert max(len(line) for line in short.split("\n") if "xxx" not in line) <= 40
    assert narrowed("short\n\n", 40) == "short\n\n"


class Terminal(io.StringIO):
    """A stream that somebody watches."""

    def isatty(self) -> bool:
        return True


@pytest.mark.parametrize("columns", ["40", "60", "132"])
def test_only_a_terminal_gets_narrow_lines(columns, monkeypatch):
    monkeypatch.setenv("COLUMNS", columns)
    text = table(["parameter", "value", "unit", "noise part"], [["r.width.gaussian", "0.803(4)", "mT", "0.0039"]])
    watched, piped = Terminal(), io.StringIO()
    Screen(out=watched).say(text)
    Screen(out=piped).say(text)
    assert piped.getvalue() == f"{text}\n"
    assert (watched.getvalue() == f"{text}\n") == (len(text.split("\n")[0]) <= int(columns))


def test_a_fit_on_forty_columns(tmp_path, monkeypatch):
    from spinfit.commands import fit

    monkeypatch.setenv("COLUMNS", "40")
    batch_jobs.write_batch(tmp_path, 1)
    job = tmp_path / "job.toml"
    job.write_text(batch_jobs.TEMPLATE.replace("[[trace]]", '[[trace]]\nfile = "traces/tile-00.csv"'))
    screen = Screen(out=Terminal(), err=io.StringIO())
    from spinfit.cli import build_parser

    assert fit.run(build_parser("fit").parse_args([str(job)]), screen) == 0
    lines = screen.out.getvalue().split("\n")
    assert max(map(len, lines)) <= 40
    at = lines.index("parameter: r.g")
    assert re.fullmatch(r"  value: 2\.006\d\d\(\d+\)", lines[at + 1])
