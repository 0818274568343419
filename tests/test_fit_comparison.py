"""Comparing models of the same trace."""

import math
from dataclasses import replace

import fit_jobs as jobs
import numpy as np
import pytest
from scipy.stats import f as f_distribution
from stub_engine import simulate

from spinfit.errors import InputError
from spinfit.fitting.comparison import compare
from spinfit.fitting.driver import fit


def outcomes(seed: int, true_g: tuple[float, ...], snr: float = 60.0):
    """The same trace as one axial and as one rhombic species."""
    signal = jobs.clean_signal(jobs.species(g=true_g))
    signal = signal + jobs.level(signal, snr) * np.random.default_rng(seed).normal(size=signal.size)
    found = []
    for name, g in (("axial", (2.0105, 2.06)), ("rhombic", (2.0105, 2.0108, 2.06))):
        job = replace(jobs.job(jobs.trace(signal), model=(jobs.species(g=g),)), name=name)
        found.append(fit(job, simulate=simulate))
    return found


def test_rhombic_trace_needs_the_rhombic_model():
    axial, rhombic = outcomes(61, (2.010, 2.012, 2.06))
    result = compare([axial, rhombic])
    assert result.models[0].name == "rhombic"
    assert "decisively" in result.verdict
    (test,) = result.tests
    assert (test.smaller, test.larger) == ("axial", "rhombic")
    # The definition, with sums of squares from the curves and scipy.stats.
    squares = [float(np.sum(o.curves[0].residual ** 2)) for o in (axial, rhombic)]
    n, k = rhombic.quality.points, rhombic.quality.free_parameters
    F = (squares[0] - squares[1]) / (squares[1] / (n - k))
    assert test.F == pytest.approx(F, rel=1e-6)
    assert test.probability == pytest.approx(f_distribution.sf(F, 1, n - k), rel=1e-6)


def test_axial_trace_does_not():
    rejected = 0
    for seed in range(12):
        result = compare(outcomes(70 + seed, (2.010, 2.010, 2.06)))
        rejected += result.tests[0].probability < 0.01
        assert sum(m.weight for m in result.models) == pytest.approx(1)
        if result.models[0].name == "rhombic" and "cannot be told" in result.verdict:
            assert 'The simpler one, "axial"' in result.verdict
    assert rejected <= 2


def test_weights_are_akaike_weights():
    axial, rhombic = outcomes(62, (2.010, 2.0104, 2.06), snr=15)
    result = compare([axial, rhombic])
    difference = axial.quality.aicc - rhombic.quality.aicc
    weight = {m.name: m.weight for m in result.models}
    assert weight["rhombic"] == pytest.approx(1 / (1 + math.exp(-difference / 2)))


def test_other_data_are_refused():
    axial, rhombic = outcomes(63, (2.010, 2.012, 2.06))
    other, _ = outcomes(64, (2.010, 2.012, 2.06))
    with pytest.raises(InputError, match="other points"):
        compare([axial, replace(other, name="other")])
    with pytest.raises(InputError, match="one model only"):
        compare([axial])
    with pytest.raises(InputError, match='two jobs are called "axial"'):
        compare([axial, axial])
