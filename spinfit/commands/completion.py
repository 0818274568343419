"""``spinfit completion``: scripts that let a shell complete commands, options and files."""

from __future__ import annotations

import argparse
import importlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from spinfit.commands.screen import Screen

NAME = "completion"
SUMMARY = "a script that lets bash, zsh or fish complete commands and options"
EXAMPLES = (
    'eval "$(spinfit completion bash)"',
    "spinfit completion zsh > ~/.zfunc/_spinfit",
    "spinfit completion fish > ~/.config/fish/completions/spinfit.fish",
)
SHELLS = ("bash", "zsh", "fish")


@dataclass(frozen=True)
class Option:
    """An option as a shell sees it: its words, one line on it, whether a value follows, which values there are."""

    words: tuple[str, ...]
    text: str
    takes_value: bool
    choices: tuple[str, ...] = ()
    metavar: str = ""


@dataclass(frozen=True)
class Command:
    """A command as a shell sees it; `choices` are the words that may stand where its arguments do."""

    name: str
    text: str
    options: tuple[Option, ...]
    choices: tuple[str, ...] = ()


def options(parser: argparse.ArgumentParser) -> None:
    """Add the command's arguments."""
    parser.add_argument("shell", metavar="SHELL", choices=SHELLS, help="bash, zsh or fish")


def run(args: argparse.Namespace, screen: Screen) -> int:
    """Print the script."""
    # By name: the table of commands holds this module, which therefore cannot import it.
    table = importlib.import_module("spinfit.commands").TABLE
    commands = described(table)
    text = {"bash": bash, "zsh": zsh, "fish": fish}[args.shell](commands)
    screen.emit({"shell": args.shell, "script": text})
    if not screen.as_json:
        screen.raw(text)
    return 0


def described(table: Mapping[str, object]) -> list[Command]:
    """Return every command from its own definition of its arguments."""
    found = []
    for name, module in table.items():
        parser = argparse.ArgumentParser(prog=name)
        module.options(parser)  # type: ignore[attr-defined]
        parser.add_argument("--json", action="store_true", help="print one JSON document and nothing else")
        parser.add_argument("--debug", action="store_true", help="show where in the program an error arose")
        known, choices = [], []
        for action in parser._actions:
            own = tuple(str(choice) for choice in action.choices or ())
            if action.option_strings:
                text = (action.help or "").replace("%%", "%").partition(";")[0]
                metavar = action.metavar if isinstance(action.metavar, str) else ""
                takes = action.nargs != 0
                known.append(Option(tuple(action.option_strings), text, takes, own, metavar))
            else:
                choices += own
        found.append(Command(name, module.SUMMARY, tuple(known), tuple(choices)))  # type: ignore[attr-defined]
    return found


def _words(options: Sequence[Option]) -> str:
    return " ".join(word for option in options for word in option.words)


def bash(commands: Sequence[Command]) -> str:
    """Return the script for bash (from version 4 on)."""
    cases, values = [], []
    for one in commands:
        cases.append(f'        {one.name}) words="{_words(one.options)}"; choices="{" ".join(one.choices)}" ;;')
        for option in one.options:
            for word in option.words:
                if option.choices:
                    values.append(f'        {one.name}:{word}) choices="{" ".join(option.choices)}"; only=1 ;;')
    lines = [
        "# Completion of spinfit for bash; made by: spinfit completion bash",
        "_spinfit() {",
        '    local current="${COMP_WORDS[COMP_CWORD]}" previous="${COMP_WORDS[COMP_CWORD-1]}"',
        '    local command="" words="" choices="" only="" n',
        "    for ((n = 1; n < COMP_CWORD; n++)); do",
        '        case "${COMP_WORDS[n]}" in -*) ;; *) command="${COMP_WORDS[n]}"; break ;; esac',
        "    done",
        '    if [[ -z "$command" ]]; then',
        f'        COMPREPLY=($(compgen -W "{" ".join(one.name for one in commands)} --help --version" -- "$current"))',
        "        return",
        "    fi",
        '    case "$command" in',
        *cases,
        "    esac",
        '    case "$command:$previous" in',
        *(values or ["        *) ;;"]),
        "    esac",
        '    if [[ "$current" == -* && -z "$only" ]]; then',
        '        COMPREPLY=($(compgen -W "$words" -- "$current"))',
        '    elif [[ -n "$choices" ]]; then',
        '        COMPREPLY=($(compgen -W "$choices" -- "$current"))',
        "    else",
        '        COMPREPLY=($(compgen -f -- "$current"))',
        "    fi",
        "}",
        "complete -o filenames -F _spinfit spinfit",
    ]
    return "\n".join(lines) + "\n"


def _zsh_text(text: str) -> str:
    """Quote a description for zsh's _arguments, inside single quotes."""
    quoted = text.replace("\\", "\\\\").replace("[", "\\[").replace("]", "\\]").replace(":", "\\:")
    return quoted.replace("'", "'\\''")


def zsh(commands: Sequence[Command]) -> str:
    """Return the script for zsh."""
    lines = ["#compdef spinfit", "# Completion of spinfit for zsh; made by: spinfit completion zsh", "_spinfit() {"]
    lines += ["    local -a commands", "    commands=("]
    lines += [f"        '{one.name}:{_zsh_text(one.text)}'" for one in commands]
    lines += [
        "    )",
        "    if (( CURRENT == 2 )); then",
        "        _describe command commands",
        "        return",
        "    fi",
        "    local command=$words[2]",
        "    shift words",
        "    (( CURRENT-- ))",
        "    case $command in",
    ]
    for one in commands:
        specs = []
        for option in one.options:
            value = ""
            if option.takes_value:
                what = f"({' '.join(option.choices)})" if option.choices else "_files"
                value = f":{_zsh_text(option.metavar or 'value')}:{what}"
            specs += [f"'*{word}[{_zsh_text(option.text)}]{value}'" for word in option.words]
        rest = f"({' '.join(one.choices)})" if one.choices else "_files"
        specs.append(f"'*:argument:{rest}'")
        lines += [f"        {one.name}) _arguments \\", *[f"            {spec} \\" for spec in specs[:-1]]]
        lines += [f"            {specs[-1]} ;;"]
    lines += [
        "    esac",
        "}",
        'if [[ "$funcstack[1]" == _spinfit ]]; then _spinfit "$@"; else compdef _spinfit spinfit; fi',
    ]
    return "\n".join(lines) + "\n"


def _fish_text(text: str) -> str:
    return "'" + text.replace("\\", "\\\\").replace("'", "\\'") + "'"


def fish(commands: Sequence[Command]) -> str:
    """Return the script for fish."""
    names = " ".join(one.name for one in commands)
    lines = ["# Completion of spinfit for fish; made by: spinfit completion fish"]
    for one in commands:
        none = f"not __fish_seen_subcommand_from {names}"
        lines.append(f"complete -c spinfit -f -n '{none}' -a {one.name} -d {_fish_text(one.text)}")
    for one in commands:
        seen = f"complete -c spinfit -n '__fish_seen_subcommand_from {one.name}'"
        if one.choices:
            lines.append(f"{seen} -f -a '{' '.join(one.choices)}'")
        for option in one.options:
            parts = [f"-l {w[2:]}" if w.startswith("--") else f"-s {w[1:]}" for w in option.words]
            if option.choices:
                parts.append(f"-x -a '{' '.join(option.choices)}'")
            elif option.takes_value:
                parts.append("-r -F")
            lines.append(f"{seen} {' '.join(parts)} -d {_fish_text(option.text)}")
    return "\n".join(lines) + "\n"
