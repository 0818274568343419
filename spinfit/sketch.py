"""Spectra of powders of high spins in a tenth of the time and less, to a few per cent, for broadened views.

`spinfit.spectrum.simulate` follows every resonance to the tolerance that is asked of it, which takes long
where levels come within h nu of each other and part again.  A search for a start asks for no more than where the
absorption lies.  Here levels are diagonalised at few directions and fields; between the fields level
differences are cubics, and between the directions every transition is spread in frequency over what its
direction's share of the sphere covers, by the levels' own derivatives (Hellmann-Feynman).  No resonance field is
solved for, so that transitions that come and go with direction need no care, and everything changes
smoothly with the parameters.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import fft, special
from scipy.interpolate import CubicSpline

from spinfit.hamiltonian import System, systems
from spinfit.levels import BLOCK_BYTES, Levels, occupation, zero_field_state
from spinfit.lineshape import Shape
from spinfit.moments import moments
from spinfit.resonance import ZERO_FIELD, level_pairs
from spinfit.species import Species
from spinfit.spectrum import Spectrum, simulate
from spinfit.sweep import Sample, Sweep
from spinfit.symmetry import symmetry_of

Array = NDArray[np.float64]

# Rings from pole to equator, for tolerances from `_FINE` on and below; around they have as many directions as keep
# the same distance.
_RINGS, _RINGS_FINE, _FINE = 11, 22, 5e-3
# Distance of the fields of diagonalisation, mT, and parts into which cubics between them are cut.
_NODE_SPACING = 20.0
_PARTS = 8
# Of the width that its neighbours leave to a direction.  A box has 1/sqrt(12); a third more fills the gaps between
# Gaussians, and leaves the least error at all numbers of rings.
_BOX = 1.35 / math.sqrt(12)
# Standard deviations beyond which nothing of a transition is felt.
_FELT = 3.5
# MHz below which nothing is resolved: a resonance's own width in frequency is larger.
_FINEST = 10.0
# Azimuths that the domain of a symmetry spans.
_SPAN = {"octant": 0.5 * math.pi, "quarter": math.pi, "half": 2 * math.pi}
# Matrices beyond this size are left to the engine.
LARGEST = 16


def sketchable(species: Species, sample: Sample) -> bool:
    """Whether a species can be sketched: a powder of electron spins with more than two levels, and no nuclei."""
    levels = math.prod(round(2 * spin.S + 1) for spin in species.spins)
    return sample.form == "powder" and not species.nuclei and 2 < levels <= LARGEST


def zero_field_span(species: Species) -> float:
    """Distance of the highest level from the lowest without field, MHz."""
    energy = np.linalg.eigvalsh(systems(species, perturb=True)[0].h0)
    return float(energy[-1] - energy[0])


def sketch(
    species: Sequence[Species],
    sweep: Sweep,
    sample: Sample,
    *,
    tolerance: float = 1e-2,
    fields: Array | None = None,
    angle: float | None = None,
) -> Spectrum:
    """Sketch the spectrum of species that are `sketchable`; that of others is simulated.

    Distributions of parameters (`Species.spread`, hidden hyperfine structure) are left out of a sketch.

    Parameters
    ----------
    species, sweep, sample, tolerance, fields, angle
        As for `spinfit.spectrum.simulate`; the tolerance is that of what is simulated.  Below 5e-3 sketches
        take four times the directions, which halves their error.
    """
    where = sweep.fields if fields is None else np.asarray(fields, dtype=float)
    parts = [
        _sketched(one, sweep, where, _RINGS if tolerance >= _FINE else _RINGS_FINE)
        if sketchable(one, sample)
        else simulate((one,), sweep, sample, tolerance=tolerance, fields=where, angle=angle).parts[0]
        for one in species
    ]
    signal = np.tensordot(np.array([one.amount for one in species]), parts, 1)
    return Spectrum(where, signal, np.array(parts))


def _sketched(one: Species, sweep: Sweep, where: Array, rings: int) -> Array:
    """Return one species' spectrum, shape (n,)."""
    shape = Shape.from_widths(
        one.width.gaussian, one.width.lorentzian, detect=sweep.detect, modulation=sweep.modulation, phase=sweep.phase
    )
    reach = shape.reach(3e-2)
    low, high = float(where.min()) - reach, float(where.max()) + reach
    top = max(high, -low)
    nodes = np.linspace(ZERO_FIELD, top, max(2, math.ceil(top / _NODE_SPACING) + 1))
    system = systems(one, perturb=True)[0]
    step = (nodes[1] - nodes[0]) / _PARTS
    absorbed = _absorption(system, nodes, sweep, one.populations, rings)
    # The spectrum is even in the field.
    below = min(math.ceil(max(-low, 0.0) / step), absorbed.size)
    absorbed = np.concatenate((absorbed[:below][::-1], absorbed))
    start = (0.5 - below) * step
    return _broadened(absorbed, start, step, shape, reach, where)


def _broadened(absorbed: Array, start: float, step: float, shape: Shape, reach: float, where: Array) -> Array:
    """Return the absorption in cells as a spectrum at the fields asked for."""
    count = fft.next_fast_len(absorbed.size + 2 * math.ceil(reach / step), real=True)
    k = 2 * np.pi * fft.rfftfreq(count, step)
    # What falls into a cell was averaged over it.
    cell = np.sinc(0.5 * k * step / np.pi)
    seen = fft.irfft(fft.rfft(absorbed, count) * shape.transform(k) / cell, count)[: absorbed.size] / step
    return CubicSpline(start + step * np.arange(absorbed.size), seen)(where)


def _absorption(system: System, nodes: Array, sweep: Sweep, populated: tuple[float, ...] | None, rings: int) -> Array:
    """Return the weight of all resonances in each cell of field, shape (cells,)."""
    directions, along, across, share = _directions(system, rings)
    got, turn = _levels(system, directions, along, across, nodes, sweep.microwave, populated)
    m, k, n = len(directions), nodes.size, len(system.h0)
    lower, upper = level_pairs(n)
    p = occupation(got, sweep.temperature)
    strength = got.intensity[:, lower, upper]
    strength = strength / n if p is None else strength * (p[:, lower] - p[:, upper])

    def of_pairs(values: Array) -> Array:
        return (values[:, upper] - values[:, lower]).reshape(m, k, -1)

    gap, slope = of_pairs(got.energy) - sweep.frequency, of_pairs(got.slope) * (nodes[1] - nodes[0])
    smear = np.sqrt(of_pairs(turn[0]) ** 2 + of_pairs(turn[1]) ** 2 + _FINEST**2)
    strength = strength.reshape(m, k, -1) * share[:, None, None]
    # Segments over which the difference comes near h nu at all, by the hull of its cubic.
    inner = np.stack((gap[:, :-1], gap[:, :-1] + slope[:, :-1] / 3, gap[:, 1:] - slope[:, 1:] / 3, gap[:, 1:]))
    margin = _FELT * np.maximum(smear[:, :-1], smear[:, 1:])
    near = (inner.min(axis=0) < margin) & (inner.max(axis=0) > -margin)
    which = np.nonzero(near)
    after = (which[0], which[1] + 1, which[2])
    ends = [(v[which], v[after]) for v in (gap, slope, smear, strength)]
    cells = _cells(*ends) * ((nodes[1] - nodes[0]) / _PARTS)
    out = np.zeros((k - 1, _PARTS))
    np.add.at(out, which[1], cells)
    return out.ravel()


def _cells(gap: tuple, slope: tuple, smear: tuple, strength: tuple) -> Array:
    """Return the mean weight in each part of some segments, shape (q, parts): strength x share of frequency / MHz."""
    t = np.linspace(0, 1, _PARTS + 1)
    cubic = np.stack(((1 + 2 * t) * (1 - t) ** 2, t**2 * (3 - 2 * t), t * (1 - t) ** 2, t**2 * (t - 1)))
    at = np.stack((*gap, *slope), axis=1) @ cubic
    middle = 0.5 * (t[1:] + t[:-1])
    line = np.stack((1 - middle, middle))
    wide = np.stack(smear, axis=1) @ line
    weight = np.stack(strength, axis=1) @ line
    left, right = at[:, :-1], at[:, 1:]
    # The density of a Gaussian in frequency, averaged over what the part runs through; a floor where it stands.
    run = right - left
    run = np.where(np.abs(run) < 1e-3 * wide, 1e-3 * wide, run)
    centre = 0.5 * (left + right)
    share = special.ndtr((centre + 0.5 * run) / wide) - special.ndtr((centre - 0.5 * run) / wide)
    return weight * share / run


def _directions(system: System, rings: int) -> tuple[Array, Array, Array, Array]:
    """Return directions, what half-cells along and across the meridian add, each (m, 3), and shares, (m,)."""
    symmetry = symmetry_of(system)
    axes = symmetry.axes
    if symmetry.kind == "octant":
        # Which axis stands for z does not matter, and must not change with the parameters.
        axes = axes[:, np.lexsort(np.round(-np.abs(axes), 9)[::-1])]
    span = _SPAN.get(symmetry.kind, 0.0)
    rings = 3 * rings if symmetry.kind in ("axial", "point") else rings
    apart = 0.5 * math.pi / rings
    rows = []
    for theta in (np.arange(rings) + 0.5) * apart:
        count = max(1, round(span * math.sin(theta) / apart))
        phi = (np.arange(count) + 0.5) * span / count
        rows.append(np.stack((np.full(count, theta), phi, np.full(count, math.sin(theta) / count)), axis=1))
    theta, phi, share = np.concatenate(rows).T
    own = np.stack((np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)), axis=1)
    along = np.stack((np.cos(theta) * np.cos(phi), np.cos(theta) * np.sin(phi), -np.sin(theta)), axis=1)
    across = np.stack((-np.sin(phi), np.cos(phi), np.zeros_like(phi)), axis=1)
    cell = apart * _BOX
    return own @ axes.T, cell * along @ axes.T, cell * across @ axes.T, share / share.sum()


def _levels(
    system: System,
    directions: Array,
    along: Array,
    across: Array,
    nodes: Array,
    microwave: str,
    populated: tuple[float, ...] | None,
) -> tuple[Levels, tuple[Array, Array]]:
    """Return levels at every (direction, node), direction by direction, and what they move by over half a cell."""
    n = len(system.h0)
    block = max(1, BLOCK_BYTES // (160 * n * n) // nodes.size)
    state = None if populated is None else zero_field_state(system, populated)
    parts = []
    for first in range(0, len(directions), block):
        part = slice(first, first + block)
        field = np.tile(nodes, len(directions[part]))
        where = [np.repeat(one[part], nodes.size, axis=0) for one in (directions, along, across)]
        h = np.tensordot(where[0] * field[:, None], system.zeeman, 1) + system.h0
        energy, vectors = np.linalg.eigh(h)
        slope, intensity = moments(vectors, system.zeeman, where[0], microwave)
        turned = [moments(vectors, system.zeeman, one, None)[0] * field[:, None] for one in where[1:]]
        held = np.zeros((0,)) if state is None else np.einsum("mai,mai->mi", vectors.conj(), state @ vectors).real
        parts.append((energy, slope, intensity, *turned, held))
    energy, slope, intensity, first, second, held = map(np.concatenate, zip(*parts, strict=True))
    got = Levels(energy, slope, intensity, np.empty((len(energy), 0, n)), population=held if held.size else None)
    return got, (first, second)
