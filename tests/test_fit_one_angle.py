"""What a fit of a crystal at one angle says of itself: as many numbers as lines, and no more."""

import numpy as np
import pytest

from spinfit.fitting.data import Job, Trace
from spinfit.fitting.driver import fit
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

FIELDS = np.linspace(300.0, 345.0, 500)
SAMPLE = Sample(form="crystal", axis=(0.0, 1.0, 0.0), start=(0.0, 0.0, 1.0))


def outcome_at(angles: list[float], vary: tuple[str, ...]):
    """Fit an S = 1/2 crystal, which has one line at every angle."""
    sweep = Sweep(9400.0, (FIELDS[0], FIELDS[-1]), FIELDS.size)
    species = Species("c", (Spin(g=(2.02, 2.15)),), width=Width(gaussian=1.0))
    rng = np.random.default_rng(11)
    traces = []
    for n, angle in enumerate(angles):
        signal = simulate(species, sweep, SAMPLE, fields=FIELDS, angle=angle).signal
        signal = signal + 0.01 * np.ptp(signal) * rng.normal(size=signal.size)
        traces.append(Trace(f"t{n}", FIELDS, signal, np.ones(FIELDS.size, dtype=bool), 9400.0, angle=angle))
    start = Species("c", (Spin(g=(2.021, 2.149)),), width=Width(gaussian=1.1))
    return fit(Job((start,), SAMPLE, tuple(traces), vary, start="near"))


@pytest.mark.parametrize(
    ("vary", "few"),
    [
        (("c.g", "c.width.gaussian"), True),
        (("c.g_par", "c.width.gaussian"), False),
        (("c.width.gaussian",), None),
    ],
)
def test_more_numbers_than_lines_are_named(vary, few):
    notes = {note.code: note.text for note in outcome_at([np.radians(30)], vary).warnings}
    assert ("few_lines" in notes) == bool(few)
    assert ("one_angle" in notes) == (few is not None)
    if few:
        assert notes["few_lines"].startswith("2 varied parameters move lines and only 1 are seen")
        assert "with 1 line of the model" in notes["one_angle"]


def test_two_angles_need_no_such_note():
    outcome = outcome_at([np.radians(10), np.radians(70)], ("c.g", "c.width.gaussian"))
    assert not {"one_angle", "few_lines"} & {note.code for note in outcome.warnings}
    for name, true in (("c.g_perp", 2.02), ("c.g_par", 2.15)):
        value = outcome.parameters[name]
        assert abs(value.value - true) < 3.5 * value.uncertainty
