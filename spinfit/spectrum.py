"""simulate(): species, sweep and sample to a spectrum."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.alignment import aligned
from spinfit.branches import FWHM_PER_SIGMA, Request
from spinfit.broadening import Broadening, broadening
from spinfit.crystal import crystal, remarks
from spinfit.errors import InputError
from spinfit.exact import Lines
from spinfit.hamiltonian import System, systems
from spinfit.levels import shares_unevenly
from spinfit.lineshape import FieldGrid, Shape
from spinfit.markup import html_table
from spinfit.powder import Average, powder
from spinfit.sheets import SMEAR_MOST, SMEAR_REACH, Grain
from spinfit.solution import solution
from spinfit.species import Species
from spinfit.sweep import Sample, Sweep
from spinfit.transitions import remarks as outside_remarks
from spinfit.transitions import transitions
from spinfit.treatment import Treatment, decided

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
    kept: tuple[Kept, ...] = ()

    def _repr_html_(self) -> str:
        """Show ten fields with the signal and each species, for a notebook."""
        signals = [("signal", self.signal)]
        signals += [(name, part) for name, part in zip(self.report, self.parts, strict=False)]
        one = [(name, np.atleast_2d(column)[0]) for name, column in signals]
        at = np.unique(np.linspace(0, len(self.fields) - 1, 10).round().astype(int))
        rows = [[f"{self.fields[k]:.6g}", *(f"{column[k]:.4g}" for _, column in one)] for k in at]
        several = f", the first of {len(self.signal)} angles" if self.signal.ndim > 1 else ""
        caption = f"{len(self.fields)} points, {self.fields.min():.6g} to {self.fields.max():.6g} mT{several}"
        said = "".join(f"; warning: {text}" for _, text in self.warnings)
        return html_table(["field / mT", *(name for name, _ in one)], rows, caption=caption + said)


@dataclass(frozen=True, eq=False)
class Kept:
    """How the spectrum of one species was made: what its derivatives start from (`spinfit.derivatives`).

    Attributes
    ----------
    species : Species
        With the treatment of every nucleus decided.
    sweep, sample : Sweep, Sample
    angles : tuple of float
        rad.
    request : Request
    shape : Shape
    grid : FieldGrid
    fields : ndarray, shape (n,)
        mT.
    systems : tuple of System
    averages : list
        Of each system: `spinfit.powder.Average`, or a crystal's `spinfit.exact.Lines`; empty for other samples.
    totals : list of ndarray
        Transform of the resonances, weighted over the systems, one for each angle.
    """

    species: Species
    sweep: Sweep
    sample: Sample
    angles: tuple[float, ...]
    request: Request
    shape: Shape
    grid: FieldGrid
    fields: Array
    systems: tuple[System, ...]
    averages: list[Average | Lines]
    totals: list[NDArray[np.complex128]]

    @property
    def nbytes(self) -> int:
        """About how much memory it holds."""
        held = sum(total.nbytes for total in self.totals)
        for one in self.averages:
            if isinstance(one, Average):
                held += one.histograms.plain.nbytes + one.histograms.widened.nbytes
                held += 0 if isinstance(one.knots, Lines) else 5 * one.knots.data.gap.nbytes
        return held


def simulate(
    species: Sequence[Species] | Species,
    sweep: Sweep,
    sample: Sample | None = None,
    *,
    tolerance: float = 1e-3,
    fields: Array | None = None,
    angle: float | None = None,
    parts: bool = False,
    keep: bool = False,
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
    parts : bool
        Whether the report holds each species' transitions too (`spinfit.transitions`, as
        "transitions"), and warnings say how much intensity lies outside the sweep.
    keep : bool
        Whether the spectrum's derivatives will be asked for: `Spectrum.kept` then holds what they need.

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
    spectra: list[NDArray[np.float64]] = []
    report: dict[str, Any] = {}
    warnings: dict[tuple[str, str], None] = {}
    kept: list[Kept] | None = [] if keep else None
    for one in several:
        part, report[one.name], said = _part(one, sweep, sample, tolerance, where, window, angles, kept)
        spectra.append(part if len(part) > 1 else part[0])
        if parts:
            at = replace(sample, angles=angles, angle=angles[0])
            survey = transitions(one, replace(sweep, field=window), at)
            report[one.name] = {**report[one.name], "transitions": survey}
            said = (*said, *outside_remarks(one.name, survey))
        warnings |= dict.fromkeys(said)
    amounts = np.array([one.amount for one in several])
    signal = np.tensordot(amounts, spectra, 1)
    return Spectrum(where, signal, np.array(spectra), report, tuple(warnings), tuple(kept or ()))


def _part(
    one: Species,
    sweep: Sweep,
    sample: Sample,
    tolerance: float,
    fields: Array,
    window: tuple[float, float],
    angles: tuple[float, ...],
    kept: list[Kept] | None,
) -> tuple[Array, dict[str, object], tuple[tuple[str, str], ...]]:
    """Return spectra, shape (angles, n), what was used, and warnings."""
    if sample.form == "solution":
        signal, used, warnings = solution(one, sweep, fields, tolerance=tolerance)
        return signal[None], used, (*warnings, *polarisation_remarks(one, sample))
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
    beyond = SMEAR_REACH * SMEAR_MOST * shape.scale if sample.form in ("powder", "aligned") else 0.0
    beyond = max(beyond, WIDEST * _own_width(one))
    scale = math.hypot(shape.scale, _least_own_width(one))
    grid = FieldGrid.covering(*window, scale, reach, tolerance, beyond)
    low, high = window[0] - reach - beyond, window[1] + reach + beyond
    if low < 0:
        high = max(high, -low)
        low = 0.0
    request = Request(
        sweep.frequency,
        max(low, 1e-3),
        high,
        Grain.of(shape, tolerance),
        scale,
        tolerance,
        sweep.microwave,
        sweep.temperature,
        populations=one.populations,
    )
    treatment = decided(one, sweep.frequency, window, shape.scale, tolerance, sweep.microwave)
    treatment = replace(treatment, warnings=(*treatment.warnings, *polarisation_remarks(one, sample)))
    one = treatment.species
    every = systems(one, perturb=True)
    widths = broadening(one) or (None,) * len(every)
    averages: list[Average | Lines] = []
    if sample.form != "powder":
        totals, used, said = _oriented(treatment, request, widths, grid, shape, sample, angles, averages)
        if kept is not None:
            kept.append(Kept(one, sweep, sample, angles, request, shape, grid, fields, every, averages, totals))
        return np.array([grid.sample(grid.render(t, shape), fields) for t in totals]), used, said
    total, reports = _powders(every, widths, request, grid, averages)
    said = _misgivings(one, reports, tolerance)
    if _featureless(total, grid, scale, fields) and not any(report["looping"] for report in reports):
        averages.clear()
        close = tolerance * CLOSER
        closer = replace(request, tolerance=close, grain=Grain.of(shape, close))
        again, reports = _powders(every, widths, closer, grid, averages)
        here, there = (grid.sample(grid.render(t, shape), fields) for t in (total, again))
        total, request, said = again, closer, _misgivings(one, reports, tolerance)
        error = GAINED * float(np.abs(here - there).max() / max(np.abs(there).max(), 1e-300))
        if error > tolerance and not said:
            text = f"{one.name}: the window holds no features; the spectrum in it may err by {error:.1g} of its top"
            said = (("accuracy", text),)
    if kept is not None:
        kept.append(Kept(one, sweep, sample, angles, request, shape, grid, fields, every, averages, [total]))
    said = (*treatment.warnings, *said)
    return grid.sample(grid.render(total, shape), fields)[None], _used(reports, treatment), said


FEATURELESS = 0.02
"""Top of the derivative, relative to a single line's with the same absorption, below which a window holds no
features: what errors are small beside is then missing."""
CLOSER = 1e-3
"""Share of the tolerance with which such a window is computed again."""
GAINED = 0.02
"""Share of the first error that is left then, at the most."""


def _featureless(total: NDArray[np.complex128], grid: FieldGrid, scale: float, fields: Array) -> bool:
    """Whether a spectrum is far flatter in its window than its lines are."""
    ends = (np.array([fields.min(), fields.max()]) - grid.start) / grid.step
    window = slice(max(0, int(ends[0])), int(ends[1]) + 2)
    # the splines' coefficients are as large as their values
    absorption, derivative = (
        np.abs(grid.render(total, Shape(scale, 0.0, detect))[window]).max() for detect in ("absorption", "derivative")
    )
    return bool(derivative * scale < FEATURELESS * absorption)


def _powders(
    every: tuple[System, ...],
    widths: Sequence[Broadening | None],
    request: Request,
    grid: FieldGrid,
    averages: list[Average | Lines],
) -> tuple[NDArray[np.complex128], list[dict[str, Any]]]:
    """Return the transform of all systems' resonances, and what was used for each."""
    total: Any = 0.0
    reports = []
    for system, own in zip(every, widths, strict=True):
        histograms, report = powder(system, replace(request, broadening=own), grid, keep=averages)
        reports.append({"label": system.label, **vars(report)})
        total = total + system.weight * histograms.transform()
    return total, reports


def _oriented(
    treatment: Treatment,
    request: Request,
    widths: tuple[Broadening | None, ...],
    grid: FieldGrid,
    shape: Shape,
    sample: Sample,
    angles: tuple[float, ...],
    averages: list[Average | Lines],
) -> tuple[list[NDArray[np.complex128]], dict[str, object], tuple[tuple[str, str], ...]]:
    """Return transforms of a crystal or an aligned sample, one for each angle, what was used, and warnings."""
    totals: list[Any] = [0.0] * len(angles)
    reports: list[dict[str, Any]] = []
    warnings = dict.fromkeys(treatment.warnings)
    if sample.form == "crystal":
        warnings |= dict.fromkeys(remarks(sample, angles, request.microwave))
    for system, own in zip(systems(treatment.species, perturb=True), widths, strict=True):
        asked = replace(request, broadening=own)
        if sample.form == "crystal":
            histograms, report = crystal(system, asked, grid, sample, angles, averages)
        else:
            histogram, report = aligned(system, asked, grid, shape, sample, angles[0])
            histograms = [histogram]
            warnings |= dict.fromkeys(("directions", text) for text in report.get("notes", ()))
        totals = [t + system.weight * h.transform() for t, h in zip(totals, histograms, strict=True)]
        reports.append(report)
    return totals, _used(reports, treatment), tuple(warnings)


def _misgivings(one: Species, reports: list[dict[str, Any]], tolerance: float) -> tuple[tuple[str, str], ...]:
    """Return what a powder spectrum cannot promise."""
    said = []
    error = max(float(report["estimated_error"]) for report in reports)
    if error > 1.5 * tolerance:
        said.append(("accuracy", f"{one.name}: the spectrum may err by {error:.1g} of its top, not {tolerance:g}"))
    notes = dict.fromkeys(text for report in reports for text in report["notes"])
    return (*said, *(("accuracy", f"{one.name}: {text}") for text in notes))


def _used(reports: list[dict[str, Any]], treatment: Treatment) -> dict[str, object]:
    """Return the report of one species: of each system, and how each nucleus was treated."""
    used: dict[str, object] = {"systems": reports}
    return used | ({"nuclei": list(treatment.nuclei)} if treatment.nuclei else {})


WIDEST = 4.0
"""Standard deviations beyond which a broadened line is not felt."""


def _own_width(one: Species) -> float:
    """Return a rough standard deviation, mT, of the widest line that spreads make."""
    spread = one.spread
    frequency = max(one.width.hidden_hyperfine) + max(spread.A) + one.spins[0].S * 2 * (spread.D + spread.E)
    turned = spread.tilt * 2 * one.spins[0].S * 340.0
    return (frequency / 28.0 + turned) / FWHM_PER_SIGMA + 0.2 * max(spread.g) * 340.0


def polarisation_remarks(one: Species, sample: Sample) -> tuple[tuple[str, str], ...]:
    """Warn, as (code, text), where the populations of a species cannot be taken as they stand."""
    if one.populations is None:
        return ()
    if sample.form == "solution":
        text = f"{one.name}: populations of zero-field sublevels are not used: tumbling leaves no splitting to tell by"
    elif shares_unevenly(systems(one, perturb=True)[0], one.populations):
        text = f"{one.name}: populations of sublevels that are degenerate at zero field were shared evenly among them"
    else:
        return ()
    return (("populations", text),)


def _least_own_width(one: Species) -> float:
    """Return a standard deviation, mT, by which hidden hyperfine broadens every resonance at the least."""
    steepest = 14.0 * max(max(spin.g) * spin.S * 2 for spin in one.spins)
    return 0.8 * min(one.width.hidden_hyperfine) / (max(steepest, 28.0) * FWHM_PER_SIGMA)
