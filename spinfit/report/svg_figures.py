"""The pictures of a report as vector drawings: fits, line positions, profiles, resamples, g side by side."""

from __future__ import annotations

from collections.abc import Sequence
from html import escape

import numpy as np

from spinfit.fitting.outcome import Curves, PositionTable
from spinfit.fitting.resample import Profile
from spinfit.ion.quench import QuenchRow
from spinfit.report import style
from spinfit.report.plots import FIELD_LABEL, SIGNAL_NAMES, g_texts, g_ticks, power_of_unit
from spinfit.report.positions import abscissa, angle_ticks
from spinfit.report.svg import Panel, coordinate, drawing, span, text, tick_texts, ticks
from spinfit.units import field_of

WIDTH = 760.0
LEFT = 84.0
RIGHT = 14.0
FRAME = WIDTH - LEFT - RIGHT


def swatch(kind: str, name: str, curve: str = "") -> str:
    """Return an entry of a legend: a piece of the curve and its name."""
    named = f' data-curve="{escape(curve)}"' if curve else ""
    path = "M15 5h0" if kind.startswith("dots") else "M15 1V9" if kind.endswith("upright") else "M1 5H29"
    piece = f'<svg class="swatch" viewBox="0 0 30 10" aria-hidden="true"><path class="{kind}" d="{path}"/></svg>'
    return f'<span class="key"{named}>{piece}{escape(name)}</span>'


def legend(entries: Sequence[str]) -> str:
    return f'<p class="legend">{"".join(entries)}</p>'


def _plain_unit(unit: str) -> str:
    """Turn "$10^{3}$ arb. units" into plain text."""
    raised = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
    before, mark, rest = unit.partition("$10^{")
    if not mark:
        return unit
    exponent, _, after = rest.partition("}$")
    return f"{before}10{exponent.translate(raised)}{after}"


def _shown(values: np.ndarray, used: np.ndarray) -> np.ndarray:
    return np.where(used, values, np.nan)


def fit_drawing(curves: Curves) -> str:
    """Return the legend and the drawing of one trace: measured and fitted, every species, the residual.

    g stands on top, at the trace's own frequency.  Curves can be hidden and a range magnified where the page's
    script runs.
    """
    factor, unit = power_of_unit(curves.measured)
    y = curves.measured / factor
    x = (float(curves.field[0]), float(curves.field[-1]))
    several = len(curves.parts) > 1
    heights = (250.0, 130.0, 90.0) if several else (280.0, 0.0, 90.0)
    top = 50.0
    upper = Panel(LEFT, top, FRAME, heights[0], x, span(y, curves.fitted / factor))
    upper.line(curves.field, _shown(y, ~curves.used), "unused", curve="measured")
    upper.line(curves.field, curves.baseline / factor, "guide dashed", curve="baseline")
    upper.line(curves.field, _shown(y, curves.used), "measured", curve="measured")
    upper.line(curves.field, curves.fitted / factor, "fitted", curve="fitted")
    upper.y_axis(f"{SIGNAL_NAMES.get(curves.detect, 'signal')}\n/ {_plain_unit(unit)}")
    upper.x_axis("", labels=False)
    at = g_ticks(*x, curves.frequency, most=9)
    places = [field_of(g, curves.frequency) for g in at]
    upper.top_axis(f"g at {curves.frequency / 1e3:.6g} GHz", places, g_texts(at))
    panels = [upper]
    keys = [swatch("measured", "measured", "measured"), swatch("fitted", "fitted", "fitted")]
    if not curves.used.all():
        keys.append(swatch("unused", "not fitted", "measured"))
    keys.append(swatch("guide dashed", "baseline", "baseline"))
    if several:
        panels.append(_parts_panel(curves, top + heights[0] + 12, heights[1]))
        keys += [swatch(f"part-{n % len(style.PARTS)}", name, f"part {n}") for n, name in enumerate(curves.parts)]
    residual = _residual_panel(curves, top + sum(heights[:2]) + (24 if several else 12), heights[2])
    panels.append(residual)
    alt = f"{curves.trace}: measured and fitted signal with residual against magnetic field"
    height = residual.top + residual.height + 44
    picture = drawing(WIDTH, height, panels, alt, f'data-field="{field_of(1.0, curves.frequency):.9g}"')
    return legend(keys) + f'<div class="wide">{picture}</div>'


def _parts_panel(curves: Curves, top: float, height: float) -> Panel:
    """Return the species' own signals, shifted apart so that none hides another."""
    shifted, shift, below = [], 0.0, 0.0
    for n, part in enumerate(curves.parts.values()):
        if n:
            shift += below - 1.1 * float(np.nanmax(part))
        below = 1.1 * float(np.nanmin(part))
        shifted.append(np.asarray(part) + shift)
    x = (float(curves.field[0]), float(curves.field[-1]))
    panel = Panel(LEFT, top, FRAME, height, x, span(*shifted))
    for n, part in enumerate(shifted):
        panel.line(curves.field, part, f"part-{n % len(style.PARTS)}", curve=f"part {n}")
    panel.y_axis("species,\nshifted", shown=False)
    panel.x_axis("", labels=False)
    return panel


def _residual_panel(curves: Curves, top: float, height: float) -> Panel:
    noise = curves.noise if curves.noise > 0 else 1.0
    y = curves.residual / noise
    shown = y[curves.used & np.isfinite(y)]
    reach = max(4.0, 1.1 * float(np.abs(shown).max(initial=0.0)))
    x = (float(curves.field[0]), float(curves.field[-1]))
    panel = Panel(LEFT, top, FRAME, height, x, (-reach, reach))
    panel.band(-2, 2, "band")
    panel.across_line(0, "guide thin")
    panel.line(curves.field, _shown(y, ~curves.used), "unused", curve="measured")
    panel.line(curves.field, _shown(y, curves.used), "measured thin", curve="measured")
    panel.y_axis("residual\n/ σ", most=4)
    panel.x_axis(FIELD_LABEL)
    return panel


def positions_drawing(table: PositionTable) -> str:
    """Return the legend and the drawing of a table of line positions: fields and residuals against the angle."""
    x, label = abscissa(table)
    turned = table.setting.shape[1] == 1
    ends = span(x, room=0.03)
    upper = Panel(LEFT, 12, FRAME, 330, ends, span(table.measured))
    for which, kind in ((table.used, "measured"), (~table.used, "unused")):
        upper.dots(x[which], table.measured[which], f"{kind} ring")
        upper.dots(x[which], table.measured[which], "hole")
    if len(table.drawn):
        angle, field, weight = table.drawn.T
        strong = weight >= np.quantile(weight, 0.5) / 10
        for which, kind in ((~strong, "fitted faint fine"), (strong, "fitted fine")):
            upper.dots(np.rad2deg(angle[which]), field[which], kind)
    else:
        upper.dots(x, table.fitted, "fitted fine")
    places = angle_ticks(*ends) if turned else None
    upper.y_axis(FIELD_LABEL, most=7)
    upper.x_axis("", labels=False, values=places)
    known = table.used & np.isfinite(table.residual)
    low, high = table.residual - table.uncertainty, table.residual + table.uncertainty
    lower = Panel(LEFT, 354, FRAME, 100, ends, span(low[known], high[known]))
    lower.across_line(0, "guide thin")
    lower.bars(x[known], low[known], high[known], "measured thin")
    lower.dots(x[known], table.residual[known], "measured")
    lower.y_axis("residual\n/ mT", most=4)
    lower.x_axis(label, values=places)
    keys = [swatch("dots measured ring", "measured"), swatch("dots fitted", "fitted")]
    if not table.used.all():
        keys.append(swatch("dots unused ring", "left out"))
    alt = f"{table.name}: measured and fitted fields of lines with residual against angle"
    return legend(keys) + f'<div class="wide">{drawing(WIDTH, 498, [upper, lower], alt)}</div>'


def profile_drawing(one: Profile) -> str:
    """Return the rise of chi-squared against one parameter, with the levels of 1 and 2 standard deviations."""
    width, height = 370.0, 210.0
    top = max(5.0, min(float(np.nanmax(one.rise)), 12.0)) * 1.06
    panel = Panel(64, 10, width - 78, height - 62, span(one.values, room=0.04), (0.0, top))
    for level in (1.0, 4.0):
        panel.across_line(level, "guide thin")
    panel.line(one.values, one.rise, "fitted")
    panel.dots(one.values, one.rise, "fitted")
    panel.y_axis("rise of χ²", most=4)
    panel.x_axis(f"{one.name} / {one.unit}" if one.unit else one.name, values=_few(panel))
    return drawing(width, height, [panel], f"rise of chi-squared against {one.name}")


def histogram_drawing(
    label: str, values: np.ndarray, ends: Sequence[float], expected: tuple[float, float | None], counted: str
) -> str:
    """Return the histogram of a parameter's values, with the bell that the fit itself expects.

    Parameters
    ----------
    label : str
        Name and unit.
    values : ndarray, shape (n,)
    ends : (low, high)
        Of the interval to mark.
    expected : (value, uncertainty)
        Of the fit, from the noise; no bell without an uncertainty.
    counted : str
        What is counted: "refits", "draws".
    """
    width, height = 370.0, 190.0
    counts, edges = np.histogram(values, bins=int(np.clip(np.sqrt(len(values)), 5, 40)))
    top = float(counts.max())
    value, sigma = expected
    x, bell = np.zeros(0), np.zeros(0)
    if sigma is not None and np.isfinite(value) and 0 < sigma < 30 * float(np.ptp(edges)):
        x = value + sigma * np.linspace(-4, 4, 81)
        area = len(values) * float(edges[1] - edges[0])
        bell = area * np.exp(-0.5 * ((x - value) / sigma) ** 2) / (sigma * np.sqrt(2 * np.pi))
        top = max(top, min(float(bell.max()), 2 * top))
    panel = Panel(64, 10, width - 78, height - 62, span(edges, room=0.04), (0.0, 1.08 * top))
    panel.line(np.repeat(edges, 2), np.concatenate(([0], np.repeat(counts, 2), [0])), "part-0")
    panel.line(x, bell, "fitted thin")
    for end in ends:
        panel.upright_line(float(end), "guide dashed")
    panel.y_axis(counted, most=4)
    panel.x_axis(label, values=_few(panel))
    return drawing(width, height, [panel], f"histogram of {label} over the {counted}")


def pair_drawing(labels: tuple[str, str], values: np.ndarray) -> str:
    """Return draws of two parameters against each other, shape (n, 2): at most a thousand of them."""
    kept = values[:: max(1, len(values) // 1000)]
    panel = Panel(96, 10, 262, 190, span(kept[:, 0], room=0.04), span(kept[:, 1], room=0.04))
    panel.dots(kept[:, 0], kept[:, 1], "part-0 fine")
    panel.y_axis(labels[1], most=5)
    panel.x_axis(labels[0], values=_few(panel))
    return drawing(372, 252, [panel], f"draws of {labels[1]} against {labels[0]}")


def _few(panel: Panel) -> list[float]:
    """Return ticks of a narrow panel: numbers as long as 2.00365 must find room."""
    for most in (5, 4, 3, 2):
        found = ticks(*panel.x, most)
        if len(found) * max(map(len, tick_texts(found)), default=0) * 8 < panel.width:
            return found
    return found[:1]


def g_drawing(rows: Sequence[tuple[str, QuenchRow]]) -> str:
    """Return free-ion, spin-only, crystal-field and measured g on one axis, one line a species."""
    kinds = (
        ("free ion", "part-0 square", lambda r: None if r.level.g_J is None else (r.level.g_J,)),
        ("spin only", "guide upright", lambda r: (r.spin_only,)),
        ("crystal field", "part-2", lambda r: r.g_crystal),
        ("measured", "fitted", lambda r: None if r.measured is None else r.measured.values),
    )
    height = 34.0 * len(rows)
    every = [v for _, row in rows for _, _, take in kinds for v in (take(row) or ())]
    titles = [f"{name}: {row.level.ion} {row.level.term}" for name, row in rows]
    left = min(max(150.0, 24 + 7.5 * max(map(len, titles))), 460.0)
    panel = Panel(left, 10, WIDTH - left - 14, height, span(every, room=0.08), (len(rows) - 0.5, -0.5))
    panel.x_axis("g")
    keys, used = [], set()
    for k, (_, row) in enumerate(rows):
        panel.frame.append(text(left - 8, 10 + float(panel.down(k)) + 4, titles[k][-60:], anchor="end"))
        for n, (label, kind, take) in enumerate(kinds):
            values = take(row)
            if values is None:
                continue
            shift = (0.0, 0.0, -0.18, 0.18)[n]
            if label == "spin only":
                panel.bars(values, [k - 0.35], [k + 0.35], kind)
            else:
                panel.dots(values, [k + shift] * len(values), kind)
            if label not in used:
                used.add(label)
                keys.append(swatch(kind if label == "spin only" else f"dots {kind}", label))
    alt = "g of the free ion, of the spin alone, of the crystal field and as measured, for each species"
    return legend(keys) + f'<div class="wide">{drawing(WIDTH, height + 56, [panel], alt)}</div>'


def heat_map(names: Sequence[str], matrix: np.ndarray) -> str:
    """Return the matrix of correlations as a map: darker is stronger, the sign stands in the number."""
    count = len(names)
    cell, top = 46.0, 8.0
    left = 40.0 + 7.5 * max(map(len, names), default=0)
    words = []
    for i in range(count):
        y = top + cell * i * 0.6
        words.append(text(left - 8, y + cell * 0.3 + 4, f"{names[i]}  {i + 1}", anchor="end"))
        for j in range(i + 1):
            value = float(matrix[i, j])
            x = left + cell * j
            level = min(int(abs(value) * 5), 4) if np.isfinite(value) and i != j else 0
            sign = "negative" if value < 0 else "positive"
            size = f'width="{coordinate(cell - 2)}" height="{coordinate(cell * 0.6 - 2)}"'
            words.append(f'<rect class="{sign} level-{level}" x="{coordinate(x)}" y="{coordinate(y)}" {size}/>')
            shown = "1" if i == j else f"{value:+.2f}".replace("-", "\u2212")
            strong = "on-dark" if level >= 3 else ""
            words.append(text(x + cell / 2 - 1, y + cell * 0.3 + 3, shown, strong, anchor="middle"))
    bottom = top + cell * 0.6 * count
    for j in range(count):
        words.append(text(left + cell * j + cell / 2, bottom + 12, str(j + 1), anchor="middle"))
    width, height = coordinate(left + cell * count + 4), coordinate(bottom + 20)
    size = f'viewBox="0 0 {width} {height}" width="{width}" height="{height}"'
    return f'<svg class="map" {size} role="img" aria-label="correlations">{"".join(words)}</svg>'
