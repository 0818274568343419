"""What was tried beyond the fit: profiles, bootstrap, posterior, and the budget of uncertainties."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from spinfit.fitting.comparison import Comparison
from spinfit.fitting.outcome import Outcome
from spinfit.fitting.resample import Bootstrap, Profile
from spinfit.fitting.sampling import LEVELS, Posterior
from spinfit.report.layout import table, wrapped
from spinfit.report.numbers import short, small

SOURCES = ("noise", "correlation and misfit", "field axis", "frequency", "angle")
# An entry this small a part of the whole says nothing.
_NEGLIGIBLE = 1e-2


def sources_of(outcome: Outcome) -> tuple[str, ...]:
    """Return the sources of uncertainty that an outcome knows of: angles only where one has an uncertainty."""
    angles = any("angle" in parts for parts in outcome.budget.values())
    return SOURCES if angles else SOURCES[:-1]


def budget_cells(parts: Mapping[str, float], whole: float | None, sources: Sequence[str]) -> list[str]:
    """Return what each source gives to an uncertainty; those that are next to nothing stay empty."""
    least = _NEGLIGIBLE * abs(whole or 0.0)
    return [small(parts[s]) if parts.get(s, 0.0) > least else "" for s in sources]


def budget_rows(outcome: Outcome) -> list[list[str]]:
    """Return one row a parameter: name, unit, total, then each source; those that are next to nothing empty."""
    rows, sources = [], sources_of(outcome)
    for name, parts in outcome.budget.items():
        value = outcome.parameters[name]
        rows.append([name, value.unit, small(value.uncertainty), *budget_cells(parts, value.uncertainty, sources)])
    return rows


def budget_table(outcome: Outcome) -> str:
    """Return what each uncertainty is made of, as text; empty when it is noise alone."""
    if not any(parts.get(s, 0.0) > 0 for parts in outcome.budget.values() for s in SOURCES[1:]):
        return ""
    return table(["uncertainty of", "unit", "in all", *sources_of(outcome)], budget_rows(outcome), left=(0, 1))


def profile_record(one: Profile) -> dict[str, Any]:
    """Return a profile as plain types."""
    return {
        "unit": one.unit,
        "values": one.values,
        "rise": one.rise,
        "interval_68": list(one.intervals[0]),
        "interval_95": list(one.intervals[1]),
    }


def bootstrap_record(one: Bootstrap) -> dict[str, Any]:
    """Return a bootstrap as plain types."""
    spans = one.interval() if len(one.values) else [(None, None)] * len(one.names)
    return {
        "resamples": len(one.values),
        "failed": one.failed,
        "parameters": {
            name: {"unit": unit, "uncertainty": sigma, "interval_68": list(span)}
            for name, unit, sigma, span in zip(one.names, one.units, one.uncertainty, spans, strict=True)
        },
    }


def profile_rows(profiles: Sequence[Profile]) -> list[list[str]]:
    return [[one.name, one.unit, *(_span(pair) for pair in one.intervals)] for one in profiles]


def _span(pair: tuple[float | None, float | None]) -> str:
    low, high = ("beyond" if end is None else short(end, 7) for end in pair)
    return f"{low} to {high}"


PROFILE_HEADINGS = ("profile of", "unit", "68.3 %", "95.4 %")


def profile_table(profiles: Sequence[Profile]) -> str:
    return table(list(PROFILE_HEADINGS), profile_rows(profiles), left=(0, 1)) if profiles else ""


BOOTSTRAP_HEADINGS = ("bootstrap of", "unit", "standard deviation", "noise part of the fit", "68.3 %")


def bootstrap_rows(one: Bootstrap, outcome: Outcome) -> list[list[str]]:
    spans = one.interval()
    return [
        [name, unit, small(float(sigma)), small(outcome.parameters[name].uncertainty_noise), _span(tuple(span))]
        for name, unit, sigma, span in zip(one.names, one.units, one.uncertainty, spans, strict=True)
    ]


def bootstrap_table(one: Bootstrap | None, outcome: Outcome) -> str:
    """Return the refits' spread beside what the fit said, as text."""
    if one is None:
        return ""
    if len(one.values) < 2:
        return f"bootstrap: none of {one.failed} refits converged"
    text = table(list(BOOTSTRAP_HEADINGS), bootstrap_rows(one, outcome), left=(0, 1))
    failed = f"; {one.failed} more did not converge" if one.failed else ""
    return f"{text}\n{len(one.values)} refits to resampled residuals{failed}"


def posterior_record(one: Posterior) -> dict[str, Any]:
    """Return a posterior as plain types: its quantiles, and what the chain is worth."""
    return {
        "steps": one.steps,
        "walkers": one.walkers,
        "discarded": one.discarded,
        "acceptance": one.acceptance,
        "priors": "flat within limits",
        "noise": "marginalised",
        "tempered": one.tempered,
        "parameters": {
            name: {
                "unit": unit,
                "mean": float(values.mean()),
                "standard_deviation": float(sigma),
                "quantiles": {f"{level:g}": float(value) for level, value in zip(LEVELS, quantiles, strict=True)},
                "autocorrelation_time": float(time),
            }
            for name, unit, values, sigma, quantiles, time in zip(
                one.names, one.units, one.values.T, one.deviation, one.quantiles, one.autocorrelation, strict=True
            )
        },
    }


POSTERIOR_HEADINGS = (
    "posterior of",
    "unit",
    "median",
    "16 to 84 %",
    "2.5 to 97.5 %",
    "deviation",
    "of the fit",
    "memory",
)


def posterior_rows(one: Posterior, outcome: Outcome) -> list[list[str]]:
    return [
        [
            name,
            unit,
            short(float(q[2])),
            _span((float(q[1]), float(q[3]))),
            _span((float(q[0]), float(q[4]))),
            small(float(sigma)),
            small(outcome.parameters[name].uncertainty_noise),
            f"{time:.0f}",
        ]
        for name, unit, q, sigma, time in zip(
            one.names, one.units, one.quantiles, one.deviation, one.autocorrelation, strict=True
        )
    ]


def posterior_sentence(one: Posterior) -> str:
    """Return how the posterior was drawn, in one sentence."""
    return (
        f"{one.walkers} walkers of {one.steps} steps, the first {one.discarded} left out, "
        f"{100 * one.acceptance:.0f} % of the moves taken; memory is the autocorrelation time in steps; "
        "flat priors within the limits, noise level marginalised; field axis and frequency are not in it"
    )


def posterior_table(one: Posterior | None, outcome: Outcome) -> str:
    """Return quantiles beside what the fit said, as text."""
    if one is None:
        return ""
    text = table(list(POSTERIOR_HEADINGS), posterior_rows(one, outcome), left=(0, 1))
    return f"{text}\n{wrapped(posterior_sentence(one))}"


def comparison_lines(found: Comparison) -> str:
    """Return the models by AICc, the tests of nested pairs and the verdict, as text."""
    rows = [
        [
            one.name,
            str(one.free_parameters),
            short(one.chi2_reduced, 4),
            f"{one.aicc_above_best:.1f}",
            f"{one.bic_above_best:.1f}",
            f"{one.weight:.3f}",
        ]
        for one in found.models
    ]
    blocks = [
        table(["model", "free", "reduced chi-square", "AICc above best", "BIC above best", "weight"], rows, left=(0,))
    ]
    if found.tests:
        rows = [
            [t.smaller, t.larger, f"{t.F:.4g}", f"{t.freedom[0]}, {t.freedom[1]}", f"{t.probability:.2g}"]
            for t in found.tests
        ]
        blocks.append(table(["model", "within", "F", "freedom", "by noise alone"], rows, left=(0, 1)))
    blocks.append(wrapped(found.verdict))
    return "\n\n".join(blocks)
