"""`report.html`: one self-contained page on one fit, for a person; every text from outside is escaped."""

from __future__ import annotations

import base64
import json
from collections.abc import Mapping, Sequence
from html import escape

from spinfit.fitting.outcome import Outcome, Value
from spinfit.fitting.resample import Bootstrap, Profile
from spinfit.report.effective import effective_rows
from spinfit.report.numbers import short, small, with_uncertainty
from spinfit.report.outcome_json import clean
from spinfit.report.tables import STRONG, remark, strong_correlations
from spinfit.report.tried import (
    BOOTSTRAP_HEADINGS,
    PROFILE_HEADINGS,
    SOURCES,
    bootstrap_rows,
    budget_rows,
    profile_rows,
)

# A policy that lets the page load nothing at all: what it needs is in it.
_POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'"

_CSS = """
:root { --ink: #20242b; --quiet: #666d78; --line: #d9dce2; --mark: #b23a16; --paper: #fff; --tint: #f6f7f9 }
* { box-sizing: border-box }
body { margin: 0; background: var(--tint); color: var(--ink); font: 15px/1.5 "DejaVu Sans", "Segoe UI", sans-serif }
main { max-width: 60rem; margin: 0 auto; padding: 2rem 1.5rem 4rem; background: var(--paper) }
h1 { font-size: 1.5rem; margin: 0 0 .25rem } h2 { font-size: 1.05rem; margin: 2.2rem 0 .6rem }
p { margin: .4rem 0 } .quiet { color: var(--quiet) }
.state { font-weight: 600 } .bad { color: var(--mark) }
figure { margin: 1.2rem 0 0 } img { width: 100%; height: auto; display: block }
img.column { max-width: 36rem }
.wide { overflow-x: auto }
table { border-collapse: collapse; font-variant-numeric: tabular-nums }
th, td { padding: .25rem .9rem .25rem 0; text-align: right; border-bottom: 1px solid var(--line); white-space: nowrap }
th { font-weight: 600; color: var(--quiet); font-size: .85rem }
th:first-child, td:first-child, .l { text-align: left }
td.value { font-weight: 600 }
ul.warnings { padding-left: 1.2rem } ul.warnings li { margin: .3rem 0 }
pre { background: var(--tint); border: 1px solid var(--line); padding: .8rem; overflow-x: auto; font-size: .82rem }
details summary { cursor: pointer; color: var(--quiet) }
@media print { body, main { background: none } main { max-width: none; padding: 0 } }
"""


def _table(
    headings: Sequence[str], rows: Sequence[Sequence[str]], *, left: Sequence[int] = (0,), bold: int = -1
) -> str:
    """Return a table; every cell is escaped."""

    def cell(tag: str, k: int, text: str) -> str:
        kind = " ".join(["l"] * (k in left) + ["value"] * (k == bold and tag == "td"))
        named = f' class="{kind}"' if kind else ""
        return f"<{tag}{named}>{escape(str(text))}</{tag}>"

    lines = [
        "<tr>" + "".join(cell(tag, k, text) for k, text in enumerate(row)) + "</tr>"
        for tag, row in [("th", headings), *(("td", row) for row in rows)]
    ]
    return f'<div class="wide"><table>{lines[0]}\n' + "\n".join(lines[1:]) + "</table></div>"


def _section(title: str, body: str) -> str:
    return f"<section><h2>{escape(title)}</h2>\n{body}\n</section>" if body else ""


def _parameter_rows(values: Mapping[str, Value]) -> list[list[str]]:
    return [
        [
            name,
            with_uncertainty(v.value, v.uncertainty),
            v.unit,
            small(v.uncertainty_noise),
            small(v.uncertainty_field),
            short(v.start),
            remark(v),
        ]
        for name, v in values.items()
    ]


def _parameters(outcome: Outcome) -> str:
    headings = ["parameter", "value", "unit", "noise part", "field part", "start", ""]
    varied = {name: v for name, v in outcome.parameters.items() if v.varied or v.tied or v.derived}
    fixed = {name: v for name, v in outcome.parameters.items() if name not in varied}
    text = _table(headings, _parameter_rows(varied), left=(0, 2, 6), bold=1) if varied else "<p>Nothing was varied.</p>"
    text += (
        '<p class="quiet">One standard uncertainty in parentheses, in units of the last digit: the noise part from the '
        "trace, the field part from the stated uncertainties of the field axis and of the frequency, in quadrature.</p>"
    )
    if fixed:
        rows = [[name, short(v.value), v.unit] for name, v in fixed.items()]
        inner = _table(["parameter", "value", "unit"], rows, left=(0, 2))
        text += f"<details><summary>{len(fixed)} held fixed</summary>{inner}</details>"
    return text


def _effective(outcome: Outcome) -> str:
    rows = [[r["name"], with_uncertainty(r["value"], r["uncertainty"]), r["unit"]] for r in effective_rows(outcome)]
    return _table(["quantity", "value", "unit"], rows, left=(0, 2)) if rows else ""


def _fractions(outcome: Outcome) -> str:
    if len(outcome.fractions) < 2:
        return ""
    rows = [[name, with_uncertainty(v.value, v.uncertainty)] for name, v in outcome.fractions.items()]
    return _table(["species", "fraction of spins"], rows)


def _budget(outcome: Outcome) -> str:
    rows = budget_rows(outcome)
    if not rows:
        return ""
    note = (
        '<p class="quiet">Standard uncertainties that add in quadrature. Field axis and frequency move all values '
        "together: differences between components of g are better known than the components.</p>"
    )
    return _table(["uncertainty of", "unit", "in all", *SOURCES], rows, left=(0, 1)) + note


def _tried(outcome: Outcome, profiles: Sequence[Profile], picture: bytes, resampled: Bootstrap | None) -> str:
    """Return profiles of chi-squared and the bootstrap; empty when neither was asked for."""
    text = ""
    if profiles:
        encoded = base64.b64encode(picture).decode()
        alt = "rise of chi-squared against " + ", ".join(one.name for one in profiles)
        text += _table(PROFILE_HEADINGS, profile_rows(profiles), left=(0, 1))
        text += f'<figure><img alt="{escape(alt)}" src="data:image/png;base64,{encoded}"></figure>'
    if resampled is not None and len(resampled.values) > 1:
        text += _table(BOOTSTRAP_HEADINGS, bootstrap_rows(resampled, outcome), left=(0, 1))
        text += f'<p class="quiet">{len(resampled.values)} refits; {resampled.failed} more did not converge.</p>'
    return text


def _correlations(outcome: Outcome) -> str:
    rows = [[one, two, f"{value:+.3f}"] for one, two, value in strong_correlations(outcome)]
    if not rows:
        return ""
    note = f'<p class="quiet">Beyond {STRONG:g}: the data hardly tell these values apart.</p>'
    return _table(["parameter", "with", "correlation"], rows, left=(0, 1)) + note


def _quality(outcome: Outcome) -> str:
    q = outcome.quality
    rows = [
        ["points", str(q.points)],
        ["free parameters (scales and baselines included)", str(q.free_parameters)],
        ["reduced chi-square", short(q.chi2_reduced, 4)],
        ["noise of the first trace", small(q.noise)],
        ["AICc", short(q.aicc, 6)],
        ["BIC", short(q.bic, 6)],
    ]
    return _table(["", "value"], rows)


def _state(outcome: Outcome) -> str:
    q = outcome.quality
    if not q.finished:
        return '<p class="state bad">Stopped before the end: these are the best values so far.</p>'
    if not q.converged:
        return f'<p class="state bad">Not converged: {escape(outcome.message)}</p>'
    return '<p class="state">Converged.</p>'


def _provenance(outcome: Outcome) -> str:
    rest = {key: value for key, value in outcome.provenance.items() if key != "job"}
    text = json.dumps(clean({**rest, "engine": outcome.engine}), indent=2, ensure_ascii=False)
    return f"<details><summary>input hashes, versions, accuracy used</summary><pre>{escape(text)}</pre></details>"


def report_text(
    outcome: Outcome,
    picture: bytes,
    *,
    profiles: Sequence[Profile] = (),
    profile_picture: bytes = b"",
    resampled: Bootstrap | None = None,
) -> str:
    """Return the page.

    Parameters
    ----------
    outcome : Outcome
    picture : bytes
        PNG of the fit, put into the page.
    profiles, profile_picture
        Profiles of chi-squared and their PNG.
    resampled : Bootstrap, optional
    """
    names = ", ".join([curves.trace for curves in outcome.curves] + [table.name for table in outcome.positions])
    alt = f"measured and fitted signal with residual against magnetic field: {names}"
    if outcome.positions:
        alt = f"measured and fitted fields of lines with residual against angle: {names}"
    warnings = "".join(f"<li>{escape(note.text)}</li>" for note in outcome.warnings)
    wide = "" if len(outcome.curves) > 1 else ' class="column"'
    encoded = base64.b64encode(picture).decode()
    job = str(outcome.provenance.get("job", ""))
    body = [
        f"<h1>{escape(outcome.name)}</h1>",
        f'<p class="quiet">{escape(_conditions(outcome))}</p>',
        _state(outcome),
        f'<figure><img{wide} alt="{escape(alt)}" src="data:image/png;base64,{encoded}"></figure>',
        _section("Warnings", f'<ul class="warnings">{warnings}</ul>' if warnings else ""),
        _section("Parameters", _parameters(outcome)),
        _section("In other units", _effective(outcome)),
        _section("Fractions of spins", _fractions(outcome)),
        _section("What the uncertainties are made of", _budget(outcome)),
        _section("Tried beyond the fit", _tried(outcome, profiles, profile_picture, resampled)),
        _section("What the data cannot tell apart", _correlations(outcome)),
        _section("Quality", _quality(outcome)),
        _section("Job", f"<pre>{escape(job)}</pre>" if job else ""),
        _section("Provenance", _provenance(outcome)),
    ]
    return (
        '<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{_POLICY}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{escape(outcome.name)}: fit</title>\n<style>{_CSS}</style></head>\n<body><main>\n"
        + "\n".join(part for part in body if part)
        + "\n</main></body></html>\n"
    )


def _conditions(outcome: Outcome) -> str:
    shown = [
        f"{c.trace}: {c.frequency / 1e3:.6g} GHz, {c.field[0]:.5g} to {c.field[-1]:.5g} mT" for c in outcome.curves[:6]
    ]
    shown += [f"{t.name}: {t.frequency / 1e3:.6g} GHz, {len(t.measured)} lines" for t in outcome.positions]
    more = f" and {len(outcome.curves) - 6} more traces" if len(outcome.curves) > 6 else ""
    return "; ".join(shown) + more
