"""New values for parameters put into the text of a job or model file, everything else left letter for letter.

A parameter's place in the model (`spinfit.fitting.slots`) says which key of the file holds it; tomlkit
changes that value and keeps comments, order and spacing.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, MutableMapping
from typing import Any

import tomlkit
from tomlkit.exceptions import TOMLKitError

from spinfit.errors import InputError
from spinfit.fitting.parameters import Binding
from spinfit.fitting.slots import Path

_NUMBER = re.compile(r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?")
# Groups of traces and turned angles are corrected on top of what the file holds: it has no key for them.
_NO_KEY = ("turn", "group")


def with_values(text: str, values: Mapping[str, float], binding: Binding) -> tuple[str, tuple[str, ...]]:
    """Put values into a file's text.

    Parameters
    ----------
    text : str
        Of the file from which `binding` was made.
    values : mapping of name -> value
        In the unit in which the file gives each parameter.
    binding : Binding
        Of the file's model, with its units.

    Returns
    -------
    text : str
    left_out : tuple of str
        Parameters for which the file has no key, such as a correction shared by a group of traces.

    Raises
    ------
    InputError
        When the text is no TOML.
    """
    try:
        tree = tomlkit.parse(text)
    except TOMLKitError as error:
        raise InputError(f"is not TOML ({error})", "write it anew") from error
    left_out = []
    for name, value in values.items():
        place = _place(tree, name, binding.path(name))
        if place is None:
            left_out.append(name)
            continue
        table, key, component = place
        if key in table or component is None:
            _put(table, key, component or 0, value, binding.parameters[name].unit)
        else:
            _add(table, key, name, values, binding)
    return tomlkit.dumps(tree), tuple(left_out)


def written(value: float) -> float:
    """Return a value with as many digits as a start deserves: seven."""
    return float(f"{value:.7g}")


def _place(tree: Any, name: str, path: Path) -> tuple[Any, str, int | None] | None:
    """Return the table, the key and, for tensors, the component; None where the file has no such key."""
    if path[0] in _NO_KEY:
        return None
    if path[0] == "sample":
        return _inside(tree, "sample"), str(path[1]), _component(path[2:])
    if path[0] == "traces":
        tables = [*tree.get("trace", []), *tree.get("lines", [])]
        return tables[int(path[1])], str(path[2]), None
    species, part = tree["species"][int(path[1])], path[2]
    rest = path[3:]
    if part == "amount":
        return species, "amount", None
    if part == "spins":
        table = species["spin"][int(rest[0])] if "spin" in species else species
        if rest[1] == "stevens":
            return _inside(table, "stevens"), name.rpartition(".")[2], None
        return table, str(rest[1]), _component(rest[2:])
    if part in ("nuclei", "exchange"):
        table = species["nucleus" if part == "nuclei" else "exchange"][int(rest[0])]
        return table, str(rest[1]), _component(rest[2:])
    if part == "crystal_field":
        return _of_field(species["crystal_field"], name.rpartition(".")[2])
    key = str(rest[0])
    table = _inside(species, str(part))
    if part == "spread" and key.startswith("correlation_"):
        return _inside(table, "correlation", inline=True), key.removeprefix("correlation_"), None
    return table, key, _component(rest[1:])


def _component(rest: Path) -> int | None:
    return int(rest[0]) if rest else None


def _inside(table: MutableMapping[str, Any], key: str, *, inline: bool = False) -> Any:
    """Return a table inside a table, made where it is missing."""
    if key not in table:
        table[key] = tomlkit.inline_table() if inline else tomlkit.table()
    return table[key]


def _of_field(table: Any, label: str) -> tuple[Any, str, int | None] | None:
    """Return where a crystal-field parameter stands: under its own name, at any depth, and there only once."""
    found = []

    def search(node: Any) -> None:
        for key, value in node.items():
            if isinstance(value, Mapping):
                search(value)
            elif re.sub(r"\W+", "_", str(key)).strip("_") == label:
                found.append((node, str(key), None))

    search(table)
    return found[0] if len(found) == 1 else None


def _put(table: Any, key: str, component: int, value: float, unit: str) -> None:
    """Write a number, a component of a list, or one number of a quantity's text; what is so already stays as it is."""
    number, old = written(value), table.get(key)
    if isinstance(old, list):
        if written(old[component]) != number:
            old[component] = number
    elif isinstance(old, str):
        table[key] = _replaced(old, component, number)
    elif old is None or written(old) != number:
        table[key] = f"{number:.7g} {unit}" if unit else number


def _add(table: Any, key: str, name: str, values: Mapping[str, float], binding: Binding) -> None:
    """Write a whole tensor or tilt that the file left out; its other components are those of the model."""
    path = binding.path(name)
    numbers = []
    for other, parameter in binding.parameters.items():
        if binding.path(other)[:-1] == path[:-1]:
            numbers.append(written(values.get(other, parameter.to_job(parameter.value))))
    unit = binding.parameters[name].unit
    if unit:
        table[key] = f"{', '.join(f'{number:.7g}' for number in numbers)} {unit}"
    else:
        table[key] = numbers if len(numbers) > 1 else numbers[0]


def _replaced(text: str, which: int, number: float) -> str:
    """Return a quantity such as "-35, -60, -540 MHz" with one of its numbers changed."""
    here = list(_NUMBER.finditer(text))[which]
    if written(float(here[0])) == number:
        return text
    return f"{text[: here.start()]}{number:.7g}{text[here.end() :]}"
