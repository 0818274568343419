"""Pictures: a fit, a simulated spectrum, a trace with its turning points.

Figures are built without pyplot and drawn by Agg; every axis carries its quantity and unit; g stands
on the top axis wherever the frequency is known.
"""

from __future__ import annotations

import io
import math
from collections.abc import Mapping, Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import FixedFormatter, FixedLocator, MaxNLocator, NullLocator
from numpy.typing import NDArray

from spinfit.fitting.outcome import Curves, Outcome
from spinfit.fitting.turning import Analysis
from spinfit.report import style
from spinfit.units import field_of, g_of

Array = NDArray[np.float64]

SIGNAL_NAMES = {"derivative": "dχ″/dB", "absorption": "χ″", "second derivative": "d²χ″/dB²"}
FIELD_LABEL = "magnetic field / mT"
# Beyond this ratio of the largest to the smallest g an even row of g ticks would crowd at one end.
EVEN_TICKS = 1.8
# More traces than this do not fit on a page side by side and below each other.
MOST_TRACES = 12


# Roundest first: over a wide range ticks are taken in this order wherever they find room.
_ROUND_G = (2, 4, 1, 6, 3, 10, 20, 5, 8, 15, 50, 100, 1.5, 2.5, 1.2, 30, 0.5, 1.7, 0.7, 2.2, 3.5, 1.4, 1.1, 0.2, 0.1)


def g_ticks(first: float, last: float, frequency: float, *, most: int = 6) -> list[float]:
    """Return g values for the ticks over a field range, mT, by field; empty when the range holds no g."""
    first = max(first, 0.02 * last)
    if last <= 0 or first >= last:
        return []
    small, large = g_of(last, frequency), g_of(first, frequency)
    if large / small < EVEN_TICKS:
        ticks = MaxNLocator(most, steps=[1, 2, 5, 10]).tick_values(small, large)
        return [float(g) for g in ticks[::-1] if small <= g <= large]
    taken: list[float] = []
    room = (last - first) / (1.6 * most)
    for g in _ROUND_G:
        where = field_of(g, frequency)
        if small <= g <= large and all(abs(where - field_of(other, frequency)) >= room for other in taken):
            taken.append(float(g))
    return sorted(taken, reverse=True)


def g_texts(ticks: Sequence[float]) -> list[str]:
    """Write g ticks: an even row with as many decimals as its finest, a wide one as short as can be."""
    decimals = max((len(f"{g:.10g}".partition(".")[2]) for g in ticks), default=0)
    even = len(ticks) > 1 and max(ticks) / min(ticks) < EVEN_TICKS
    return [f"{g:.{decimals}f}" if even else f"{g:.6g}" for g in ticks]


def add_g_axis(axes: Axes, frequency: float, *, label: bool = True, most: int = 6) -> None:
    """Put g on the top of a panel whose abscissa is the field in mT."""
    first, last = axes.get_xlim()
    ticks = g_ticks(first, last, frequency, most=most)
    top = axes.secondary_xaxis("top")
    top.xaxis.set_major_locator(FixedLocator([field_of(g, frequency) for g in ticks]))
    top.xaxis.set_major_formatter(FixedFormatter(g_texts(ticks)))
    top.xaxis.set_minor_locator(NullLocator())
    if label:
        top.set_xlabel(f"g at {frequency / 1e3:.6g} GHz")


def power_of_unit(values: Array) -> tuple[float, str]:
    """Return a power of 1000 to divide by and how the unit is then written."""
    largest = float(np.nanmax(np.abs(values))) if values.size else 0.0
    if not (math.isfinite(largest) and largest > 0):
        return 1.0, "arb. units"
    exponent = 3 * math.floor(math.log10(largest) / 3)
    if exponent in (0, -3) and largest >= 0.1:
        return 1.0, "arb. units"
    return 10.0**exponent, f"$10^{{{exponent}}}$ arb. units"


def _limits(axes: Axes, *curves: Array) -> None:
    low = min(float(np.nanmin(c)) for c in curves)
    high = max(float(np.nanmax(c)) for c in curves)
    room = 0.06 * (high - low) or 1.0
    axes.set_ylim(low - room, high + room)


def _field_axis(axes: Axes) -> None:
    """Label the field axis; few enough ticks that "1212.5" has room at a column's width."""
    axes.xaxis.set_major_locator(MaxNLocator(7, steps=[1, 2, 2.5, 5, 10]))
    axes.xaxis.get_major_formatter().set_useOffset(False)
    axes.set_xlabel(FIELD_LABEL)


def _draw_fit(axes: Axes, curves: Curves) -> None:
    """Draw measured and fitted signal."""
    factor, unit = power_of_unit(curves.measured)
    y = curves.measured / factor
    axes.plot(curves.field, np.where(curves.used, np.nan, y), color=style.UNUSED, lw=0.7)
    axes.plot(curves.field, np.where(curves.used, y, np.nan), color=style.MEASURED, lw=0.7, label="measured")
    axes.plot(curves.field, curves.fitted / factor, color=style.FITTED, lw=0.9, label="fitted")
    axes.set_ylabel(f"{SIGNAL_NAMES.get(curves.detect, 'signal')}\n/ {unit}")
    _limits(axes, y, curves.fitted / factor)
    _legend(axes)


def _legend(axes: Axes, columns: int = 1) -> None:
    axes.legend(loc="best", ncols=columns, borderaxespad=0.4, labelspacing=0.3)


def _draw_parts(axes: Axes, fields: Array, parts: Mapping[str, Array]) -> None:
    """Draw each species' own signal, shifted apart so that none hides another."""
    shift, below = 0.0, 0.0
    for index, (name, part) in enumerate(parts.items()):
        y = np.asarray(part)
        if index:
            shift += below - 1.1 * float(np.max(y))
        below = 1.1 * float(np.min(y))
        colour, dashes = style.part_colour(index)
        axes.plot(fields, y + shift, color=colour, dashes=dashes)
        axes.annotate(name, (0.012, shift), xycoords=("axes fraction", "data"), xytext=(0, 1.5), color=colour,
                      textcoords="offset points", va="bottom", fontsize=6.5)  # fmt: skip
    axes.set_yticks([])
    axes.set_ylabel("species,\nshifted")


def _draw_residual(axes: Axes, curves: Curves) -> None:
    """Draw the residual in units of the noise, with the band that holds 95 % of white noise."""
    noise = curves.noise if curves.noise > 0 else 1.0
    y = curves.residual / noise
    axes.axhspan(-2, 2, color=style.UNUSED, alpha=0.35, lw=0)
    axes.axhline(0, color=style.GUIDE, lw=0.5)
    axes.plot(curves.field, np.where(curves.used, np.nan, y), color=style.UNUSED, lw=0.6)
    axes.plot(curves.field, np.where(curves.used, y, np.nan), color=style.MEASURED, lw=0.6)
    shown = y[curves.used] if curves.used.any() else y
    reach = max(4.0, 1.1 * float(np.nanmax(np.abs(shown))))
    axes.set_ylim(-reach, reach)
    axes.set_ylabel("residual\n/ σ")
    _field_axis(axes)


def fit_figure(outcome: Outcome) -> Figure:
    """Return the picture of a fit: for each trace measured and fitted, the species, the residual."""
    traces = outcome.curves[:MOST_TRACES]
    columns = 1 if len(traces) == 1 else 2 if len(traces) <= 4 else 3
    rows = max(1, math.ceil(len(traces) / columns))
    several = any(len(curves.parts) > 1 for curves in traces)
    heights = [3.0, 1.7, 1.1] if several else [3.0, 1.0]
    width = style.COLUMN_WIDTH if columns == 1 else style.PAGE_WIDTH
    with style.styled():
        figure = Figure(figsize=(width, rows * (3.7 if several else 2.9)), layout="constrained")
        blocks = figure.subfigures(rows, columns, squeeze=False).ravel()
        for curves, block in zip(traces, blocks, strict=False):
            panels = block.subplots(len(heights), 1, sharex=True, gridspec_kw={"height_ratios": heights})
            _draw_fit(panels[0], curves)
            if several:
                _draw_parts(panels[1], curves.field, curves.parts)
            _draw_residual(panels[-1], curves)
            panels[0].set_xlim(curves.field[0], curves.field[-1])
            add_g_axis(panels[0], curves.frequency)
            block.align_ylabels(panels)
            if len(traces) > 1:
                block.suptitle(curves.trace, fontsize=7.5, x=0.5)
    return figure


def spectrum_figure(
    fields: Array,
    signal: Array,
    *,
    frequency: float | None,
    detect: str = "derivative",
    parts: Mapping[str, Array] | None = None,
) -> Figure:
    """Return the picture of a simulated spectrum, relative to its largest value, with its species below.

    g stands on top where the frequency, MHz, is known.
    """
    largest = float(np.max(np.abs(signal))) or 1.0
    several = parts is not None and len(parts) > 1
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 3.2 if several else 2.3), layout="constrained")
        ratios = [1.5, 1.0] if several else [1.0]
        panels = figure.subplots(len(ratios), 1, sharex=True, squeeze=False, gridspec_kw={"height_ratios": ratios})[
            :, 0
        ]
        panels[0].plot(fields, signal / largest, color=style.MEASURED)
        panels[0].set_ylabel(f"{SIGNAL_NAMES.get(detect, 'signal')} / largest value")
        if parts is not None and several:
            _draw_parts(panels[1], fields, parts)
        panels[0].set_xlim(fields[0], fields[-1])
        _field_axis(panels[-1])
        if frequency is not None:
            add_g_axis(panels[0], frequency)
    return figure


def angles_figure(
    fields: Array, signals: Sequence[Array], angles: Sequence[float], *, frequency: float, detect: str = "derivative"
) -> Figure:
    """Return spectra at several angles (rad), shifted upwards by their number."""
    largest = max(float(np.max(np.abs(signal))) for signal in signals) or 1.0
    height = float(np.clip(0.3 * len(signals) + 1.2, 2.3, 8.0))
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, height), layout="constrained")
        axes = figure.subplots()
        for index, signal in enumerate(signals):
            axes.plot(fields, 0.8 * signal / largest + index, color=style.MEASURED, lw=0.8)
        shown = range(0, len(signals), max(1, len(signals) // 20))
        axes.set_yticks(list(shown), [f"{np.rad2deg(angles[k]):.4g}" for k in shown])
        axes.set_ylabel(f"angle / deg ({SIGNAL_NAMES.get(detect, 'signal')}, shifted)")
        axes.set_xlim(fields[0], fields[-1])
        _field_axis(axes)
        add_g_axis(axes, frequency)
    return figure


def trace_figure(
    field: Array, signal: Array, found: Analysis, *, frequency: float | None = None, detect: str = "derivative"
) -> Figure:
    """Return the picture of a measured trace with its turning points marked."""
    factor, unit = power_of_unit(signal)
    marks = {"maximum": "v", "minimum": "^", "crossing": "o"}
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 2.3), layout="constrained")
        axes = figure.subplots()
        axes.plot(field, signal / factor, color=style.MEASURED, lw=0.7)
        low, high = float(np.min(signal)) / factor, float(np.max(signal)) / factor
        room = 0.045 * (high - low)
        for kind, mark in marks.items():
            points = [point for point in found.turning_points if point.kind == kind]
            x = np.array([point.field for point in points])
            y = np.interp(x, field, signal) / factor + {"maximum": room, "minimum": -room}.get(kind, 0.0)
            face = "none" if kind == "crossing" else style.FITTED
            axes.plot(x, y, mark, ms=3.2, mfc=face, mec=style.FITTED, mew=0.7, ls="none", label=kind)
        if found.turning_points:
            _legend(axes)
        axes.set_xlim(field[0], field[-1])
        axes.set_ylim(low - 3 * room, high + 3 * room)
        _field_axis(axes)
        axes.set_ylabel(f"{SIGNAL_NAMES.get(detect, 'signal')} / {unit}")
        if frequency is not None:
            add_g_axis(axes, frequency)
    return figure


def picture_bytes(figure: Figure, kind: str = "png") -> bytes:
    """Draw a figure and return the file's bytes ("png", "svg" or "pdf"), free of dates and versions."""
    buffer = io.BytesIO()
    metadata = {"png": {"Software": None}, "svg": {"Date": None, "Creator": None}}.get(kind, {"CreationDate": None})
    with style.styled():
        FigureCanvasAgg(figure)
        figure.savefig(buffer, format=kind, metadata=metadata)
    return buffer.getvalue()
