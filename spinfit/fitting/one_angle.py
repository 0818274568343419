"""What one orientation of a crystal can and cannot tell."""

from __future__ import annotations

import re

import numpy as np

from spinfit.fitting.assignment import calculated
from spinfit.fitting.data import Lines, Trace
from spinfit.fitting.outcome import Note
from spinfit.fitting.residuals import Point, Problem, View
from spinfit.fitting.signals import true_field

# Lines weaker than this part of the strongest are not counted as seen.
_SEEN = 0.03
_MOVES_LINES = re.compile(
    r"(.*\.)?(g(_x|_y|_z|_perp|_par)?|D|E|rhombicity|.*tilt_\w+|angle_zero|field_offset|field_scale)"
)


def one_angle_notes(problem: Problem, view: View, point: Point) -> list[Note]:
    """Say of a crystal that was measured at one angle only how many numbers its lines can determine."""
    if point.sample.form != "crystal" or len({(t.angle, t.axis, t.start, t.frequency) for t in point.traces}) > 1:
        return []
    moving = [name for name in problem.names if _MOVES_LINES.fullmatch(name)]
    if not moving:
        return []
    trace, seen = point.traces[0], view.seen[0]
    count = _lines_seen(point, trace, true_field(trace, seen.field))
    lines = f"{count} line" if count == 1 else f"{count} lines"
    text = (
        f"The crystal was measured at one angle, with {lines} of the model in the fitted "
        f"range: that many fields determine at most {count} of the numbers that move lines. Varied are "
        f"{_listed(moving)}; what is held fixed (such as components of g and the plane of rotation) "
        "enters their values without uncertainty. Several angles in one job tell them apart."
    )
    notes = [Note("one_angle", text)]
    if len(moving) > count:
        more = (
            f"{len(moving)} varied parameters move lines and only {count} are seen: part of what the fit knows "
            "comes from intensities and widths, which depend on microwave_axis and the line shape. Hold some fixed."
        )
        notes.append(Note("few_lines", more))
    return notes


def _listed(names: list[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]


def _lines_seen(point: Point, trace: Trace, fields: np.ndarray) -> int:
    """Lines of the model at or between the fitted fields that are strong enough to be seen."""
    table = Lines(
        name=trace.name,
        field=fields[-1:],
        frequency=trace.frequency,
        angle=np.array([trace.angle]),
        temperature=trace.temperature,
        microwave=trace.microwave,
        axis=trace.axis,
        start=trace.start,
    )
    found = calculated(point.species, point.sample, table, highest=float(fields[-1]))
    found = found.only(found.weight > _SEEN * found.weight.max(initial=0.0))
    gap = 3 * float(np.median(np.diff(fields)))
    near = np.abs(fields[np.clip(np.searchsorted(fields, found.field), 0, fields.size - 1)] - found.field) < gap
    return int(np.sum(near & (found.field >= fields[0])))
