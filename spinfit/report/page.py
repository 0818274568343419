"""One self-contained page: its head, its policy, tables and sections; every text from outside is escaped.

The page may load nothing.  Its policy names the one script that may run in it by its hash: a text
that slipped through unescaped could not run.
"""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Sequence
from functools import cache
from html import escape
from importlib import resources

from spinfit.report import style

_LIGHT = {
    "ink": "#20242b", "quiet": "#666d78", "line": "#d9dce2", "mark": "#b23a16", "paper": "#ffffff", "tint": "#f6f7f9",
    "band": "#e9ebef", "negative": style.PARTS[0], "on-strong": "#ffffff", "measured": style.MEASURED,
    "fitted": style.FITTED, "unused": style.UNUSED, "guide": style.GUIDE,
}  # fmt: skip
_DARK = {
    "quiet": "#9aa2af", "line": "#353b45", "mark": "#ff9b7a", "tint": "#0d0f12", "band": "#262b33",
    "negative": style.PARTS_ON_DARK[0], "on-strong": "#101215", "guide": "#7d8592", **style.ON_DARK,
}  # fmt: skip


def _variables(colours: dict[str, str], parts: Sequence[str]) -> str:
    every = colours | {f"part-{n}": colour for n, colour in enumerate(parts)}
    return "; ".join(f"--{name}: {colour}" for name, colour in every.items())


@cache
def packed(name: str) -> str:
    """Return a style sheet or a script that stands beside this module."""
    return resources.files("spinfit.report").joinpath(name).read_text(encoding="utf-8")


@cache
def style_sheet() -> str:
    """Return the page's style: light, dark where the screen is, and light again in print."""
    strokes = "\n".join(f"path.part-{n} {{ stroke: var(--part-{n}) }}" for n in range(len(style.PARTS)))
    return (
        f":root {{ color-scheme: light dark; {_variables(_LIGHT, style.PARTS)} }}\n"
        f"@media screen and (prefers-color-scheme: dark) {{ :root {{ {_variables(_DARK, style.PARTS_ON_DARK)} }} }}\n"
        f"{packed('page.css')}{strokes}\n"
    )


def _hash(content: str) -> str:
    """Return the name by which a policy calls an inline script or style."""
    return "'sha256-" + base64.b64encode(hashlib.sha256(content.encode()).digest()).decode() + "'"


def document(title: str, body: Sequence[str], *, scripts: Sequence[str] = (), broad: bool = False) -> str:
    """Return a whole page.

    Parameters
    ----------
    title : str
        Escaped here.
    body : sequence of str
        Sections, escaped already; empty ones are left out.
    scripts : sequence of str
        Names of scripts of this package, run at the end.
    broad : bool
        Whether the page takes the whole width of a large screen.
    """
    codes = ["\n" + packed(name) for name in scripts]
    sheet = "\n" + style_sheet()
    run = " ".join(map(_hash, codes)) or "'none'"
    policy = f"default-src 'none'; img-src data:; style-src {_hash(sheet)}; script-src {run}"
    policy += "; base-uri 'none'; form-action 'none'"
    parts = "\n".join(part for part in body if part)
    return (
        '<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{policy}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{escape(title)}</title>\n<style>{sheet}</style></head>\n"
        f"<body><main{' class=' + chr(34) + 'broad' + chr(34) if broad else ''}>\n{parts}\n</main>"
        + "".join(f"<script>{code}</script>" for code in codes)
        + "</body></html>\n"
    )


def section(title: str, body: str) -> str:
    """Return a section under a heading; nothing for an empty body."""
    return f"<section><h2>{escape(title)}</h2>\n{body}\n</section>" if body else ""


def paragraph(content: str, kind: str = "") -> str:
    """Return an escaped paragraph; nothing for an empty one."""
    named = f' class="{kind}"' if kind else ""
    return f"<p{named}>{escape(content)}</p>" if content else ""


def listed(items: Sequence[str]) -> str:
    """Return an escaped list; nothing for an empty one."""
    return "<ul>" + "".join(f"<li>{escape(item)}</li>" for item in items) + "</ul>" if items else ""


class Raw(str):
    """A cell of a table that is markup already."""


def table(headings: Sequence[str], rows: Sequence[Sequence[str]], *, left: Sequence[int] = (0,), bold: int = -1) -> str:
    """Return a table that scrolls sideways where it must; cells are escaped unless they are `Raw`.

    Parameters
    ----------
    left : sequence of int
        Columns aligned to the left; the others to the right.
    bold : int
        The column that a reader looks for.
    """

    def cell(tag: str, k: int, content: str) -> str:
        kind = " ".join(["l"] * (k in left) + ["value"] * (k == bold and tag == "td"))
        named = f' class="{kind}"' if kind else ""
        inner = content if isinstance(content, Raw) else escape(str(content))
        return f"<{tag}{named}>{inner}</{tag}>"

    head = "".join(cell("th", k, content) for k, content in enumerate(headings))
    lines = ["<tr>" + "".join(cell("td", k, content) for k, content in enumerate(row)) + "</tr>" for row in rows]
    return (
        f'<div class="wide"><table><thead><tr>{head}</tr></thead>\n<tbody>'
        + "\n".join(lines)
        + "</tbody></table></div>"
    )
