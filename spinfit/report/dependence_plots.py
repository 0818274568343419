"""Pictures of resonance fields against direction: a crystal turned, a path between axes, maps on the sphere."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from spinfit.dependence import SphereLines, Strand
from spinfit.fitting.data import Lines
from spinfit.report import style
from spinfit.report.plots import FIELD_LABEL
from spinfit.report.positions import angle_locator

Array = NDArray[np.float64]

PANELS = 6
"""Transitions that get a map of their own."""
FAINTEST = 0.15
"""Opacity of the weakest line drawn."""
SCALE = "cividis"
"""Colours of maps: even in lightness, the same for red- and green-blind readers."""


def _strength(weight: Array) -> Array:
    """Return opacity: three decades of weight fade from full to faint."""
    size = np.clip(np.abs(weight), 1e-12, 1.0)
    return np.clip(1 + np.log10(size) / 3, FAINTEST, 1.0)


def _draw_strands(axes: Axes, x: Array, strands: Sequence[Strand], *, one_colour: str | None = None) -> None:
    """Draw lines, weak ones fainter; each species has its colour."""
    for strand in strands:
        colour = to_rgb(one_colour or style.part_colour(strand.species)[0])
        strength = _strength(strand.weight)
        at = x[strand.place]
        if len(at) == 1:
            axes.plot(at, strand.field, ".", ms=1.0, color=(*colour, strength[0]))
            continue
        points = np.stack([at, strand.field], axis=1)
        pieces = np.stack([points[:-1], points[1:]], axis=1)
        middle = (strength[:-1] + strength[1:]) / 2
        axes.add_collection(
            LineCollection(list(pieces), colors=[(*colour, float(a)) for a in middle], lw=0.9, capstyle="butt")
        )


def _finish(axes: Axes, strands: Sequence[Strand], measured: Sequence[Array], window: tuple[float, float]) -> None:
    """Set the ends of the field axis: what was measured, else all lines, else the sweep."""
    fields = [np.concatenate([m.ravel() for m in measured])] if measured else [s.field for s in strands]
    every = np.concatenate(fields) if fields else np.array(window)
    low, high = float(every.min()), float(every.max())
    room = 0.06 * (high - low) or 1.0
    axes.set_ylim(low - room, high + room)
    axes.yaxis.set_major_locator(MaxNLocator(7, steps=[1, 2, 2.5, 5, 10]))
    axes.yaxis.get_major_formatter().set_useOffset(False)
    axes.set_ylabel(FIELD_LABEL)


def _legend(axes: Axes, names: Sequence[str], measured: bool) -> None:
    if measured:
        axes.plot([], [], "o", ms=2.6, mfc="none", mec=style.MEASURED, mew=0.7, label="measured")
        axes.plot([], [], color=style.FITTED, lw=0.9, label="calculated")
    elif len(names) > 1:
        for k, name in enumerate(names):
            axes.plot([], [], color=style.part_colour(k)[0], lw=0.9, label=name)
    else:
        return
    axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), borderaxespad=0.1, ncols=3, columnspacing=1.0)


def rotation_figure(
    strands: Sequence[Strand],
    angles: Array,
    names: Sequence[str],
    *,
    frequency: float,
    window: tuple[float, float],
    measured: Lines | None = None,
    marked: Sequence[float] = (),
) -> Figure:
    """Return resonance fields against the angle of rotation.

    Parameters
    ----------
    strands : sequence of Strand
    angles : ndarray, shape (n,)
        rad.
    names : sequence of str
        Of the species.
    frequency : float
        MHz.
    window : (float, float)
        Fields to show where there is no line, mT.
    measured : Lines, optional
        Positions to mark on the lines.
    marked : sequence of float
        Angles at which the model asks for spectra, rad; thin upright lines.
    """
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 3.2), layout="constrained")
        axes = figure.subplots()
        x = np.rad2deg(angles)
        for angle in marked:
            axes.axvline(np.rad2deg(angle), color=style.UNUSED, lw=0.4)
        points = []
        _draw_strands(axes, x, strands, one_colour=style.FITTED if measured is not None else None)
        if measured is not None and measured.angle is not None:
            field = measured.field * measured.field_scale + measured.field_offset
            points.append(field)
            axes.plot(np.rad2deg(measured.angle), field, "o", ms=2.6, mfc="none", mec=style.MEASURED, mew=0.7, zorder=5)
        room = 0.03 * (x[-1] - x[0]) if measured is not None else 0.0  # marks at the ends stay whole
        axes.set_xlim(x[0] - room, x[-1] + room)
        axes.xaxis.set_major_locator(angle_locator())
        axes.set_xlabel("angle / deg")
        _finish(axes, strands, points, window)
        _legend(axes, names, measured is not None)
        axes.set_title(f"resonances at {frequency / 1e3:.6g} GHz", loc="left")
    return figure


def path_figure(
    strands: Sequence[Strand], names: Sequence[str], *, steps: int, frequency: float, window: tuple[float, float]
) -> Figure:
    """Return resonance fields along `spinfit.dependence.great_circles(steps)`."""
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 3.2), layout="constrained")
        axes = figure.subplots()
        x = np.arange(3 * steps + 1) * (90.0 / steps)
        _draw_strands(axes, x, strands)
        for corner in (90, 180):
            axes.axvline(corner, color=style.UNUSED, lw=0.5)
        axes.set_xlim(0, 270)
        axes.set_xticks([0, 45, 90, 135, 180, 225, 270], ["z", "45°", "x", "45°", "y", "45°", "z"])
        axes.set_xticks(np.arange(0, 271, 15), minor=True)
        axes.set_xlabel("direction of the field, on circles between the molecular axes")
        _finish(axes, strands, [], window)
        _legend(axes, names, False)
        axes.set_title(f"resonances at {frequency / 1e3:.6g} GHz", loc="left")
    return figure


def _disc(axes: Axes, lines: SphereLines, grid: Array, **look: object) -> object:
    """Draw a hemisphere seen from its pole, equal areas for equal solid angles."""
    polar, around = len(lines.theta), len(lines.phi)
    theta = np.linspace(0, np.pi / 2, polar + 1)
    phi = np.linspace(0, 2 * np.pi, around + 1)
    radius = np.sqrt(2) * np.sin(theta / 2)  # of an equal-area projection; 1 at the equator
    x, y = radius[:, None] * np.cos(phi), radius[:, None] * np.sin(phi)
    drawn = axes.pcolormesh(x, y, np.ma.masked_invalid(grid), cmap=SCALE, rasterized=True, **look)
    ring = np.linspace(0, 2 * np.pi, 181)
    axes.plot(np.cos(ring), np.sin(ring), color=style.MEASURED, lw=0.6)
    axes.plot([0], [0], "+", ms=3, color=style.FITTED, mew=0.6)
    axes.set_aspect("equal")
    axes.set_axis_off()
    axes.set_xlim(-1.18, 1.18)
    axes.set_ylim(-1.02, 1.2)
    for name, place, align in (("x", (1.05, 0), ("left", "center")), ("y", (0, 1.04), ("center", "bottom"))):
        axes.text(*place, name, ha=align[0], va=align[1], fontsize=6.5)
    axes.text(0.04, 0.04, "z", color=style.FITTED, fontsize=6.5, ha="left", va="bottom")
    return drawn


def _bar(figure: Figure, axes: Axes, drawn: object, label: str) -> None:
    bar = figure.colorbar(drawn, ax=axes, orientation="horizontal", shrink=0.85, aspect=22, pad=0.02)
    bar.ax.xaxis.set_major_locator(MaxNLocator(3))
    bar.ax.xaxis.get_major_formatter().set_useOffset(False)
    bar.ax.minorticks_off()
    bar.outline.set_linewidth(0.5)
    bar.set_label(label)


def fields_figure(lines: SphereLines, name: str, *, frequency: float) -> Figure:
    """Return a map for each of the strongest transitions: its resonance field by the field's direction.

    White is where a transition has no resonance in the sweep.
    """
    shares = lines.shares()[:PANELS]
    columns = 1 if len(shares) <= 1 else 2
    rows = max(1, -(-len(shares) // columns))
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 2.15 * rows + 0.25), layout="constrained")
        panels = figure.subplots(rows, columns, squeeze=False).ravel()
        for axes in panels[len(shares) :]:
            axes.set_axis_off()
        for axes, (pair, share) in zip(panels, shares, strict=False):
            drawn = _disc(axes, lines, lines.fields_of(pair))
            axes.set_title(f"levels {pair[0]}–{pair[1]}: {100 * share:.3g} %")
            _bar(figure, axes, drawn, FIELD_LABEL)
        figure.suptitle(f"{name}: where each line is, at {frequency / 1e3:.6g} GHz", fontsize=7.5)
    return figure


def absorption_figure(found: Sequence[tuple[str, SphereLines, float]], field: float, *, frequency: float) -> Figure:
    """Return, for each species, how much the crystallites of each direction absorb at one field.

    Parameters
    ----------
    found : sequence of (name, lines, width)
        Width: peak to peak, mT.
    field : float
        mT.
    """
    columns = min(len(found), 2)
    rows = -(-len(found) // columns)
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 2.9 if columns == 1 else 2.2 * rows + 0.25), layout="constrained")
        panels = figure.subplots(rows, columns, squeeze=False).ravel()
        for axes in panels[len(found) :]:
            axes.set_axis_off()
        for axes, (name, lines, width) in zip(panels, found, strict=False):
            grid = lines.absorption_at(field, width)
            top = float(np.abs(grid).max())
            if top > 0:
                grid = grid / top
            low = float(min(grid.min(), 0.0))
            drawn = _disc(axes, lines, grid, vmin=low, vmax=1.0)
            axes.set_title(name if top > 0 else f"{name}: nothing at this field")
            _bar(figure, axes, drawn, "absorption / largest")
        title = f"directions seen at {field:.6g} mT and {frequency / 1e3:.6g} GHz"
        figure.suptitle(title, fontsize=7.5)
    return figure
