"""The transitions of a species and the sweep's edges, as text."""

from __future__ import annotations

import math
from typing import Any

from spinfit.report.layout import table
from spinfit.transitions import Survey, Transition

MOST = 30
"""Transitions listed; all of them are in the JSON document."""


def survey_text(name: str, survey: Survey, window: tuple[float, float], *, signs: bool = False) -> str:
    """Return the table of a species' transitions and a line on what lies outside the sweep.

    Parameters
    ----------
    window : (float, float)
        The sweep's first and last field, mT.
    signs : bool
        Whether intensities have signs, as those of polarised states do.
    """
    if not survey.transitions:
        return f"{name}: no transition up to {survey.searched:.6g} mT"
    several = any(row.system for row in survey.transitions)
    headings = ["levels", "share", *(["net"] if signs else []), "in sweep", "mT, lowest", "at", "mT, highest", "at"]
    headings = (["system"] if several else []) + headings + ["at once"]
    rows = [_cells(row, several, signs) for row in survey.transitions[:MOST]]
    text = f"{name}: transitions by share of the intensity\n{table(headings, rows)}"
    left = len(survey.transitions) - MOST
    if left > 0:
        text += f"\n... and {left} weaker ones"
    if survey.split:
        text += f"\nweak nuclei ({', '.join(survey.split)}) split each of these further"
    return f"{text}\n{_edges(survey, window)}"


def survey_record(survey: Survey) -> dict[str, Any]:
    """Return a survey for a JSON document, in degrees and mT."""
    rows = []
    for row in survey.transitions:
        record = {"system": row.system, "lower": row.lower, "upper": row.upper, "share": row.share, "net": row.net}
        record |= {"inside": row.inside, "resonances": row.resonances}
        for end, field, at in (("lowest", row.low, row.at_low), ("highest", row.high, row.at_high)):
            theta, phi = (round(math.degrees(angle), 9) for angle in at)
            record[end] = {"field_mT": field, "theta_deg": theta, "phi_deg": phi}
        rows.append(record)
    return {
        "transitions": rows,
        "share_below": survey.below,
        "share_above": survey.above,
        "searched_to_mT": survey.searched,
        "directions": survey.directions,
        "split_by": list(survey.split),
    }


def _cells(row: Transition, several: bool, signs: bool) -> list[str]:
    cells = [row.system] if several else []
    cells += [f"{row.lower}-{row.upper}", _percent(row.share)]
    cells += [_percent(row.net)] if signs else []
    cells += [_percent(row.inside), f"{row.low:.2f}", _direction(row.at_low)]
    return [*cells, f"{row.high:.2f}", _direction(row.at_high), str(row.resonances)]


def _edges(survey: Survey, window: tuple[float, float]) -> str:
    first, last = window
    return (
        f"outside the sweep {first:.6g} to {last:.6g} mT: {_percent(survey.outside)} of the intensity "
        f"({_percent(survey.below)} below, {_percent(survey.above)} above); sought up to {survey.searched:.6g} mT "
        f"at {survey.directions} directions"
    )


def _percent(share: float) -> str:
    return f"{100 * share:.2f} %"


def _direction(angles: tuple[float, float]) -> str:
    theta, phi = (math.degrees(angle) for angle in angles)
    return f"{theta:.0f}, {phi:.0f} deg"
