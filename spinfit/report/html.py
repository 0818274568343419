"""`report.html`: one self-contained page on one fit, for a person; every text from outside is escaped."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from html import escape

import numpy as np

from spinfit.fitting.data import Job
from spinfit.fitting.outcome import Outcome, Value
from spinfit.fitting.resample import Bootstrap, Profile
from spinfit.fitting.sampling import Posterior
from spinfit.report.beside import SETTING_HEADINGS, ion_rows, setting_rows
from spinfit.report.effective import effective_rows
from spinfit.report.ion_tables import AXES, g_values, percent, quench_remarks
from spinfit.report.numbers import short, small, with_uncertainty
from spinfit.report.outcome_json import clean
from spinfit.report.page import Raw, document, listed, paragraph, section, table
from spinfit.report.svg_figures import (
    fit_drawing,
    g_drawing,
    heat_map,
    histogram_drawing,
    legend,
    pair_drawing,
    positions_drawing,
    profile_drawing,
    swatch,
)
from spinfit.report.tables import STRONG, remark, strong_correlations
from spinfit.report.tried import (
    BOOTSTRAP_HEADINGS,
    POSTERIOR_HEADINGS,
    PROFILE_HEADINGS,
    SOURCES,
    bootstrap_rows,
    budget_cells,
    posterior_rows,
    posterior_sentence,
    profile_rows,
    sources_of,
)

MOST_TRACES = 12
"""Traces that are drawn; a page with more would be slow and nobody would look at them."""
MOST_CORRELATED = 24
"""Parameters in the map of correlations."""
MOST_HISTOGRAMS = 24
MOST_PAIRS = 4

# Warnings that tell what the data leave open, by their codes; all others are about the measurement or the fit.
LEFT_OPEN = (
    "at_limit", "undetermined", "single_signs", "sign_of_D", "sign_of_A", "sign_of_D_and_A", "other_setting",
    "one_angle", "few_lines", "crystal_field_rank", "lines_beyond_sweep",
)  # fmt: skip


def _share_bar(parts: Mapping[str, float], sources: Sequence[str]) -> Raw:
    """Return how much of the variance each source has, as a bar; the numbers stand beside it."""
    squares = [max(parts.get(source, 0.0), 0.0) ** 2 for source in sources]
    whole = sum(squares)
    if not (np.isfinite(whole) and whole > 0):
        return Raw("")
    at, words = 0.0, []
    for n, square in enumerate(squares):
        width = 130 * square / whole
        words.append(f'<rect class="share-{n}" x="{at:.1f}" y="0" width="{width:.1f}" height="10"/>')
        at += width
    return Raw(f'<svg class="shares" viewBox="0 0 130 10" aria-hidden="true">{"".join(words)}</svg>')


def _parameters(outcome: Outcome) -> str:
    """Return the table of what was found, each uncertainty with what it is made of."""
    sources = sources_of(outcome)
    headings = ["parameter", "value", "unit", *sources, "shares of variance", "start", ""]
    found = {name: v for name, v in outcome.parameters.items() if v.varied or v.tied or v.derived}
    rows = []
    for name, v in found.items():
        parts = outcome.budget.get(name, {})
        cells = budget_cells(parts, v.uncertainty, sources)
        if not parts and v.uncertainty_noise is not None:  # a derived value: axis, frequency and angles come as one
            whole = "both" if len(sources) == len(SOURCES) - 1 else "all"
            cells = [small(v.uncertainty_noise), "", f"{small(v.uncertainty_field)} ({whole})", *cells[3:]]
        rows.append(
            [
                name,
                with_uncertainty(v.value, v.uncertainty),
                v.unit,
                *cells,
                _share_bar(parts, sources),
                short(v.start),
                remark(v),
            ]
        )
    if not rows:
        return paragraph("Nothing was varied.")
    key = "".join(
        f'<span class="key"><svg class="swatch" viewBox="0 0 30 10" aria-hidden="true">'
        f'<rect class="share-{n}" width="30" height="10"/></svg>{escape(source)}</span>'
        for n, source in enumerate(sources)
    )
    return (
        table(headings, rows, left=(0, 2, len(headings) - 3, len(headings) - 1), bold=1)
        + f'<p class="legend">{key}</p>'
        + paragraph(
            "In parentheses one standard uncertainty, in units of the last digit. Its sources add in quadrature: the "
            "noise of the trace; what the correlation of neighbouring points and a systematic residual add to it; and "
            "the stated uncertainties of field axis, frequency and angles. The first two of these move all values "
            "together: differences between components of g are better known than the components.",
            "quiet",
        )
    )


def _held(outcome: Outcome) -> str:
    fixed = {name: v for name, v in outcome.parameters.items() if not (v.varied or v.tied or v.derived)}
    if not fixed:
        return ""
    inner = table(["parameter", "value", "unit"], [[n, short(v.value), v.unit] for n, v in fixed.items()], left=(0, 2))
    return f"<details><summary>{len(fixed)} held fixed</summary>{inner}</details>"


def _effective(outcome: Outcome) -> str:
    rows = [[r["name"], with_uncertainty(r["value"], r["uncertainty"]), r["unit"]] for r in effective_rows(outcome)]
    return table(["quantity", "value", "unit"], rows, left=(0, 2)) if rows else ""


def _fractions(fractions: Mapping[str, Value]) -> str:
    if len(fractions) < 2:
        return ""
    return table(
        ["species", "fraction of spins"], [[n, with_uncertainty(v.value, v.uncertainty)] for n, v in fractions.items()]
    )


def _ions(job: Job | None, outcome: Outcome) -> str:
    """Return free-ion, spin-only, crystal-field and measured g of each species that names its ion."""
    found = () if job is None else ion_rows(job, outcome)
    if not found:
        return ""
    headings = ["species", "ion", "level", "free ion g_J", "spin only", "axis", "crystal field", "measured"]
    headings += ["orbital moment left / %: field", "measured"]
    rows: list[list[str]] = []
    remarks: list[str] = []
    for name, row in found:
        head = [name, row.level.ion, row.level.term, short(row.level.g_J, 5), f"{row.spin_only:.4f}"]
        field = g_values(row.g_crystal)
        given = g_values(*((None,) if row.measured is None else (row.measured.values, row.measured.uncertainties)))
        left = [percent(value) for value in row.fraction or (None,) * 3]
        pairs = zip(row.fraction_measured or (None,) * 3, row.fraction_uncertainty or (None,) * 3, strict=True)
        known = [percent(*pair) for pair in pairs]
        groups: dict[tuple[str, ...], list[str]] = {}
        for k, axis in enumerate(AXES):
            groups.setdefault((field[k], given[k], left[k], known[k]), []).append(axis)
        for n, (cells, axes) in enumerate(groups.items()):
            rows.append([*(head if n == 0 else [""] * 5), ", ".join(axes) if len(groups) > 1 else "", *cells])
        remarks += quench_remarks(row)
        if row.measured is None and row.kind:
            own = (v for parameter, v in outcome.parameters.items() if parameter.startswith(f"{name}.g"))
            if any(v.derived for v in own):
                remarks.append(f"{name}: its g follows from the crystal field that was fitted")
            else:
                remarks.append(f"{name}: its g was not fitted freely, so that there is no measured one to compare")
    note = paragraph(
        "The free ion's g is Landé's; the crystal field is the typical one that is named above, or the job's own. The "
        "part of the orbital moment that is left is (g - g_e) relative to the free ion's <L>/<S>; 0 is quenched.",
        "quiet",
    )
    picture = f"<figure>{g_drawing(found)}</figure>"
    return picture + table(headings, rows, left=(0, 1, 2, 5)) + listed(list(dict.fromkeys(remarks))) + note


def _left_open(job: Job | None, outcome: Outcome) -> str:
    """Return what the data cannot tell: signs, limits, combinations, equal settings, correlations."""
    said = [note.text for note in outcome.warnings if note.code in LEFT_OPEN]
    text = listed(said)
    for name, rows in () if job is None else setting_rows(job, outcome):
        text += f"<h3>{escape(name)}: six namings of the axes, one and the same tensor</h3>"
        text += table(SETTING_HEADINGS, rows, left=(0, 3, 5, 6))
    return text + _correlations(outcome)


def _correlations(outcome: Outcome) -> str:
    names, matrix = outcome.correlation_names, np.asarray(outcome.correlation_matrix, dtype=float)
    if len(names) < 2 or matrix.shape != (len(names), len(names)):
        return ""
    text = "<h3>Correlations</h3>"
    strong = strong_correlations(outcome)
    pairs = [f"{one} and {two}: {value:+.3f}" for one, two, value in strong]
    if pairs:
        text += paragraph(f"Beyond {STRONG:g}, where the data know a combination of the two better than either:")
        text += listed(pairs)
    else:
        text += paragraph(f"None is beyond {STRONG:g}.")
    shown = np.arange(len(names))
    if len(names) > MOST_CORRELATED:
        largest = np.nanmax(np.abs(matrix - np.eye(len(names))), axis=1)
        shown = np.sort(np.argsort(-largest, kind="stable")[:MOST_CORRELATED])
        text += paragraph(
            f"The map shows the {MOST_CORRELATED} of {len(names)} parameters with the strongest.", "quiet"
        )
    return text + f'<div class="wide">{heat_map([names[k] for k in shown], matrix[np.ix_(shown, shown)])}</div>'


def _posterior(outcome: Outcome, posterior: Posterior | None) -> str:
    """Return the quantiles of a sampled posterior; empty when none was asked for."""
    if posterior is None:
        return ""
    rows = table(POSTERIOR_HEADINGS, posterior_rows(posterior, outcome), left=(0, 1))
    text = "<h3>Posterior</h3>" + rows + paragraph(posterior_sentence(posterior) + ".", "quiet")
    return text + _histograms(outcome, posterior, posterior.quantiles[:, [1, 3]], "draws") + _pairs(posterior)


def _labels(found: Bootstrap | Posterior) -> list[str]:
    pairs = zip(found.names, found.units, strict=True)
    return [f"{name} / {unit}" if unit else name for name, unit in pairs]


def _histograms(outcome: Outcome, found: Bootstrap | Posterior, ends: np.ndarray, counted: str) -> str:
    """Return a histogram of each parameter, beside what the fit expects of the noise."""
    figures = []
    for k, label in enumerate(_labels(found)[:MOST_HISTOGRAMS]):
        own = outcome.parameters[found.names[k]]
        expected = (own.value, own.uncertainty_noise)
        drawn = histogram_drawing(label, found.values[:, k], ends[k], expected, counted)
        figures.append(f"<figure>{drawn}</figure>")
    keys = [swatch("part-0", counted), swatch("fitted", "noise part of the fit"), swatch("guide dashed", "68 %")]
    return legend(keys) + f'<div class="several">{"".join(figures)}</div>'


def _pairs(posterior: Posterior) -> str:
    """Return draws of the pairs of parameters that hang together most; banana shapes show here only."""
    count = len(posterior.names)
    if count < 2 or len(posterior.values) < 3:
        return ""
    with np.errstate(invalid="ignore", divide="ignore"):  # a parameter that never moved
        matrix = np.nan_to_num(np.corrcoef(posterior.values.T))
    one, two = np.triu_indices(count, 1)
    order = np.argsort(-np.abs(matrix[one, two]), kind="stable")[:MOST_PAIRS]
    labels = _labels(posterior)
    figures = [
        f"<figure>{pair_drawing((labels[one[n]], labels[two[n]]), posterior.values[:, [one[n], two[n]]])}</figure>"
        for n in order
    ]
    said = paragraph("Draws of the pairs that hang together most:", "quiet")
    return said + f'<div class="several">{"".join(figures)}</div>'


def _tried(outcome: Outcome, profiles: Sequence[Profile], resampled: Bootstrap | None) -> str:
    """Return profiles of chi-squared and the bootstrap; empty when neither was asked for."""
    text = ""
    if profiles:
        text += "<h3>Profiles of chi-squared</h3>"
        text += table(PROFILE_HEADINGS, profile_rows(profiles), left=(0, 1))
        text += f'<div class="several">{"".join(f"<figure>{profile_drawing(one)}</figure>" for one in profiles)}</div>'
    if resampled is None:
        return text
    text += "<h3>Bootstrap</h3>"
    if len(resampled.values) < 2:
        return text + paragraph(f"None of {resampled.failed} refits converged.", "bad")
    text += table(BOOTSTRAP_HEADINGS, bootstrap_rows(resampled, outcome), left=(0, 1))
    text += paragraph(f"{len(resampled.values)} refits; {resampled.failed} more did not converge.", "quiet")
    return text + _histograms(outcome, resampled, resampled.interval(), "refits")


def _quality(outcome: Outcome) -> str:
    q = outcome.quality
    rows = [
        ["points", str(q.points)],
        ["free parameters (scales and baselines included)", str(q.free_parameters)],
        ["reduced chi-square (1 for a right model and right noise)", short(q.chi2_reduced, 4)],
        ["noise of the first trace", small(q.noise)],
        ["AICc", short(q.aicc, 6)],
        ["BIC", short(q.bic, 6)],
    ]
    return table(["", "value"], rows)


def _state(outcome: Outcome) -> str:
    q = outcome.quality
    if not q.finished:
        return paragraph("Stopped before the end: these are the best values so far.", "state bad")
    if not q.converged:
        return paragraph(f"Not converged: {outcome.message}", "state bad")
    return paragraph(f"Converged; reduced chi-square {short(q.chi2_reduced, 4)}.", "state")


def _warnings(outcome: Outcome) -> str:
    if not outcome.warnings:
        return ""
    count = len(outcome.warnings)
    head = "A warning" if count == 1 else f"{count} warnings"
    return f'<section class="warnings"><h2>{head}</h2>{listed([note.text for note in outcome.warnings])}</section>'


def _pictures(outcome: Outcome) -> str:
    """Return a figure for each trace and each table of lines."""
    several = len(outcome.curves) + len(outcome.positions) > 1
    figures = []
    for name, drawn in [
        *((curves.trace, fit_drawing(curves)) for curves in outcome.curves[:MOST_TRACES]),
        *((one.name, positions_drawing(one)) for one in outcome.positions),
    ]:
        head = f"<h3>{escape(name)}</h3>" if several else ""
        figures.append(f'<figure class="fit">{head}{drawn}</figure>')
    more = len(outcome.curves) - MOST_TRACES
    if more > 0:
        figures.append(paragraph(f"{more} more traces are in curves.csv and outcome.h5.", "quiet"))
    return "\n".join(figures)


def _provenance(outcome: Outcome) -> str:
    rest = {key: value for key, value in outcome.provenance.items() if key != "job"}
    text = json.dumps(clean({**rest, "engine": outcome.engine}), indent=2, ensure_ascii=False)
    return f"<details><summary>input hashes, versions, accuracy used</summary><pre>{escape(text)}</pre></details>"


def report_text(
    outcome: Outcome,
    *,
    job: Job | None = None,
    profiles: Sequence[Profile] = (),
    resampled: Bootstrap | None = None,
    posterior: Posterior | None = None,
) -> str:
    """Return the page.

    Parameters
    ----------
    outcome : Outcome
    job : Job, optional
        What was fitted; with it the page compares ions that the job names with the free ion, and lists
        equivalent settings of zero-field tensors.
    profiles, resampled, posterior
        What was tried beyond the fit.
    """
    text = str(outcome.provenance.get("job", ""))
    body = [
        f"<h1>{escape(outcome.name)}</h1>",
        paragraph(_conditions(outcome), "quiet"),
        _state(outcome),
        _warnings(outcome),
        _pictures(outcome),
        section("Parameters", _parameters(outcome) + _held(outcome)),
        section("In other units", _effective(outcome)),
        section("Fractions of spins", _fractions(outcome.fractions)),
        section("Free ion, crystal field, measurement", _ions(job, outcome)),
        section("What the data cannot tell", _left_open(job, outcome)),
        section("Tried beyond the fit", _tried(outcome, profiles, resampled) + _posterior(outcome, posterior)),
        section("Quality", _quality(outcome)),
        section("Job", f"<pre>{escape(text)}</pre>" if text else ""),
        section("Provenance", _provenance(outcome)),
    ]
    return document(f"{outcome.name}: fit", body, scripts=("drawing.js", "page.js"))


def _conditions(outcome: Outcome) -> str:
    shown = [
        f"{c.trace}: {c.frequency / 1e3:.6g} GHz, {c.field[0]:.5g} to {c.field[-1]:.5g} mT" for c in outcome.curves[:6]
    ]
    shown += [f"{t.name}: {t.frequency / 1e3:.6g} GHz, {len(t.measured)} lines" for t in outcome.positions]
    more = f" and {len(outcome.curves) - 6} more traces" if len(outcome.curves) > 6 else ""
    return "; ".join(shown) + more
