"""Pairs of levels whose resonances come and go: folds with known answers, whole spectra by brute force."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
import reference
from scipy import integrate, interpolate

from spinfit import loop_sums, loops
from spinfit.branches import KnotData, Request
from spinfit.hamiltonian import systems
from spinfit.lineshape import FieldGrid, Shape
from spinfit.orientations import Rings
from spinfit.sheets import Grain, Histograms
from spinfit.species import Species, Spin, Spread, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sweep

SHAPE = Shape(1.0, 0.0, detect="absorption")


def fold_spectrum(kind: str, tolerance: float, fields: np.ndarray, gap, slope) -> np.ndarray:
    """Return the engine's sum for an analytic level difference of unit strength."""
    grid = FieldGrid.covering(0.0, 400.0, SHAPE.scale, SHAPE.reach(tolerance), tolerance, 40.0)
    request = Request(9500.0, 1e-3, 500.0, Grain.of(SHAPE, tolerance), SHAPE.scale, tolerance)
    rings = Rings(kind, 32, 32, 2)
    theta, phi = rings.angles()
    nodes = np.linspace(0.0, 500.0, 41)
    leaves = np.arange(0, 40, 2)[:, None] + np.arange(3)
    values = [f(nodes[:, None], theta, phi)[None] for f in (gap, slope)]
    one = np.array([0])
    data = KnotData(nodes, leaves, (one, one + 1), *values, np.ones_like(values[0]))
    histograms = Histograms(grid, SHAPE.scale)
    loops.add_pairs(histograms, rings, data, one, request)
    return grid.sample(grid.render(histograms.transform(), SHAPE), fields)


def gaussian_pair(fields: np.ndarray, centre: float, distance: np.ndarray) -> np.ndarray:
    """Return the sum of two unit Gaussians of width 1 mT at centre -/+ distance, shape (fields, n)."""
    below, above = (fields[:, None] - centre + s * distance for s in (1, -1))
    return (np.exp(-0.5 * below**2) + np.exp(-0.5 * above**2)) / math.sqrt(2 * math.pi)


@pytest.mark.parametrize(("kind", "tolerance"), [("axial", 1e-3), ("octant", 1e-3), ("octant", 1e-2), ("half", 1e-2)])
def test_a_fold_along_the_field(kind, tolerance):
    # gap = a (B - B0)^2 - depth (cos^2 theta - c): two resonances at B0 -/+ d where cos^2 theta > c,
    # each of weight 1/(2 a d); with u = d they integrate without a singularity: d cos(theta) = a d dd / (depth cos)
    a, centre, depth, c = 0.15, 210.0, 3000.0, 0.3
    fields = np.linspace(50.0, 380.0, 500)
    got = fold_spectrum(
        kind,
        tolerance,
        fields,
        lambda b, theta, phi: a * (b - centre) ** 2 - depth * (np.cos(theta) ** 2 - c),
        lambda b, theta, phi: 2 * a * (b - centre) + 0 * theta,
    )
    top = math.sqrt(depth * (1 - c) / a)
    nodes, weights = np.polynomial.legendre.leggauss(2000)
    d = 0.5 * top * (nodes + 1)
    cosine = np.sqrt(c + a * d * d / depth)
    want = gaussian_pair(fields, centre, d) @ (0.5 * top * weights / (2 * depth * cosine))
    assert np.abs(got - want).max() < tolerance * want.max()


def test_a_fold_over_two_angles():
    # gap = a (B - B0)^2 - depth (sin^2(theta) cos(2 phi) - c): resonances at B0 -/+ d only towards x
    a, centre, depth, c = 0.15, 210.0, 2500.0, 0.2
    fields = np.linspace(60.0, 360.0, 301)
    got = fold_spectrum(
        "octant",
        1e-3,
        fields,
        lambda b, theta, phi: a * (b - centre) ** 2 - depth * (np.sin(theta) ** 2 * np.cos(2 * phi) - c),
        lambda b, theta, phi: 2 * a * (b - centre) + 0 * theta,
    )

    def density(s: float) -> float:
        # share of the octant per step of s, s^2 = sin^2(theta) cos(2 phi): with x = cos(theta), q = 1 - x^2,
        # int over x of (2/pi) s / sqrt(q^2 - s^4); q - s^2 = (edge - x)(edge + x)
        edge = math.sqrt(1 - s * s)

        def smooth(x: float) -> float:
            return 2 / math.pi * s / math.sqrt((1 - x * x + s * s) * (edge + x))

        return integrate.quad(smooth, 0.0, edge, weight="alg", wvar=(0.0, -0.5))[0]

    # s^2 = c + a d^2 / depth, so ds = a d dd / (depth s), which cancels the weight 1/(2 a d)
    top = math.sqrt(depth * (1 - c) / a)
    nodes, weights = np.polynomial.legendre.leggauss(1000)
    d = 0.5 * top * (nodes + 1)
    s = np.sqrt(c + a * d * d / depth)
    shares = np.array([density(v) for v in s])
    want = gaussian_pair(fields, centre, d) @ (0.5 * top * weights * shares / (2 * depth * s))
    assert np.abs(got - want).max() < 1e-3 * want.max()


def spline(knots: np.ndarray, angles: np.ndarray) -> np.ndarray:
    """Return the cubic spline over 0 to pi/2, even about both ends, as a matrix."""
    unit = np.eye(len(knots))
    places = np.concatenate([-knots[8:0:-1], knots, np.pi - knots[-2:-10:-1]])
    rows = np.concatenate([unit[8:0:-1], unit, unit[-2:-10:-1]])
    return interpolate.make_interp_spline(places, rows, k=3)(angles)


def summed_in_frequency(system, fields: np.ndarray, width: float, mode: str) -> np.ndarray:
    """Return the derivative spectrum as a sum over a dense octant at every second mT, without any root.

    At each field levels are diagonalised on an even grid of 2.25 degrees and continued by splines to one
    of 0.4 degrees; in place of delta(gap) stands a Gaussian about as wide as neighbours
    differ in direction and in field,
    times (15 - 10 u^2 + u^4)/8, which makes its second and fourth moments vanish.
    """
    knots = np.linspace(0.0, 0.5 * np.pi, 41)
    angles = 0.5 * np.pi * (np.arange(225) + 0.5) / 225
    weights = np.sin(angles) / np.sin(angles).sum() / len(angles)
    theta, phi = (a.ravel() for a in np.meshgrid(knots, knots, indexing="ij"))
    directions = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=1)
    lower, upper = np.triu_indices(len(system.h0), 1)
    along, to_mesh = np.tensordot(directions, system.zeeman, 1), spline(knots, angles)
    step, spectrum = 2.0, np.zeros_like(fields)
    for place in step * (np.arange(round((fields[-1] + 5 * width) / step)) + 0.5):
        energies, vectors = np.linalg.eigh(system.h0 + place * along)
        strength = reference.intensities(system, directions, vectors, mode, None)[:, lower, upper] / len(system.h0)
        gap = energies[:, upper] - energies[:, lower] - 9500.0
        slopes = np.einsum("aik,aij,ajk->ak", vectors.conj(), along, vectors, optimize=True).real
        slope = slopes[:, upper] - slopes[:, lower]
        near = np.flatnonzero((gap.min(axis=0) < 500.0) & (gap.max(axis=0) > -500.0))
        f, s, g = (to_mesh @ v[:, near].T.reshape(-1, 41, 41) @ to_mesh.T for v in (gap, strength, slope))
        apart = np.hypot(np.gradient(f, axis=1), np.gradient(f, axis=2))
        narrow = np.sqrt((0.6 * apart) ** 2 + (0.7 * step * g) ** 2 + 1.0)
        u = np.clip(f / narrow, -8.0, 8.0)
        bell = np.exp(-0.5 * u * u) * (1.875 - 1.25 * u**2 + 0.125 * u**4) / (narrow * math.sqrt(2 * math.pi))
        height = step * float(((s * bell).sum(axis=2) @ weights).sum())
        for sign in (1, -1):  # the spectrum is even in B
            spectrum += height * reference.gaussian(fields - sign * place, width, 1)
    return spectrum


@pytest.mark.parametrize("mode", ["perpendicular", "parallel"])
def test_a_looping_spectrum_against_a_sum_in_frequency(mode):
    # S = 3/2 with a zero-field splitting above h nu: between its middle levels none to two resonances
    spin = Spin(S=1.5, g=(2.0,), D=5500.0, E=900.0)
    species = Species(spins=(spin,), width=Width(gaussian=30.0))
    sweep = Sweep(9500.0, (60.0, 360.0), 151, microwave=mode)
    spectrum = simulate(species, sweep, tolerance=1e-2)
    (system,) = systems(species)
    want = summed_in_frequency(system, sweep.fields, 30.0, mode)
    assert spectrum.report["species"]["systems"][0]["looping"] > 0
    assert np.abs(spectrum.signal - want).max() < 1e-2 * np.abs(want).max()


def summed_with_widths(system, operator: np.ndarray, hidden: float, fields: np.ndarray, width: float) -> np.ndarray:
    """Return the derivative spectrum of an axial system whose transitions have widths in frequency, without any root.

    In place of delta(gap) at each field stands a Gaussian of the transition's own width, whose FWHM
    squared is that of the shift by `operator` plus `hidden` squared, convolved with a kernel that
    hides the mesh and has no second and fourth moment.
    """
    theta = 0.5 * math.pi * (np.arange(800) + 0.5) / 800
    weights = np.sin(theta) / np.sin(theta).sum()
    along = np.tensordot(np.stack([np.sin(theta), 0 * theta, np.cos(theta)], axis=1), system.zeeman, 1)
    across = np.tensordot(np.stack([np.cos(theta), 0 * theta, -np.sin(theta)], axis=1), system.zeeman, 1)
    lower, upper = np.triu_indices(len(system.h0), 1)
    step, spectrum = width / 6, np.zeros_like(fields)
    for place in step * (np.arange(round((fields[-1] + 5 * width) / step)) + 0.5):
        energies, vectors = np.linalg.eigh(system.h0 + place * along)
        gap = energies[:, upper] - energies[:, lower] - 9500.0
        if np.abs(gap).min() > 2000.0:
            continue
        amplitude = [
            vectors.conj().transpose(0, 2, 1) @ z @ vectors for z in (along, across, system.zeeman[1], operator)
        ]
        change = [np.diagonal(a, axis1=1, axis2=2).real for a in amplitude]
        slope, turn, shift = (change[k][:, upper] - change[k][:, lower] for k in (0, 1, 3))
        strength = 0.5 * sum(np.abs(amplitude[k][:, lower, upper]) ** 2 for k in (1, 2)) / len(system.h0)
        apart = turn * place * (theta[1] - theta[0])
        narrow = apart**2 + (step * slope) ** 2 + 0.01
        whole = narrow + (shift**2 + hidden**2) / (8 * math.log(2))
        u = np.clip(gap / np.sqrt(whole), -9.0, 9.0)
        height = step * float((strength * loop_sums.kernel(u, narrow / whole) / np.sqrt(whole)).sum(axis=1) @ weights)
        for sign in (1, -1):  # the spectrum is even in B
            spectrum += height * reference.gaussian(fields - sign * place, width, 1)
    return spectrum


@pytest.mark.parametrize(("spread", "hidden"), [(500.0, 0.0), (0.0, 60.0)])
def test_looping_pairs_have_their_own_widths(spread, hidden, monkeypatch):
    monkeypatch.setattr("spinfit.spectrum.ENOUGH", np.inf)  # widths of first order, good enough or not
    spin = Spin(S=1.5, g=(2.0,), D=6000.0)
    species = Species(
        spins=(spin,),
        width=Width(gaussian=6.0, hidden_hyperfine=(hidden,)),
        spread=Spread(D=spread),
    )
    sweep = Sweep(9500.0, (100.0, 500.0), 201)
    got = simulate(species, sweep, tolerance=1e-3)
    assert got.report["species"]["systems"][0]["looping"] > 0
    (system,), (moved,) = (systems(one) for one in (species, replace(species, spins=(replace(spin, D=6001.0),))))
    want = summed_with_widths(system, spread * (moved.h0 - system.h0), hidden, sweep.fields, 6.0)
    assert np.abs(got.signal - want).max() < 2e-3 * np.abs(want).max()
    # and the widths matter
    alike = simulate(Species(spins=(spin,), width=Width(gaussian=6.0)), sweep, tolerance=1e-3).signal
    assert np.abs(alike - want).max() > 2e-2 * np.abs(want).max()
