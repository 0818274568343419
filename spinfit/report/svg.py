"""Vector drawings for pages: axes and curves as SVG text, coloured by the page's style sheet.

A picture in a page follows the reader's light or dark screen and can be magnified, which a drawing
with its colours inside cannot: here shapes carry classes only, and the style sheet of the page
(`spinfit.report.page`) gives each class its colour.  Texts are escaped.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from html import escape

import numpy as np
from matplotlib.ticker import MaxNLocator
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

FINEST = 1600
"""Columns into which a curve is cut, each with its first, lowest, highest and last point: a page stays small."""


def coordinate(value: float) -> str:
    """Write a coordinate with two decimals, without trailing zeros."""
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text in ("-0", "") else text


def thinned(x: Array, y: Array, columns: int = FINEST) -> tuple[Array, Array]:
    """Leave out points that no eye could tell apart: at most four a column of the picture.

    Parameters
    ----------
    x : ndarray, shape (n,)
        Ascending.
    y : ndarray, shape (n,)
        Gaps are NaN and stay gaps.
    columns : int
        Columns of the picture.

    Returns
    -------
    x, y : ndarray
        The first, the lowest, the highest and the last point of each column, in order.
    """
    if len(x) <= 2 * columns:
        return x, y
    edges = np.linspace(0, len(x), columns + 1).astype(int)
    kept = set()
    for first, end in zip(edges[:-1], edges[1:], strict=True):
        block = y[first:end]
        kept.update((first, end - 1))
        known = np.flatnonzero(np.isfinite(block))
        if known.size:
            kept.add(first + int(known[np.argmin(block[known])]))
            kept.add(first + int(known[np.argmax(block[known])]))
        if 0 < known.size < block.size:  # keep one missing point, so that the gap stays
            kept.add(first + int(np.flatnonzero(~np.isfinite(block))[0]))
    which = np.array(sorted(kept))
    return x[which], y[which]


def ticks(first: float, last: float, most: int = 7) -> list[float]:
    """Return round numbers between two ends."""
    if not (math.isfinite(first) and math.isfinite(last) and first < last):
        return []
    found = MaxNLocator(most, steps=[1, 2, 2.5, 5, 10]).tick_values(first, last)
    room = 1e-9 * (last - first)
    return [float(value) for value in found if first - room <= value <= last + room]


def tick_texts(values: Sequence[float]) -> list[str]:
    """Write ticks with as many decimals as the finest of them needs, all the same."""
    if not values:
        return []
    largest = max(abs(value) for value in values)
    step = min(np.diff(sorted(values)), default=largest)
    if largest and not 1e-4 <= largest < 1e6:
        return [f"{value:.4g}" for value in values]
    decimals = 0
    while decimals < 9 and abs(round(step, decimals) - step) > 1e-6 * abs(step):
        decimals += 1
    return [f"{value:.{decimals}f}".replace("-", "\u2212") if value else "0" for value in values]


def span(*values: ArrayLike, room: float = 0.06) -> tuple[float, float]:
    """Return the ends of an axis around everything that is finite, with some room; never of no length."""
    parts = [np.asarray(part, dtype=float).ravel() for part in values]
    every = np.concatenate([part[np.isfinite(part)] for part in parts] or [np.zeros(0)])
    if every.size == 0:
        return -1.0, 1.0
    low, high = float(every.min()), float(every.max())
    margin = room * (high - low) or 0.05 * abs(high) or 1.0
    return low - margin, high + margin


def text(x: float, y: float, content: str, kind: str = "", *, anchor: str = "", turned: bool = False) -> str:
    """Return a line of text; `anchor` "middle" or "end", upright unless `turned`."""
    more = f' class="{kind}"' if kind else ""
    more += f' text-anchor="{anchor}"' if anchor else ""
    more += f' transform="rotate(-90 {coordinate(x)} {coordinate(y)})"' if turned else ""
    return f'<text x="{coordinate(x)}" y="{coordinate(y)}"{more}>{escape(content)}</text>'


class Panel:
    """One pair of axes at a place of a drawing.

    Parameters
    ----------
    left, top, width, height : float
        Of the frame, in units of the drawing.
    x, y : (low, high)
        Ends of the axes; y points up.

    Attributes
    ----------
    frame : list of str
        What belongs to the axes and stays when a reader magnifies the curves.
    shapes : list of str
        The curves, in units of the frame from its upper left corner.
    """

    def __init__(
        self, left: float, top: float, width: float, height: float, x: tuple[float, float], y: tuple[float, float]
    ) -> None:
        self.left, self.top, self.width, self.height = left, top, width, height
        self.x, self.y = x, y
        self.frame: list[str] = []
        self.shapes: list[str] = []

    def across(self, x: ArrayLike) -> Array:
        """Carry abscissae to units of the frame."""
        return (np.asarray(x, dtype=float) - self.x[0]) * (self.width / (self.x[1] - self.x[0]))

    def down(self, y: ArrayLike) -> Array:
        """Carry ordinates to units of the frame, downwards."""
        return (self.y[1] - np.asarray(y, dtype=float)) * (self.height / (self.y[1] - self.y[0]))

    def line(self, x: ArrayLike, y: ArrayLike, kind: str, *, curve: str = "", columns: int = FINEST) -> None:
        """Draw a curve; `curve` is what the legend calls it by."""
        at, values = thinned(np.asarray(x, dtype=float), np.asarray(y, dtype=float), columns)
        across, down = self.across(at), np.clip(self.down(values), -4 * self.height, 5 * self.height)
        words, pen = [], "M"
        for one, other, known in zip(across, down, np.isfinite(down), strict=True):
            if known:
                words.append(f"{pen}{coordinate(one)} {coordinate(other)}")
                pen = "L"
            else:
                pen = "M"
        self._path("".join(words), kind, curve)

    def _path(self, path: str, kind: str, curve: str = "", *, always: bool = False) -> None:
        if path or always:
            named = f' data-curve="{escape(curve)}"' if curve else ""
            self.shapes.append(f'<path class="{kind}"{named} d="{path}"/>')

    def dots(self, x: ArrayLike, y: ArrayLike, kind: str, *, curve: str = "", always: bool = False) -> None:
        """Draw points, all in one path: their size is the style sheet's stroke width; `always` even if it is empty."""
        pairs = zip(self.across(x), self.down(y), strict=True)
        path = "".join(f"M{coordinate(a)} {coordinate(b)}h0" for a, b in pairs if math.isfinite(a) and math.isfinite(b))
        self._path(path, f"dots {kind}", curve, always=always)

    def bars(
        self, x: ArrayLike, low: ArrayLike, high: ArrayLike, kind: str, *, curve: str = "", always: bool = False
    ) -> None:
        """Draw upright bars from `low` to `high`."""
        triples = zip(self.across(x), self.down(low), self.down(high), strict=True)
        path = "".join(
            f"M{coordinate(a)} {coordinate(b)}V{coordinate(c)}" for a, b, c in triples if math.isfinite(a + b + c)
        )
        self._path(path, kind, curve, always=always)

    def across_line(self, y: float, kind: str) -> None:
        """Draw a level line from edge to edge."""
        at = coordinate(float(self.down(y)))
        self._path(f"M0 {at}H{coordinate(self.width)}", kind)

    def upright_line(self, x: float, kind: str) -> None:
        """Draw an upright line from edge to edge."""
        at = coordinate(float(self.across(x)))
        self._path(f"M{at} 0V{coordinate(self.height)}", kind)

    def band(self, low: float, high: float, kind: str) -> None:
        """Fill between two levels."""
        top, bottom = float(self.down(high)), float(self.down(low))
        self.shapes.append(
            f'<rect class="{kind}" x="0" y="{coordinate(top)}" width="{coordinate(self.width)}" '
            f'height="{coordinate(bottom - top)}"/>'
        )

    def x_axis(self, title: str, *, labels: bool = True, values: Sequence[float] | None = None, most: int = 7) -> None:
        """Put ticks below; `labels` False leaves their numbers out."""
        at = ticks(*self.x, most) if values is None else list(values)
        bottom = self.top + self.height
        words = [f'<g class="ticks" data-axis="{"x" if labels else "bare"}">']
        for value, written in zip(at, tick_texts(at), strict=True):
            x = self.left + float(self.across(value))
            words.append(f'<path d="M{coordinate(x)} {coordinate(bottom)}v-5"/>')
            if labels:
                words.append(text(x, bottom + 16, written, anchor="middle"))
        self.frame.append("".join(words) + "</g>")
        if title:
            self.frame.append(text(self.left + self.width / 2, bottom + 36, title, "title", anchor="middle"))

    def y_axis(self, title: str, *, most: int = 5, shown: bool = True) -> None:
        """Put ticks and the title on the left."""
        at = ticks(*self.y, most) if shown else []
        words = ['<g class="ticks" data-axis="y">' if shown else "<g>"]
        for value, written in zip(at, tick_texts(at), strict=True):
            y = self.top + float(self.down(value))
            words.append(f'<path d="M{coordinate(self.left)} {coordinate(y)}h5"/>')
            words.append(text(self.left - 6, y + 4, written, anchor="end"))
        self.frame.append("".join(words) + "</g>")
        lines = title.split("\n")
        for k, part in enumerate(lines):
            x = 16 + 15 * k
            self.frame.append(text(x, self.top + self.height / 2, part, "title", anchor="middle", turned=True))

    def top_axis(self, title: str, at: Sequence[float], written: Sequence[str]) -> None:
        """Put a second axis on top: ticks at places `at` of the axis below, with texts of their own."""
        words = ['<g class="ticks" data-axis="top">']
        for value, content in zip(at, written, strict=True):
            x = self.left + float(self.across(value))
            words.append(f'<path d="M{coordinate(x)} {coordinate(self.top)}v5"/>')
            words.append(text(x, self.top - 7, content, anchor="middle"))
        self.frame.append("".join(words) + "</g>")
        self.frame.append(text(self.left + self.width / 2, self.top - 26, title, "title", anchor="middle"))

    def drawn(self) -> str:
        """Return the panel: curves cut off at the frame, then frame, ticks and texts."""
        w, h = coordinate(self.width), coordinate(self.height)
        place = f'x="{coordinate(self.left)}" y="{coordinate(self.top)}" width="{w}" height="{h}"'
        ends = f'data-x="{self.x[0]:.9g} {self.x[1]:.9g}" data-y="{self.y[0]:.9g} {self.y[1]:.9g}"'
        return (
            f'<g class="panel" {ends}><svg class="curves" {place} viewBox="0 0 {w} {h}" preserveAspectRatio="none">'
            + "".join(self.shapes)
            + f'</svg><rect class="frame" {place}/>'
            + "".join(self.frame)
            + "</g>"
        )


def drawing(width: float, height: float, panels: Sequence[Panel], alt: str, more: str = "") -> str:
    """Return a whole drawing.

    Parameters
    ----------
    alt : str
        What it shows, for readers who do not see it; escaped here.
    more : str
        Attributes of its own, such as what a script reads.
    """
    size = f"0 0 {coordinate(width)} {coordinate(height)}"
    inner = "\n".join(panel.drawn() for panel in panels)
    attributes = f" {more}" if more else ""
    kind = "drawing trend" if "data-column" in more else "drawing"
    return f'<svg class="{kind}" viewBox="{size}" role="img" aria-label="{escape(alt)}"{attributes}>\n{inner}\n</svg>'
