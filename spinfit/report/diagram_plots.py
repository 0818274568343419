"""The picture of a level diagram."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from spinfit.diagram import Diagram
from spinfit.report import style
from spinfit.report.plots import FIELD_LABEL, add_g_axis

SHOWN = 1e-3
"""Weight relative to the strongest below which a transition is not drawn."""
LABELLED = 16
"""Transitions up to which each is labelled with its levels."""


def diagram_figure(found: Diagram, *, frequency: float | None) -> Figure:
    """Return levels against field, with the transitions at h nu between them and their weights below.

    g stands on top where the frequency, MHz, is known.
    Emission is dashed, in another colour, and points down.
    """
    weight = found.resonances.weight
    top = float(np.abs(weight).max(initial=0.0))
    shown = np.flatnonzero(np.abs(weight) >= SHOWN * top) if top > 0 else np.arange(0)
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 3.6), layout="constrained")
        upper, lower = figure.subplots(2, 1, sharex=True, gridspec_kw={"height_ratios": [3.2, 1.0]})
        many = found.energies.shape[1] > 16
        upper.plot(found.fields, found.energies / 1e3, color=style.MEASURED, lw=0.4 if many else 0.8)
        for k in shown:
            colour, dashes = _look(weight[k])
            strength = abs(weight[k]) / top
            at = [found.resonances.field[k]] * 2
            upper.plot(at, found.ends[:, k] / 1e3, color=colour, dashes=dashes, lw=0.5 + 0.7 * strength)
            lower.plot(at, [0.0, weight[k] / top], color=colour, dashes=dashes, lw=0.9)
        if len(shown) <= LABELLED:
            _label(lower, found, shown, top)
        lower.axhline(0, color=style.GUIDE, lw=0.5)
        negative = bool((weight[shown] < 0).any())
        lower.set_ylim(-1.9 if negative else 0.0, 1.9 if negative else 1.5)
        lower.set_yticks([-1, 0, 1] if negative else [0, 1])
        lower.set_ylabel("weight\n/ largest")
        lower.set_xlabel(FIELD_LABEL)
        upper.set_ylabel("E/h / GHz")
        _number(upper, found)
        upper.set_xlim(found.fields[0], found.fields[-1])
        figure.align_ylabels([upper, lower])
        if frequency is not None:
            add_g_axis(upper, frequency)
    return figure


def _number(axes: Axes, found: Diagram) -> None:
    """Write the levels' numbers at the last field; levels too close together share a text, "1–4"."""
    last = found.energies[-1] / 1e3
    room = 0.045 * (axes.get_ylim()[1] - axes.get_ylim()[0])
    groups = [[0]]
    for k in range(1, len(last)):
        if last[k] - last[k - 1] < room:
            groups[-1].append(k)
        else:
            groups.append([k])
    for group in groups:
        text = str(group[0] + 1) if len(group) == 1 else f"{group[0] + 1}–{group[-1] + 1}"
        middle = (last[group[0]] + last[group[-1]]) / 2
        axes.annotate(text, (1.0, middle), xycoords=("axes fraction", "data"), xytext=(3, 0), color=style.MEASURED,
                      textcoords="offset points", ha="left", va="center", fontsize=6.0)  # fmt: skip


def _look(weight: float) -> tuple[str, tuple]:
    return (style.FITTED, style.DASHES[0]) if weight >= 0 else (style.PARTS[0], style.DASHES[2])


def _label(axes: Axes, found: Diagram, shown: np.ndarray, top: float) -> None:
    """Write the levels, counted from 1, at the tip of each stick; neighbours too close together go unlabelled."""
    room = 0.07 * (found.fields[-1] - found.fields[0])
    taken: list[tuple[float, bool]] = []
    for k in sorted(shown, key=lambda k: -abs(found.resonances.weight[k])):
        field, weight = float(found.resonances.field[k]), float(found.resonances.weight[k])
        if any(abs(field - other) < room and up == (weight >= 0) for other, up in taken):
            continue
        taken.append((field, weight >= 0))
        text = f"{found.resonances.lower[k] + 1}–{found.resonances.upper[k] + 1}"
        colour, _ = _look(weight)
        axes.annotate(text, (field, weight / top), xytext=(0, 1.5 if weight >= 0 else -1.5), color=colour,
                      textcoords="offset points", ha="center", va="bottom" if weight >= 0 else "top",
                      fontsize=6.0)  # fmt: skip
