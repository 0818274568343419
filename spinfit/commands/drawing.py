"""Where pictures go: the suffix chooses the format, the file appears whole."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from spinfit.errors import InputError

KINDS = (".png", ".svg", ".pdf")


def picture_kind(path: str, option: str = "--plot") -> str:
    """Return "png", "svg" or "pdf" from a file's name, which `option` gave.

    Raises
    ------
    InputError
        For another suffix.
    """
    suffix = Path(path).suffix.lower()
    if suffix not in KINDS:
        found = f'"{suffix}" is not a format of pictures' if suffix else "the name has no suffix"
        raise InputError(found, "end the name in " + ", ".join(KINDS), place=option, file=path)
    return suffix[1:]


def save_picture(path: str, figure: Any) -> None:
    """Draw a figure into a file, whole or not at all."""
    from spinfit.files.atomic import write_bytes
    from spinfit.report.plots import picture_bytes

    write_bytes(path, picture_bytes(figure, picture_kind(path)))
