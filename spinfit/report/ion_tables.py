"""Tables of ions for the screen: the comparison of g values, what a measurement needs, candidates, doublets."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from spinfit.ion.assignment import Candidate
from spinfit.ion.inverse import Needed
from spinfit.ion.kramers import DoubletMatch, doublet_table
from spinfit.ion.lande import IonLevel
from spinfit.ion.names import half
from spinfit.ion.quench import QuenchRow
from spinfit.ion.tensors import DoubletG
from spinfit.report.layout import table, wrapped
from spinfit.report.numbers import short, with_uncertainty
from spinfit.units import MHZ_PER_WAVENUMBER

AXES = ("x", "y", "z")


def g_values(
    values: Sequence[float] | None, uncertainties: Sequence[float] | None = None, digits: int = 4
) -> list[str]:
    """Return texts of three g values, "-" where there are none."""
    if values is None:
        return ["-", "-", "-"]
    if uncertainties is None or not any(uncertainties):
        return [f"{value:.{digits}f}" if math.isfinite(value) else "-" for value in values]
    return [with_uncertainty(v, u) for v, u in zip(values, uncertainties, strict=True)]


def _joined(cells: Sequence[str]) -> str:
    """Write three cells as one: "2.05 2.06 2.33", one value where all are the same."""
    return cells[0] if len(set(cells)) == 1 else " ".join(cells)


def percent(value: float | None, uncertainty: float | None = None) -> str:
    """Write a fraction in percent."""
    if value is None or not math.isfinite(value):
        return "-"
    if uncertainty:
        return with_uncertainty(100 * value, 100 * uncertainty)
    return f"{100 * value:.1f}"


def quench_table(rows: Sequence[QuenchRow]) -> str:
    """Return the comparison, one line for each different component of g; fields, D and notes below."""
    headings = [
        "ion",
        "conf.",
        "level",
        "g_J",
        "axis",
        "spin",
        "field",
        "1st order",
        "measured",
        "L left / %",
        "measured / %",
        "p(J)",
        "p(S)",
        "p(300 K)",
    ]
    cells = [line for row in rows for line in _quench_lines(row)]
    parts = [table(headings, cells, left=(0, 1, 2, 4))]
    below = [line for row in rows for line in quench_remarks(row)]
    if below:
        parts.append("\n".join(wrapped(line) for line in dict.fromkeys(below)))
    return "\n\n".join(parts)


def _quench_lines(row: QuenchRow) -> list[list[str]]:
    """Return the lines of one ion: axes whose numbers all agree share a line."""
    level, measured = row.level, row.measured
    given = ["-"] * 3 if measured is None else g_values(measured.values, measured.uncertainties)
    known = ["-"] * 3
    if row.fraction_measured is not None and row.fraction_uncertainty is not None:
        known = [percent(*pair) for pair in zip(row.fraction_measured, row.fraction_uncertainty, strict=True)]
    left = ["-"] * 3 if row.fraction is None else [percent(f) for f in row.fraction]
    columns = [g_values(row.g_crystal), g_values(row.g_first_order), given, left, known]
    groups: dict[tuple[str, ...], str] = {}
    for k, axis in enumerate(AXES):
        key = tuple(column[k] for column in columns)
        groups[key] = f"{groups[key]},{axis}" if key in groups else axis
    g_j = "-" if level.g_J is None else f"{level.g_J:.4f}"
    head = [level.ion, level.configuration or "-", level.term, g_j]
    warm = "-" if row.moment_300K is None else f"{row.moment_300K:.2f}"
    tail = [f"{level.moment:.2f}", f"{level.spin_only_moment:.2f}", warm]
    lines = []
    for n, (key, axes) in enumerate(groups.items()):
        axis = "" if len(groups) == 1 else axes
        shared = (head, [f"{row.spin_only:.4f}"], tail) if n == 0 else ([""] * 4, [""], [""] * 3)
        lines.append([*shared[0], axis, *shared[1], *key, *shared[2]])
    return lines


def quench_remarks(row: QuenchRow) -> list[str]:
    """Return what belongs under an ion's line: its field, D and E, the doublet, notes."""
    name, lines = row.level.ion, []
    if row.crystal_field:
        lines.append(f"{name}: crystal field: {row.crystal_field}")
    if row.levels:
        listed = ", ".join(f"{short(e / MHZ_PER_WAVENUMBER, 4)} ({n})" for e, n in row.levels)
        lines.append(f"{name}: lowest levels / cm^-1 (states): {listed}")
    if row.kind == "doublet":
        lines.append(f"{name}: crystal-field g is that of the ground doublet, effective spin 1/2")
    if row.mixing:
        lines.append(f"{name}: first order, n and Delta: {_mixing_text(row)}")
    if row.D is not None and row.E is not None:
        D, E, error = (x / MHZ_PER_WAVENUMBER for x in (row.D, row.E, row.projection_error or 0.0))
        lines.append(
            f"{name}: S = {half(row.effective_spin or 0)}, D = {_energy(D)}, E = {_energy(E)} cm^-1; "
            f"higher-order terms left out: {_energy(error)} cm^-1 rms"
        )
    if row.independent is not None:
        lines.append(f"{name}: temperature-independent part of chi: {row.independent:.3g} cm^3/mol")
    return lines + [f"{name}: {note}" for note in row.notes]


def moments_table(rows: Sequence[QuenchRow]) -> str:
    """Return effective moments against temperature, one column an ion."""
    known = [row for row in rows if row.moments]
    if not known:
        return "no moment is known: no crystal field"
    headings = ["T / K"] + [f"p({row.level.ion})" for row in known]
    cells = [[f"{T:g}"] + [f"{row.moments[k][1]:.3f}" for row in known] for k, (T, _) in enumerate(known[0].moments)]
    return table(headings, cells, left=())


def _mixing_text(row: QuenchRow) -> str:
    """Write the largest parts of n lambda/Delta by axis: "x,y: 2.000 over 14000 cm^-1; z: 8.000 over 13000 cm^-1"."""
    groups: dict[str, list[str]] = {}
    for axis in AXES:
        own = sorted((m for m in row.mixing if m.axis == axis), key=lambda m: -abs(m.n / m.delta))[:3]
        own = [m for m in own if abs(m.n / m.delta) > 0.01 * abs(own[0].n / own[0].delta)]
        if own:
            text = " and ".join(f"{m.n:.3f} over {m.delta / MHZ_PER_WAVENUMBER:.0f} cm^-1" for m in own)
            groups.setdefault(text, []).append(axis)
    return "; ".join(f"{','.join(axes)}: {text}" for text, axes in groups.items())


def _energy(value: float) -> str:
    """Write an energy in cm^-1; rounding noise of the diagonalisation is 0."""
    return "0" if abs(value) < 1e-7 else f"{value:.4g}"


def mixing_table(row: QuenchRow) -> str:
    """Return the first-order formula's n and Delta of one ion."""
    cells = [[m.axis, f"{m.n:.3f}", f"{m.delta / MHZ_PER_WAVENUMBER:.0f}"] for m in row.mixing if abs(m.n) >= 5e-4]
    return table(["axis", "n", "Delta / cm^-1"], cells) if cells else "no level mixes into g in first order"


def needed_table(rows: Sequence[Needed]) -> str:
    """Return what a measured g needs, line by line: splittings in cm^-1, reductions as factors."""
    cells = []
    for row in rows:
        unit, factor = ("cm^-1", 1 / MHZ_PER_WAVENUMBER) if row.quantity == "splitting" else ("", 1.0)
        value = None if row.value is None else row.value * factor
        sigma = None if row.uncertainty is None else row.uncertainty * factor
        shown = row.reason if value is None else _rounded(value, sigma, unit)
        cells.append([row.quantity, row.axis, shown, _rounded(row.given * factor, None, unit), unit])
    return table(["needed", "axis", "value", "in the model", "unit"], cells, left=(0, 1, 4))


def _rounded(value: float, sigma: float | None, unit: str) -> str:
    if sigma is not None:
        return with_uncertainty(value, sigma)
    return f"{value:.0f}" if unit else f"{value:.3f}"


def candidate_table(found: Sequence[Candidate]) -> str:
    """Return the assignments, best first, with what each needs and what would decide."""
    if not found:
        return "no assignment of the list comes near these values"
    cells = [
        [
            str(k),
            c.name,
            _joined([f"{g:.3f}" for g in c.g]),
            _needs(c),
            "yes" if c.in_range else "no",
        ]
        for k, c in enumerate(found, 1)
    ]
    parts = [table(["", "assignment", "its g", "needs", "usual"], cells, left=(1, 2, 3, 4))]
    parts.append("\n".join(wrapped(f"{k}: usual: {c.known}; to decide: {c.decide}") for k, c in enumerate(found, 1)))
    return "\n\n".join(parts)


def _needs(candidate: Candidate) -> str:
    parts = []
    for name, value, unit in candidate.needs:
        number = f"{value:.0f}" if unit else f"{value:.3f}"
        parts.append(f"{name.split(' (')[0]} = {number}{' ' + unit if unit else ''}")
    return ", ".join(dict.fromkeys(parts)) or "-"


def doublets_table(S: float, rhombicity: Sequence[float] | None = None, *, g: float = 2.0) -> str:
    """Return effective g of every Kramers doublet of S against E/D."""
    lam = np.linspace(0, 1 / 3, 11) if rhombicity is None else np.asarray(rhombicity, dtype=float)
    values = doublet_table(S, lam, g=g)
    headings = ["E/D"] + [f"{d + 1}: {axis}" for d in range(values.shape[1]) for axis in AXES]
    cells = [[f"{x:.4f}"] + [f"{v:.3f}" for v in row.ravel()] for x, row in zip(lam, values, strict=True)]
    return table(headings, cells, left=())


def levels_table(level: IonLevel) -> str:
    """Return the levels of the ground term with g and Landé's energies."""
    S_L = level.term[: len(level.term) - len(level.J)]
    cells = [
        [f"{S_L}{J}", "-" if g is None else f"{g:.5f}", "-" if energy is None else f"{energy:.0f}"]
        for J, g, energy in level.levels
    ]
    return table(["level", "g_J", "E / cm^-1"], cells)


def matches_table(matches: Sequence[DoubletMatch]) -> str:
    """Return which doublets come nearest to a measured effective g, at which E/D."""
    cells = [
        [
            str(match.doublet),
            with_uncertainty(match.rhombicity, match.uncertainty) if match.uncertainty else f"{match.rhombicity:.4f}",
            _joined([f"{g:.3f}" for g in match.g]),
            f"{100 * match.misfit:.1f}",
        ]
        for match in matches
    ]
    return table(["doublet", "E/D", "its g", "misfit / %"], cells, left=(2,))


def doublet_lines(found: Sequence[tuple[str, str, DoubletG]]) -> str:
    """Return g, axes and energy of doublets, each with its ion and field."""
    headings = ["ion", "E / cm^-1", "g", "from L", "from S", "axis x", "axis y", "axis z", "sign of det g"]
    cells, below = [], []
    for name, remark, doublet in found:
        sign = {1: "+", -1: "-", 0: "none"}[doublet.determinant_sign]
        for k in range(3):
            numbers = [f"{v[k]:.4f}" for v in (doublet.principal, doublet.orbital, doublet.spin)]
            axis = [f"{component:.3f}" for component in doublet.axes[:, k]]
            head = [name, f"{doublet.energy / MHZ_PER_WAVENUMBER:.1f}"] if k == 0 else ["", ""]
            cells.append([*head, *numbers, *axis, sign if k == 0 else ""])
        below.append(wrapped(f"{name}: crystal field: {remark}"))
    return "\n\n".join([table(headings, cells), "\n".join(below)])


def details_text(level: IonLevel, details: Mapping[str, Any]) -> str:
    """Return what `ion.details` found, as tables under the ion's name."""
    parts = [f"{level.ion} {level.term}"]
    if "terms" in details:
        counted = [term["term"] + (f" x{term['count']}" if term["count"] > 1 else "") for term in details["terms"]]
        parts.append(wrapped(f"terms ({sum(t['count'] for t in details['terms'])}): {', '.join(counted)}"))
    if "levels" in details:
        parts.append(f"by Landé's interval rule:\n{levels_table(level)}")
        part = details["weak_field_limit_mT"]
        if part is not None:
            parts.append(f"Landé's lines miss the exact levels by 1 % at {part / 1e3:.3g} T")
    if details.get("intermediate"):
        rows = [
            [
                x["label"],
                f"{x['energy_cm1']:.0f}",
                "-" if x["g"] is None else f"{x['g']:.4f}",
                f"{100 * x['share']:.0f}",
            ]
            for x in details["intermediate"]
        ]
        text = table(["level", "E / cm^-1", "g", "of that term / %"], rows)
        parts.append(f"whole configuration, intermediate coupling:\n{text}\n{wrapped(details['source'])}")
    return "\n\n".join(parts)
