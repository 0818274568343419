"""Every code block and shell line of README and docs is run, compared, or says why not.

Slow ones, which carry ``<!-- slow -->``, are run by ``scripts/campaign pages``.
"""

from __future__ import annotations

import re
import shlex
import tomllib
from pathlib import Path

import page_code
import pytest
from page_code import MADE, ROOT, BadPage, Block, blocks_of, compare, run_page, same_line

from spinfit.cli import build_parser
from spinfit.commands import TABLE
from spinfit.files.job import read_job

PAGES = [ROOT / "README.md", ROOT / "DEVELOPERS.md", ROOT / "demo_spectra" / "README.md"]
PAGES += sorted(path for path in (ROOT / "docs").rglob("*.md") if "_build" not in path.parts)
PAGES = [page for page in PAGES if page.relative_to(ROOT).as_posix() not in MADE]


def named(page: Path) -> str:
    return page.relative_to(ROOT).as_posix()


@pytest.mark.parametrize("page", PAGES, ids=named)
def test_every_block_says_what_is_done_with_it(page: Path) -> None:
    for block in blocks_of(page):
        if block.fate == "checked by":
            assert page.name in (ROOT / block.marks["checked by"]).read_text(encoding="utf-8"), block.where
        if block.fate == "picture":
            assert (page.parent / block.text).is_file(), block.where


@pytest.mark.parametrize("page", [page for page in PAGES if "```" in page.read_text(encoding="utf-8")], ids=named)
def test_the_code_of_a_page_does_what_it_shows(page: Path, tmp_path: Path) -> None:
    run_page(page, tmp_path)
    # Jobs that are fitted by the campaign only can be read here.
    for name in {block.marks["file"] for block in blocks_of(page) if block.fate == "file"}:
        job = tomllib.loads((tmp_path / name).read_text(encoding="utf-8")) if name.endswith(".toml") else {}
        if "fit" in job and all("file" in trace for trace in job["trace"]):
            assert read_job(tmp_path / name).traces


def test_pages_that_the_code_writes_are_compared_with_it() -> None:
    for page, test in MADE.items():
        assert Path(page).stem in (ROOT / test).read_text(encoding="utf-8")


@pytest.mark.parametrize("command", TABLE)
def test_examples_in_the_help_are_accepted(command: str) -> None:
    for line in TABLE[command].EXAMPLES:
        call = re.sub(r'^eval "\$\((.*)\)"$', r"\1", line)
        words = shlex.split(re.sub(r" > [^ ]+$", "", call))
        assert words[:2] == ["spinfit", command]
        build_parser(command).parse_args(words[2:])


# The checker itself.


def page_with(text: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setattr(page_code, "ROOT", tmp_path)
    page = tmp_path / "page.md"
    page.write_text(text, encoding="utf-8")
    return page


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("```\nx\n```\n", "no language"),
        ("```text\nx\n```\n", "say above the fence"),
        ('```toml\na = "b"\n```\n', "say above the fence"),
        ("```bash\nls\n```\n", "say above the fence"),
        ("words\n\n    spinfit fit x.toml\n", "code without a fence"),
        ("<!-- not run -->\n```sh\nls\n```\n", "needs text"),
        ("<!-- later -->\n```sh\nls\n```\n", 'no mark "later"'),
        ("<!-- output; formula -->\n```text\nx\n```\n", "contradict"),
        ("```sh\nls\n", "never closed"),
        ("```sh\nspinfit convert --g 2\n```\n", "exit code 2"),
        ("```sh\nfalse\n```\n", "exit code 1"),
        ("<!-- output -->\n```text\nx\n```\n", "nothing was run"),
        ("```sh\necho 1.5\n```\n<!-- output -->\n```text\n1.8\n```\n", "not printed: 1.8"),
        ("```sh\necho 'a\nb'\n```\n<!-- output -->\n```text\na\n```\n", "not shown: b"),
        ("<!-- picture: a.png -->\n![a](a.png)\n", "a.png was not drawn"),
    ],
)
def test_what_is_wrong_with_a_page_is_found(
    text: str, says: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    page = page_with(text, tmp_path, monkeypatch)
    with pytest.raises(BadPage, match=says):
        run_page(page, tmp_path)


def test_what_is_right_passes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    page = page_with(
        "<!-- file: a.txt -->\n```text\n7 words\n```\n```sh\ncat a.txt\n```\n<!-- output -->\n```text\n7.1 words\n```\n"
        "<!-- slow -->\n```sh\nfalse\n```\n<!-- output; slow -->\n```text\nnothing\n```\n* item\n\n    goes on\n"
        "<!-- exit: 3 -->\n```sh\nexit 3\n```\n```python\nprint(2)\n```\n<!-- output -->\n```text\n...\n```\n",
        tmp_path,
        monkeypatch,
    )
    assert run_page(page, tmp_path) == 3


@pytest.mark.parametrize(
    ("shown", "printed", "same"),
    [
        ("r.g 2.0061(2) 1.0e-05", "r.g   2.0062(2)  1.05e-05", True),
        ("r.g 2.0061(2)", "r.g 2.0064(2)", False),
        ("r.width 0.315(4) 3.8e-06", "r.width 0.315(4) 1.9e-06", True),
        ("r.width 0.315(4) 3.8e-04", "r.width 0.315(4) 1.9e-04", False),
        ("r.g 2.0061(2)", "r.g 2.0061(5)", False),
        ("D 129.9(1.0)", "D 130.5(1.1)", True),
        ("D 129.9(1.0)", "D 131.5(1.0)", False),
        ("1.0 s; written to a: b", "33.1 s; written to a: b", True),
        ("------- --", "------ ---", True),
        ("converged", "stopped", False),
        ("(-0.954):", "(-0.96):", True),
        ("(-0.954):", "(0.954):", False),
    ],
)
def test_lines_are_the_same_within_uncertainties(shown: str, printed: str, same: bool) -> None:
    assert same_line(shown, printed) is same


def test_dots_stand_for_what_is_left_out(tmp_path: Path) -> None:
    block = Block(ROOT / "README.md", 1, "text", "a\n...\nc\n", {"output": ""})
    compare(block, "a\nb\nb\nc\n")
    for printed in ("b\na\nc\n", "a\nb\n", "a\nc\nd\n"):
        with pytest.raises(BadPage):
            compare(block, printed)
