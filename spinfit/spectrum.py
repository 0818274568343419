"""simulate(): species, sweep and sample to a spectrum."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.alignment import aligned
from spinfit.branches import FWHM_PER_SIGMA, Request
from spinfit.broadening import Broadening, broadening
from spinfit.crystal import crystal, remarks
from spinfit.errors import InputError
from spinfit.hamiltonian import systems
from spinfit.lineshape import FieldGrid, Shape
from spinfit.powder import powder
from spinfit.sheets import SMEAR_MOST, SMEAR_REACH, Grain
from spinfit.solution import solution
from spinfit.species import Species
from spinfit.sweep import Sample, Sweep

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Spectrum:
    """A simulated field sweep.

    Attributes
    ----------
    fields : ndarray, shape (n,)
        mT.
    signal : ndarray, shape (n,), or (k, n) for a crystal at k > 1 angles
        Sum over species of amount x part.
    parts : ndarray, shape (species, n), or (species, k, n)
        Each species' spectrum for an amount of 1.
    report : mapping
        What was used: symmetry, directions, diagonalisations, estimated error, per species.
    warnings : tuple of (code, text)
    """

    fields: Array
    signal: Array
    parts: Array
    report: Mapping[str, object] = field(default_factory=dict)
    warnings: tuple[tuple[str, str], ...] = ()


def simulate(
    species: Sequence[Species] | Species,
    sweep: Sweep,
    sample: Sample | None = None,
    *,
    tolerance: float = 1e-3,
    fields: Array | None = None,
    angle: float | None = None,
) -> Spectrum:
    """Compute a spectrum to a promised accuracy.

    Parameters
    ----------
    species : Species or sequence of Species
    sweep : Sweep
        Conditions; `sweep.fields` are the fields unless `fields` is given.
    sample : Sample, optional
        A powder by default.
    tolerance : float
        Largest error in the window relative to the largest value there.
    fields : ndarray, shape (n,), optional
        Any fields, mT, in any order; the window then reaches from their smallest to their largest.
    angle : float, optional
        rad; crystal and aligned samples, in place of the sample's own (a crystal's may be several).

    Returns
    -------
    Spectrum

    Raises
    ------
    InputError
        A species without a width; an unknown point group.
    """
    several = (species,) if isinstance(species, Species) else tuple(species)
    sample = sample or Sample()
    where = sweep.fields if fields is None else np.asarray(fields, dtype=float)
    window = (float(where.min()), float(where.max()))
    angles = sample.angles if sample.form == "crystal" else (sample.angle,)
    angles = angles if angle is None else (angle,)
    parts, report, warnings = [], {}, {}
    for one in several:
        part, report[one.name], said = _part(one, sweep, sample, tolerance, where, window, angles)
        parts.append(part if len(part) > 1 else part[0])
        warnings |= dict.fromkeys(said)
    amounts = np.array([one.amount for one in several])
    return Spectrum(where, np.tensordot(amounts, parts, 1), np.array(parts), report, tuple(warnings))


def _part(
    one: Species,
    sweep: Sweep,
    sample: Sample,
    tolerance: float,
    fields: Array,
    window: tuple[float, float],
    angles: tuple[float, ...],
) -> tuple[Array, dict[str, object], tuple[tuple[str, str], ...]]:
    """Return spectra, shape (angles, n), what was used, and warnings."""
    if sample.form == "solution":
        signal, used, warnings = solution(one, sweep, fields, tolerance=tolerance)
        return signal[None], used, warnings
    shape = Shape.from_widths(
        one.width.gaussian,
        one.width.lorentzian,
        detect=sweep.detect,
        modulation=sweep.modulation,
        phase=sweep.phase,
    )
    if shape.scale <= 0:
        raise InputError("has no width", 'give width.gaussian or width.lorentzian, e.g. "0.5 mT"', place=one.name)
    reach = shape.reach(tolerance)
    beyond = SMEAR_REACH * SMEAR_MOST * shape.scale if sample.form == "powder" else 0.0
    beyond = max(beyond, WIDEST * _own_width(one))
    grid = FieldGrid.covering(*window, shape.scale, reach, tolerance, beyond)
    low, high = window[0] - reach - beyond, window[1] + reach + beyond
    if low < 0:
        high = max(high, -low)
        low = 0.0
    request = Request(
        sweep.frequency,
        max(low, 1e-3),
        high,
        Grain.of(shape, tolerance),
        shape.scale,
        tolerance,
        sweep.microwave,
        sweep.temperature,
    )
    widths = broadening(one) or (None,) * len(systems(one))
    if sample.form != "powder":
        return _oriented(one, request, widths, grid, shape, sample, angles, fields)
    total = 0.0
    reports = []
    for system, own in zip(systems(one), widths, strict=True):
        histograms, report = powder(system, replace(request, broadening=own), grid)
        reports.append({"label": system.label, **vars(report)})
        total = total + system.weight * histograms.transform()
    return grid.sample(grid.render(total, shape), fields)[None], {"systems": reports}, ()


def _oriented(
    one: Species,
    request: Request,
    widths: tuple[Broadening | None, ...],
    grid: FieldGrid,
    shape: Shape,
    sample: Sample,
    angles: tuple[float, ...],
    fields: Array,
) -> tuple[Array, dict[str, object], tuple[tuple[str, str], ...]]:
    """Return spectra of a crystal or an aligned sample, shape (angles, n), what was used, and warnings."""
    totals = [0.0] * len(angles)
    reports, warnings = [], {}
    if sample.form == "crystal":
        warnings = dict.fromkeys(remarks(sample, angles, request.microwave))
    for system, own in zip(systems(one), widths, strict=True):
        asked = replace(request, broadening=own)
        if sample.form == "crystal":
            histograms, report = crystal(system, asked, grid, sample, angles)
        else:
            histogram, report = aligned(system, asked, grid, shape, sample, angles[0])
            histograms = [histogram]
            warnings |= dict.fromkeys(("directions", text) for text in report.get("notes", ()))
        totals = [t + system.weight * h.transform() for t, h in zip(totals, histograms, strict=True)]
        reports.append(report)
    spectra = [grid.sample(grid.render(total, shape), fields) for total in totals]
    return np.array(spectra), {"systems": reports}, tuple(warnings)


WIDEST = 4.0
"""Standard deviations beyond which a broadened line is not felt."""


def _own_width(one: Species) -> float:
    """Return a rough standard deviation, mT, of the widest line that spreads make."""
    spread = one.spread
    frequency = max(one.width.hidden_hyperfine) + max(spread.A) + one.spins[0].S * 2 * (spread.D + spread.E)
    return frequency / (28.0 * FWHM_PER_SIGMA) + 0.2 * max(spread.g) * 340.0


def with_angle(sample: Sample, angle: float) -> Sample:
    """Return the sample at one angle, rad."""
    return replace(sample, angles=(angle,))
