"""Parsed TOML back to text, so that a job made by a program stands on the disk like one written by hand."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Mapping
from typing import Any

_BARE = re.compile(r"[A-Za-z0-9_-]+", re.ASCII)


def _key(key: str) -> str:
    return key if _BARE.fullmatch(key) else _text(key)


def _text(text: str) -> str:
    """Return a basic string; its escapes are those of JSON, but for DEL, which TOML wants escaped."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else {math.inf: "inf", -math.inf: "-inf"}.get(value, "nan")
    if isinstance(value, list):
        return "[" + ", ".join(map(_value, value)) + "]"
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{_key(key)} = {_value(inner)}" for key, inner in value.items()) + "}"
    return str(value)  # integers, dates and times


def _is_list_of_tables(value: Any) -> bool:
    return isinstance(value, list) and bool(value) and all(isinstance(one, Mapping) for one in value)


def _lines(table: Mapping[str, Any], path: tuple[str, ...]) -> list[str]:
    plain, deeper = [], []
    for key, value in table.items():
        if isinstance(value, Mapping):
            deeper.append((key, value, "[{}]"))
        elif _is_list_of_tables(value):
            deeper += [(key, one, "[[{}]]") for one in value]
        else:
            plain.append(f"{_key(key)} = {_value(value)}")
    for key, inner, form in deeper:
        place = (*path, key)
        plain += ["", form.format(".".join(map(_key, place))), *_lines(inner, place)]
    return plain


def toml_text(tables: Mapping[str, Any]) -> str:
    """Return TOML text that is read back to the same tables, in the same order of keys within each table.

    Parameters
    ----------
    tables : mapping
        As `tomllib.loads` returns them.
    """
    return "\n".join(_lines(tables, ())).strip("\n") + "\n"
