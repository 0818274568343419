"""Tables as plain text: columns under headings, aligned, no wider than need be, ASCII only."""

from __future__ import annotations

import numpy as np

from spinfit.fitting.outcome import Outcome, Value
from spinfit.report.effective import effective_rows
from spinfit.report.layout import aligned, table, wrapped
from spinfit.report.numbers import short, small, with_uncertainty

# Correlations beyond this are printed: the two parameters can hardly be told apart.
STRONG = 0.9


def remark(value: Value) -> str:
    """Return what is special about a parameter: at limit, tied, derived, fixed."""
    if value.at_limit:
        return "at limit"
    if value.tied:
        return "tied"
    if value.derived:
        return "derived"
    return "" if value.varied else "fixed"


def parameter_table(outcome: Outcome) -> str:
    """Return the table of what was varied, tied or derived: value, unit, noise and field part, start."""
    shown = {name: value for name, value in outcome.parameters.items() if value.varied or value.tied or value.derived}
    values = aligned([with_uncertainty(value.value, value.uncertainty) for value in shown.values()])
    rows = [
        [
            name,
            text,
            value.unit,
            small(value.uncertainty_noise),
            small(value.uncertainty_field),
            short(value.start),
            remark(value),
        ]
        for text, (name, value) in zip(values, shown.items(), strict=True)
    ]
    if not rows:
        return "no parameter was varied"
    return table(["parameter", "value", "unit", "noise part", "field part", "start", ""], rows, left=(0, 2, 6))


# Corrections and amounts that stand at their neutral value are not worth a word.
_NEUTRAL = {"amount": 1.0, "field_scale": 1.0}


def fixed_line(outcome: Outcome) -> str:
    """Return what was held fixed at a value that matters, in one wrapped line; may be empty."""
    fixed = [
        f"{name} = {short(value.value)} {value.unit}".rstrip()
        for name, value in outcome.parameters.items()
        if not (value.varied or value.tied or value.derived)
        and not (outcome.positions and not outcome.curves and ".width." in name)
        and value.value != _NEUTRAL.get(name.rpartition(".")[2], 0.0)
    ]
    return wrapped("held fixed: " + ", ".join(fixed)) if fixed else ""


def effective_table(outcome: Outcome) -> str:
    """Return the same quantities in other units that people use; may be empty."""
    found = effective_rows(outcome)
    values = aligned([with_uncertainty(row["value"], row["uncertainty"]) for row in found])
    rows = [[str(row["name"]), text, str(row["unit"])] for row, text in zip(found, values, strict=True)]
    return table(["in other units", "value", "unit"], rows, left=(0, 2)) if rows else ""


def axes_table(outcome: Outcome) -> str:
    """Return the directions of tensors' axes as direction cosines; may be empty."""
    if not outcome.axes:
        return ""
    rows = []
    for axis in outcome.axes:
        shown = [with_uncertainty(v, u) for v, u in zip(axis.cosines, axis.uncertainty, strict=True)]
        rows.append([f"{axis.tensor} {axis.label}", *shown])
    return table([f"axis, cosines to {outcome.axes[0].frame}", "x", "y", "z"], rows, left=(0, 1, 2, 3))


def fraction_table(outcome: Outcome) -> str:
    """Return the fractions of spins, when there is more than one species."""
    if len(outcome.fractions) < 2:
        return ""
    rows = [[name, with_uncertainty(v.value, v.uncertainty)] for name, v in outcome.fractions.items()]
    return table(["species", "fraction of spins"], rows)


def strong_correlations(outcome: Outcome) -> list[tuple[str, str, float]]:
    """Return the pairs whose correlation passes `STRONG`, strongest first."""
    matrix = np.asarray(outcome.correlation_matrix, dtype=float)
    if matrix.size == 0:
        return []
    names = outcome.correlation_names
    pairs = [
        (names[i], names[j], float(matrix[i, j]))
        for i in range(len(names))
        for j in range(i + 1, len(names))
        if abs(matrix[i, j]) > STRONG
    ]
    return sorted(pairs, key=lambda pair: -abs(pair[2]))


def correlation_lines(outcome: Outcome) -> str:
    """Return the strong correlations as text; may be empty."""
    pairs = strong_correlations(outcome)
    if not pairs:
        return ""
    text = "\n".join(f"  {one} and {two}: {value:+.3f}" for one, two, value in pairs)
    return f"correlations above {STRONG:g} (these values move together):\n{text}"


def quality_lines(outcome: Outcome) -> str:
    """Return the quality of the fit in one or two lines."""
    q = outcome.quality
    state = "converged" if q.converged else "NOT converged"
    if not q.finished:
        state = "STOPPED before the end: the best so far"
    lines = [
        f"{state}; {q.points} points, {q.free_parameters} free parameters, reduced chi-square "
        f"{short(q.chi2_reduced, 4)}, noise {small(q.noise)}, AICc {short(q.aicc, 6)}, BIC {short(q.bic, 6)}"
    ]
    if outcome.message and not (q.converged and q.finished):
        lines.append(wrapped(f"the optimiser says: {outcome.message}"))
    return "\n".join(lines)


def warning_lines(outcome: Outcome) -> str:
    """Return the warnings as sentences, one a paragraph; may be empty."""
    return "\n".join(wrapped(f"warning: {note.text}") for note in outcome.warnings)


def outcome_lines(outcome: Outcome) -> str:
    """Return everything a person wants to see after a fit, as plain text."""
    traces = ", ".join(f"{c.trace} ({c.frequency / 1e3:.6g} GHz)" for c in outcome.curves[:6])
    traces += f" and {len(outcome.curves) - 6} more" if len(outcome.curves) > 6 else ""
    if outcome.positions:
        traces = ", ".join(
            f"{t.name} ({len(t.measured)} lines at {t.frequency / 1e3:.6g} GHz)" for t in outcome.positions
        )
    blocks = [
        f"{outcome.name}: {traces}" if traces else outcome.name,
        parameter_table(outcome),
        effective_table(outcome),
        axes_table(outcome),
        fraction_table(outcome),
        fixed_line(outcome),
        quality_lines(outcome),
        correlation_lines(outcome),
        warning_lines(outcome),
    ]
    return "\n\n".join(block for block in blocks if block)
