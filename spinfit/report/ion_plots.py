"""Pictures of ions: levels from the free ion to the field, g side by side, doublets against E/D, a term in a field.

Figures are built without pyplot; colours, dashes and markers tell the curves apart, also in print.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from spinfit.ion.free_levels import free_levels, free_terms
from spinfit.ion.kramers import doublet_table
from spinfit.ion.model import IonModel, Levels, solve
from spinfit.ion.names import half
from spinfit.ion.quench import QuenchRow, ground_state
from spinfit.ion.tensors import SpinHamiltonian
from spinfit.ion.weak_field import parting_field, term_in_field
from spinfit.report import style
from spinfit.units import MHZ_PER_WAVENUMBER, MU_B_OVER_H

Array = NDArray[np.float64]
# Markers of the three kinds of g; their shapes differ as their colours do.
_KINDS = (
    ("free ion", "s", style.PARTS[0]),
    ("spin only", "|", style.GUIDE),
    ("crystal field", "o", style.PARTS[1]),
    ("measured", "D", style.FITTED),
)


def comparison_figure(rows: Sequence[QuenchRow]) -> Figure:
    """Draw free-ion, spin-only, crystal-field and measured g on one axis, one line an ion."""
    with style.styled():
        figure = Figure(figsize=(style.PAGE_WIDTH * 0.75, 0.7 + 0.32 * len(rows)), layout="constrained")
        axes = figure.add_subplot()
        used: set[str] = set()
        for k, row in enumerate(rows):
            measured = None if row.measured is None else row.measured.values
            level = None if row.level.g_J is None else (row.level.g_J,)
            groups = (level, (row.spin_only,), row.g_crystal, measured)
            for (label, marker, colour), values, shift in zip(_KINDS, groups, (0.0, 0.0, 0.14, -0.14), strict=True):
                if values is None:
                    continue
                hollow = {"markerfacecolor": "none"} if label == "crystal field" else {}
                axes.plot(
                    values,
                    [k - shift] * len(values),
                    marker=marker,
                    ls="-" if len(values) > 1 else "",
                    lw=0.5,
                    color=colour,
                    ms=9 if marker == "|" else 4,
                    label=None if label in used else label,
                    **hollow,
                )
                used.add(label)
        axes.set_yticks(range(len(rows)), [f"{row.level.ion}  {row.level.term}" for row in rows])
        axes.tick_params(axis="y", which="minor", length=0)
        axes.set_ylim(len(rows) - 0.4, -0.6)
        axes.set_xlabel("g")
        axes.grid(axis="y", color="#e3e6ea", lw=0.4)
        figure.legend(loc="outside upper center", ncols=4)
    return figure


# ---------------------------------------------------------------- from the free ion to the field


def stages(model: IonModel) -> list[tuple[str, list[tuple[float, int]]]]:
    """Return levels, (MHz above each stage's lowest, number of states), as the parts of the Hamiltonian come in.

    The terms of the free ion by repulsion, then spin-orbit coupling, then the crystal field.
    """
    if model.space == "configuration":
        terms = [(x.energy, round(2 * x.S + 1) * (2 * x.L + 1)) for x in free_terms(model)]
        coupled = [(x.energy, round(2 * x.J + 1)) for x in free_levels(model)]
    else:
        free = replace(model, crystal_field=None)
        terms = _grouped(solve(replace(free, zeta=0.0)).excitation)
        coupled = _grouped(solve(free).excitation)
    return [
        ("free ion:\nterms", terms),
        ("spin-orbit\ncoupling", coupled),
        ("crystal\nfield", _grouped(solve(model).excitation)),
    ]


def level_figure(
    model: IonModel,
    *,
    field: float = 1000.0,
    direction: Sequence[float] = (0.0, 0.0, 1.0),
    highest: float | None = None,
    lowest: int | None = None,
) -> Figure:
    """Draw levels from the free ion's terms to the crystal field, and the lowest states in a magnetic field.

    Parameters
    ----------
    field : float
        Largest field, mT.
    highest : float, optional
        Energy up to which levels are drawn, MHz; by default what shows the lowest two dozen states and more.
    lowest : int, optional
        How many states the right panel shows; by default the ground manifold or doublet.
    """
    columns = stages(model)
    levels = solve(model)
    if lowest is None:
        ground = ground_state(model, levels)
        lowest = round(2 * ground.S) + 1 if isinstance(ground, SpinHamiltonian) else 2
    crystal = levels.excitation
    top = 1.3 * float(crystal[min(len(crystal) - 1, 24)]) if highest is None else highest
    with style.styled():
        figure = Figure(figsize=(style.PAGE_WIDTH, 3.3), layout="constrained")
        left, right = figure.subplots(1, 2, width_ratios=(1.4, 1))
        for k, (_, stage) in enumerate(columns):
            _draw_stage(left, k, [level for level in stage if level[0] <= top], top)
        left.set_xticks(range(3), [name for name, _ in columns])
        left.tick_params(axis="x", which="both", length=0)
        left.set_xlim(-0.6, 2.75)
        left.set_ylim(-0.06 * top / MHZ_PER_WAVENUMBER, 1.06 * top / MHZ_PER_WAVENUMBER)
        left.set_ylabel("energy above the lowest level / cm$^{-1}$")
        left.set_title("levels, with how many states each has", loc="left")
        figure.suptitle(textwrap.fill(f"{model.name or model.shell}: {model.crystal.remark or 'given field'}", 110))
        _draw_zeeman(right, levels, field, direction, lowest)
    return figure


def _grouped(energies: Array) -> list[tuple[float, int]]:
    """Return (energy, degeneracy) of levels, MHz."""
    if not len(energies):
        return []
    tolerance = max(1e-9 * float(energies[-1]), 1e-3)
    edges = np.flatnonzero(np.diff(energies) > tolerance) + 1
    return [(float(group.mean()), len(group)) for group in np.split(energies, edges)]


def _draw_stage(axes: Axes, place: int, levels: Sequence[tuple[float, int]], top: float) -> None:
    """Draw one column of levels with their degeneracy, left out where lines crowd."""
    colour = style.PARTS[(0, 3, 2)[place]]
    last = -np.inf
    for energy, degeneracy in levels:
        y = energy / MHZ_PER_WAVENUMBER
        axes.plot([place - 0.33, place + 0.33], [y, y], color=colour, lw=1.1)
        if energy - last > 0.035 * top:
            axes.text(place + 0.37, y, str(degeneracy), va="center", fontsize=5.5, color="#444a54")
            last = energy


def _draw_zeeman(axes: Axes, levels: Levels, field: float, direction: Sequence[float], lowest: int) -> None:
    """Draw the lowest states against the field, among the 60 states (at most) that lie lowest."""
    kept, near = min(lowest, len(levels.energies)), min(60, len(levels.energies))
    n = np.asarray(direction, dtype=float) / np.linalg.norm(direction)
    moment = np.einsum("i,iab->ab", n, levels.moments(slice(0, near)))
    fields = np.linspace(0, field, 41)
    stack = np.diag(levels.excitation[:near]) + MU_B_OVER_H * fields[:, None, None] * moment
    curves = np.linalg.eigvalsh(stack)[:, :kept] / MHZ_PER_WAVENUMBER
    for k in range(kept):
        colour, dashes = style.part_colour(k)
        axes.plot(fields / 1e3, curves[:, k], color=colour, dashes=dashes)
    axes.set_xlabel("magnetic field / T")
    axes.set_ylabel("energy / cm$^{-1}$")
    axes.margins(x=0)
    along = " ".join(f"{c:g}" for c in direction)
    axes.set_title(f"lowest {kept} states, field along [{along}]", loc="left")


# ---------------------------------------------------------------- doublets and a term in a field


def doublets_figure(S: float, *, g: float = 2.0, measured: Sequence[float] = ()) -> Figure:
    """Draw effective g of every Kramers doublet of S against E/D; measured values as horizontal lines."""
    lam = np.linspace(0, 1 / 3, 241)
    values = doublet_table(S, lam, g=g)
    count = values.shape[1]
    with style.styled():
        figure = Figure(figsize=(style.PAGE_WIDTH, 2.4), layout="constrained")
        panels = np.atleast_1d(figure.subplots(1, count, sharex=True, sharey=True))
        for d, axes in enumerate(panels):
            for k, axis in enumerate("xyz"):
                colour, dashes = style.part_colour(k)
                axes.plot(lam, values[:, d, k], color=colour, dashes=dashes, label=f"$g'_{axis}$")
            for value in measured:
                axes.axhline(value, color=style.FITTED, lw=0.5)
            axes.set_title(f"S = {half(S)}, doublet {d + 1}", loc="left")
            axes.set_xlabel("E/D")
            axes.set_xlim(0, 1 / 3)
        panels[0].set_ylim(0, None)
        panels[0].set_ylabel("effective g")
        panels[0].legend(loc="best")
    return figure


def term_figure(S: float, L: int, J: float, lam: float, *, g_spin: float | None = None) -> Figure:
    """Draw a term's levels in a field, exact and by Landé's straight lines, and where they part by 1 %.

    Parameters
    ----------
    lam : float
        lambda of the term, MHz.
    """
    part = parting_field(S, L, J, lam, g_spin=g_spin)
    whole = 1.5 * abs(lam) * max(L, S, 0.5) / MU_B_OVER_H
    with style.styled():
        figure = Figure(figsize=(style.PAGE_WIDTH, 2.8), layout="constrained")
        for axes, last, title in zip(
            figure.subplots(1, 2),
            (whole, 20 * part if part else whole),
            ("from weak to strong field", f"level J = {half(J)} where Landé's lines end"),
            strict=True,
        ):
            levels = term_in_field(S, L, lam, np.linspace(0, last, 121), g_spin=g_spin)
            own = np.abs(levels.J - J) < 0.1
            shown = np.ones_like(own) if axes is figure.axes[0] else own
            for i in np.flatnonzero(shown):
                axes.plot(levels.field / 1e3, levels.exact[:, i] / MHZ_PER_WAVENUMBER, color=style.PARTS[0], lw=0.7)
                if own[i]:
                    straight = levels.first_order[:, i] / MHZ_PER_WAVENUMBER
                    axes.plot(levels.field / 1e3, straight, color=style.PARTS[2], lw=0.7, dashes=(4, 2))
            if part and axes is figure.axes[1]:
                axes.axvline(part / 1e3, color=style.FITTED, lw=0.6)
                axes.annotate(
                    f"1 % at {part / 1e3:.3g} T", (part / 1e3, 1), xycoords=("data", "axes fraction"), fontsize=6,
                    xytext=(2, -8), textcoords="offset points",
                )  # fmt: skip
            axes.set_xlabel("magnetic field / T")
            axes.set_title(title, loc="left")
            axes.margins(x=0)
        figure.axes[0].set_ylabel("energy / cm$^{-1}$")
        figure.axes[0].plot([], [], color=style.PARTS[0], label="exact")
        figure.axes[0].plot([], [], color=style.PARTS[2], dashes=(4, 2), label="first order")
        figure.axes[0].legend(loc="upper left")
    return figure
