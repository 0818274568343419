"""Completion scripts: every command and option is in them, and the shells that are here complete by them."""

from __future__ import annotations

import re
import shutil
import subprocess

import pytest

from spinfit.cli import build_parser, main
from spinfit.commands import TABLE


def script(shell: str, capsys: pytest.CaptureFixture[str]) -> str:
    assert main(["completion", shell]) == 0
    return capsys.readouterr().out


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_every_command_and_option_is_there(shell, capsys):
    text = script(shell, capsys)
    for name in TABLE:
        assert re.search(rf"\b{name}\b", text)
        lines = [line for line in text.splitlines() if re.search(rf"\b{name}\b", line)]
        if shell == "zsh":
            lines = [text.partition(f"        {name}) _arguments")[2].partition(";;")[0]]
        for action in build_parser(name)._actions:
            for word in action.option_strings:
                wanted = rf"-l {word[2:]}\b" if shell == "fish" and word.startswith("--") else re.escape(word)
                wanted = f"-s {word[1:]}" if shell == "fish" and not word.startswith("--") else wanted
                assert any(re.search(wanted, line) for line in lines), (name, word)


def test_an_unknown_shell_is_refused(capsys):
    assert main(["completion", "tcsh"]) == 2
    assert "tcsh" in capsys.readouterr().err


def in_bash(text: str, *words: str) -> list[str]:
    """Complete the last word as bash does."""
    listed = " ".join(f"'{word}'" for word in words)
    code = f"{text}\nCOMP_WORDS=({listed}); COMP_CWORD={len(words) - 1}; _spinfit; printf '%s\\n' \"${{COMPREPLY[@]}}\""
    done = subprocess.run(["bash", "--norc", "-c", code], capture_output=True, text=True, check=True, timeout=30)
    return done.stdout.split()


@pytest.mark.skipif(shutil.which("bash") is None, reason="bash is not here")
def test_bash_completes(capsys):
    text = script("bash", capsys)
    assert in_bash(text, "spinfit", "ba") == ["batch"]
    assert set(TABLE) <= set(in_bash(text, "spinfit", ""))
    assert in_bash(text, "spinfit", "batch", "--templ") == ["--template"]
    assert in_bash(text, "spinfit", "--json", "fit", "--prof") == ["--profile"]
    assert in_bash(text, "spinfit", "completion", "") == ["bash", "zsh", "fish"]
    assert in_bash(text, "spinfit", "fit", "/etc/host").count("/etc/hosts") == 1


@pytest.mark.skipif(shutil.which("zsh") is None, reason="zsh is not here")
def test_zsh_reads_it(capsys, tmp_path):
    (tmp_path / "_spinfit").write_text(script("zsh", capsys))
    code = f"autoload -U compinit; compinit -D -u; source {tmp_path}/_spinfit; print ${{_comps[spinfit]}}"
    done = subprocess.run(["zsh", "-f", "-c", code], capture_output=True, text=True, timeout=30)
    assert (done.stdout.strip(), done.stderr) == ("_spinfit", "")


@pytest.mark.skipif(shutil.which("fish") is None, reason="fish is not here")
def test_fish_completes(capsys, tmp_path):
    (tmp_path / "spinfit.fish").write_text(script("fish", capsys))
    code = f"source {tmp_path}/spinfit.fish; complete -C 'spinfit batch --templ'"
    done = subprocess.run(["fish", "--no-config", "-c", code], capture_output=True, text=True, timeout=30)
    assert done.stdout.startswith("--template\t")
