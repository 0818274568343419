"""simulate(): species, sweep and sample to a spectrum."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit.alignment import aligned, mesh_directions
from spinfit.branches import FWHM_PER_SIGMA, Request
from spinfit.broadening import Broadening, broadening
from spinfit.crystal import crystal, remarks, site_directions
from spinfit.distribution import AVERAGED, ENOUGH, Mixture, Node, averaged, expanded
from spinfit.errors import InputError
from spinfit.exact import Lines
from spinfit.first_order import first_order_errors
from spinfit.hamiltonian import System, systems
from spinfit.levels import shares_unevenly
from spinfit.lineshape import FieldGrid, Shape
from spinfit.markup import html_table
from spinfit.powder import Average, powder
from spinfit.sheets import SMEAR_MOST, SMEAR_REACH, Grain
from spinfit.solution import solution
from spinfit.species import Species
from spinfit.sweep import Sample, Sweep
from spinfit.symmetry import symmetry_of
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
    mixture : Mixture
        Where widths of first order were not good enough, the nodes of the distribution: `systems` are then
        those of each node in turn, weighted by its share.
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
    mixture: Mixture = field(default_factory=dict)

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
    spread_tolerance: float | None = None,
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
    spread_tolerance : float, optional
        How far what spreads do may err, by default `tolerance`; infinite leaves them to widths of first order,
        which takes one spectrum.

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
        own = where, window, angles, tolerance if spread_tolerance is None else spread_tolerance
        part, report[one.name], said = _part(one, sweep, sample, tolerance, *own, kept)
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
    spread_tolerance: float,
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
    asked = _Asked(every, widths, sample, angles, shape, grid, fields, spread_tolerance)
    done = asked.averaged(request)
    flat = sample.form == "powder" and _featureless(done.totals[0], grid, scale, fields)
    if flat and not any(report["looping"] for report in done.reports):
        close = tolerance * CLOSER
        request = replace(request, tolerance=close, grain=Grain.of(shape, close))
        before, done = done, asked.averaged(request)
        here, there = (grid.sample(grid.render(one.totals[0], shape), fields) for one in (before, done))
        error = GAINED * float(np.abs(here - there).max() / max(np.abs(there).max(), 1e-300))
        said = _misgivings(one, done, tolerance)
        if error > tolerance and not said:
            text = f"{one.name}: the window holds no features; the spectrum in it may err by {error:.1g} of its top"
            said = (("accuracy", text),)
    else:
        said = _misgivings(one, done, tolerance)
    if kept is not None:
        own = done.systems, done.averages, done.totals, done.mixture
        kept.append(Kept(one, sweep, sample, angles, request, shape, grid, fields, *own))
    if sample.form == "crystal":
        said = (*remarks(sample, angles, request.microwave), *said)
    said = (*treatment.warnings, *said)
    used = _used(done, treatment)
    signal = np.array([grid.sample(grid.render(t, shape), fields) for t in done.totals])
    if not signal.any() and not said:
        mode = "in the parallel mode " if sweep.microwave == "parallel" else ""
        text = f"{one.name}: nothing is resonant {mode}between {window[0]:g} and {window[1]:g} mT"
        said = (*said, ("empty", text))
    return signal, used, said


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


class _Done(NamedTuple):
    """An average over the directions of a sample, and over a distribution where need be; see `Kept`."""

    totals: list[NDArray[np.complex128]]
    reports: list[dict[str, Any]]
    systems: tuple[System, ...]
    averages: list[Average | Lines]
    mixture: Mixture
    spreads: dict[str, Any]


class _Asked(NamedTuple):
    """What one species' spectrum is asked for, but for the accuracy."""

    systems: tuple[System, ...]
    widths: Sequence[Broadening | None]
    sample: Sample
    angles: tuple[float, ...]
    shape: Shape
    grid: FieldGrid
    fields: Array
    spread_tolerance: float

    def averaged(self, request: Request) -> _Done:
        """Average over directions, and over the distribution as far as widths of first order err."""
        widths = self.widths[0]
        names = [] if widths is None else [name for name in widths.spread if name in AVERAGED]
        if not names:
            return self.one(self.systems, self.widths, request)
        first = self.first_order_errors(request)
        told: dict[str, Any] = {"first_order_errors": dict(zip(names, map(float, first), strict=True))}
        if first.sum() <= ENOUGH * self.spread_tolerance:
            return self.one(self.systems, self.widths, request)._replace(spreads=told)
        found: dict[Node, _Done] = {}

        def spectrum(node: Node) -> NDArray[np.complex128]:
            if node not in found:
                found[node] = self.one(*expanded(self.systems, self.widths, {node: 1.0}), request)
            return np.array(found[node].totals)

        def height(transforms: NDArray[np.complex128]) -> float:
            drawn = (self.grid.sample(self.grid.render(one, self.shape), self.fields) for one in transforms)
            return max(float(np.abs(one).max()) for one in drawn)

        spectrum(centre := Node((0.0,) * len(names), (1.0,) * len(names)))
        # no better than the sums over directions
        reached = max(float(report.get("estimated_error", 0.0)) for report in found[centre].reports)
        got = averaged(spectrum, height, first.tolist(), max(self.spread_tolerance, reached))
        told |= {"nodes": len(found), "estimated_error": float(got.error), "tolerance": self.spread_tolerance}
        if len(got.mixture) == 1:
            return found[next(iter(got.mixture))]._replace(spreads=told)
        several = [found[node] for node in got.mixture]
        averages = [average for one in several for average in one.averages]
        reports = [report for one in several for report in one.reports]
        systems, _ = expanded(self.systems, self.widths, got.mixture)
        return _Done(list(got.total), reports, systems, averages, got.mixture, told)

    def one(self, systems: Sequence[System], widths: Sequence[Broadening | None], request: Request) -> _Done:
        """Average over directions alone."""
        totals: list[Any] = [0.0] * len(self.angles)
        reports: list[dict[str, Any]] = []
        averages: list[Average | Lines] = []
        meshes: list[Average] = []
        lines: list[Lines] = []
        for system, own in zip(systems, widths, strict=True):
            asked = replace(request, broadening=own)
            if self.sample.form == "powder":
                histogram, report = powder(system, asked, self.grid, keep=meshes)
                histograms, used = [histogram], {"label": system.label, **vars(report)}
            elif self.sample.form == "crystal":
                histograms, used = crystal(system, asked, self.grid, self.sample, self.angles, lines)
            else:
                histogram, used = aligned(system, asked, self.grid, self.shape, self.sample, self.angles[0])
                histograms = [histogram]
            totals = [t + system.weight * h.transform() for t, h in zip(totals, histograms, strict=True)]
            reports.append(used)
        averages += [*meshes, *lines]
        return _Done(totals, reports, tuple(systems), averages, {}, {})

    def first_order_errors(self, request: Request) -> Array:
        """Return the estimated error that each spread's width of first order makes, of the commonest system."""
        system, own = max(zip(self.systems, self.widths, strict=True), key=lambda pair: pair[0].weight)
        request = replace(request, broadening=own)
        window = float(self.fields.min()), float(self.fields.max())
        if self.sample.form == "crystal":
            where = site_directions(self.sample, self.angles)
            wave = None if request.microwave == "parallel" else where.microwave
            errors = []
            for k in range(len(self.angles)):
                at = where.angle == k
                along = None if wave is None else wave[at]
                args = (where.field[at], where.share[at], 0.0, along)
                errors.append(first_order_errors(system, request, window, *args))
            worst: Array = np.max(errors, axis=0)
            return worst
        symmetry = symmetry_of(system) if own is None else own.lowered(symmetry_of(system), system)
        polar, azimuths = SAMPLED
        directions, share = mesh_directions(None, symmetry, polar, azimuths)
        return first_order_errors(system, request, window, directions, share, 0.5 * math.pi / polar)


SAMPLED = (8, 6)
"""Intervals of the mesh on which the error of the first order is told."""


def _misgivings(one: Species, done: _Done, tolerance: float) -> tuple[tuple[str, str], ...]:
    """Return what a spectrum cannot promise."""
    said = []
    error = max(float(report.get("estimated_error", 0.0)) for report in _joined(done))
    if error > 1.5 * tolerance and "rings" in done.reports[0]:
        said.append(("accuracy", f"{one.name}: the spectrum may err by {error:.1g} of its top, not {tolerance:g}"))
    spread = done.spreads.get("estimated_error", 0.0)
    if spread > 1.5 * max(tolerance, error, done.spreads.get("tolerance", 0.0)):
        text = f"spreads are so wide that the spectrum may err by {spread:.1g} of its top, not {tolerance:g}"
        said.append(("accuracy", f"{one.name}: {text}"))
    code = "accuracy" if "rings" in done.reports[0] else "directions"
    notes = dict.fromkeys(text for report in done.reports for text in report.get("notes", ()))
    return (*said, *((code, f"{one.name}: {text}" if code == "accuracy" else text) for text in notes))


def _used(done: _Done, treatment: Treatment) -> dict[str, object]:
    """Return the report of one species: of each system, of its spreads, and how each nucleus was treated."""
    used: dict[str, object] = {"systems": _joined(done)}
    used |= {"spreads": done.spreads} if done.spreads else {}
    return used | ({"nuclei": list(treatment.nuclei)} if treatment.nuclei else {})


SUMMED = ("directions", "diagonalisations", "mesh_points", "resonances")
"""What a report counts for each node of a distribution."""


def _joined(done: _Done) -> list[dict[str, Any]]:
    """Return one report for each system, of all nodes: the work summed, the errors' mean, of all else the most."""
    shares = np.abs(list(done.mixture.values())) if done.mixture else np.ones(1)
    count = len(done.reports) // len(shares)
    out = []
    for number in range(count):
        several = done.reports[number::count]
        joined = dict(several[0])
        for key, value in joined.items():
            if key in SUMMED:
                joined[key] = sum(one[key] for one in several)
            elif key == "estimated_error":
                joined[key] = float(np.average([one[key] for one in several], weights=shares))
            elif isinstance(value, (int, float)) and not isinstance(value, bool):
                joined[key] = max(one[key] for one in several)
            elif key == "notes":
                joined[key] = list(dict.fromkeys(text for one in several for text in one.get(key, ())))
        out.append(joined)
    return out


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
