"""Fits of line positions: `curves.csv` and the picture, field against angle."""

from __future__ import annotations

import io
import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from spinfit.fitting.outcome import Outcome, PositionTable
from spinfit.report import style


def positions_text(outcome: Outcome) -> str:
    """Return the table of measured and fitted fields as text.

    Columns: angle_deg (or theta_deg, phi_deg), measured_mT, fitted_mT, residual_mT, uncertainty_mT, lower,
    upper, used (1, or 0 for outliers); in front ``table`` when there are several.  A line that belongs to no
    transition has no fitted field and levels 0.
    """
    several = len(outcome.positions) > 1
    spherical = any(table.setting.shape[1] == 2 for table in outcome.positions)
    out = io.StringIO()
    place = ["theta_deg", "phi_deg"] if spherical else ["angle_deg"]
    fields = ["measured_mT", "fitted_mT", "residual_mT", "uncertainty_mT", "lower", "upper", "used"]
    out.write(",".join([*(["table"] if several else []), *place, *fields]) + "\n")
    for table in outcome.positions:
        numbers = np.column_stack(
            [np.rad2deg(table.setting), table.measured, table.fitted, table.residual, table.uncertainty]
        )
        for row, lower, upper, used in zip(numbers, table.lower, table.upper, table.used, strict=True):
            cells = [f"{v:.9g}" if math.isfinite(v) else "" for v in row]
            if table.setting.shape[1] < len(place):
                cells.insert(1, "")
            front = [table.name] if several else []
            out.write(",".join([*front, *cells, str(int(lower)), str(int(upper)), str(int(used))]) + "\n")
    return out.getvalue()


def positions_figure(outcome: Outcome) -> Figure:
    """Return the picture of a fit of line positions: for each table field against angle, and residuals."""
    tables = outcome.positions
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 3.6 * len(tables)), layout="constrained")
        blocks = np.atleast_1d(figure.subfigures(len(tables), 1))
        for table, block in zip(tables, blocks, strict=True):
            panels = block.subplots(2, 1, sharex=True, gridspec_kw={"height_ratios": [3.0, 1.0]})
            _draw_fields(panels[0], table)
            _draw_residuals(panels[1], table)
            block.align_ylabels(panels)
            if len(tables) > 1:
                block.suptitle(table.name, fontsize=7.5)
    return figure


def angle_locator() -> MaxNLocator:
    """Return a locator of ticks 15, 30, 45 or 90 degrees apart where the range is wide enough."""
    return MaxNLocator(7, steps=[1, 1.5, 3, 4.5, 9, 10])


def angle_ticks(first: float, last: float) -> list[float]:
    """Return the ticks of an axis in degrees."""
    values = angle_locator().tick_values(first, last)
    return [float(value) for value in values if first <= value <= last]


def abscissa(table: PositionTable) -> tuple[np.ndarray, str]:
    """Return where the lines of a table stand on the axis, degrees or their number, and the axis's title."""
    if table.setting.shape[1] == 1:
        return np.rad2deg(table.setting[:, 0]), "angle / deg"
    return np.arange(1, len(table.measured) + 1, dtype=float), "line of the table"


def _draw_fields(axes: Axes, table: PositionTable) -> None:
    """Draw measured fields over all calculated lines, strong ones darker than weak ones."""
    x, _ = abscissa(table)
    if len(table.drawn):
        angle, field, weight = table.drawn.T
        strength = np.clip(1 + np.log10(weight) / 3, 0.12, 1.0)
        axes.scatter(np.rad2deg(angle), field, s=0.7, c=style.FITTED, alpha=strength, lw=0, label="fitted")
    else:
        axes.plot(x, table.fitted, "_", color=style.FITTED, ms=6, label="fitted")
    used = table.used
    axes.plot(x[used], table.measured[used], "o", ms=2.6, mfc="none", mec=style.MEASURED, mew=0.7, label="measured")
    if not used.all():
        axes.plot(x[~used], table.measured[~used], "x", ms=3.5, color=style.GUIDE, mew=0.8, label="left out")
    room = 0.06 * float(np.ptp(table.measured)) or 1.0
    axes.set_ylim(float(table.measured.min()) - room, float(table.measured.max()) + room)
    axes.set_ylabel("magnetic field / mT")
    axes.legend(loc="best", borderaxespad=0.4, labelspacing=0.3, markerscale=1.5)


def _draw_residuals(axes: Axes, table: PositionTable) -> None:
    """Draw measured less fitted in mT with bars of one standard uncertainty."""
    x, label = abscissa(table)
    used = table.used
    axes.axhline(0, color=style.GUIDE, lw=0.5)
    axes.errorbar(x[used], table.residual[used], table.uncertainty[used], fmt="o", ms=1.8, color=style.MEASURED, lw=0.5)
    axes.set_ylabel("residual\n/ mT")
    axes.set_xlabel(label)
    if table.setting.shape[1] == 1:
        axes.xaxis.set_major_locator(angle_locator())
