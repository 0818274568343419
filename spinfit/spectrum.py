"""simulate(): species, sweep and sample to a spectrum."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import Request
from spinfit.errors import InputError
from spinfit.hamiltonian import System, systems
from spinfit.lineshape import FieldGrid, Shape
from spinfit.powder import powder
from spinfit.resonance import find
from spinfit.species import Species, tilt_matrix
from spinfit.sweep import Sample, Sweep

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Spectrum:
    """A simulated field sweep.

    Attributes
    ----------
    fields : ndarray, shape (n,)
        mT.
    signal : ndarray, shape (n,)
        Sum over species of amount x part.
    parts : ndarray, shape (species, n)
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
        rad; crystal and aligned samples, in place of the sample's own.

    Returns
    -------
    Spectrum

    Raises
    ------
    InputError
        A species without a width, or a sample form that is not available.
    """
    several = (species,) if isinstance(species, Species) else tuple(species)
    sample = sample or Sample()
    where = sweep.fields if fields is None else np.asarray(fields, dtype=float)
    window = (float(where.min()), float(where.max()))
    parts = np.zeros((len(several), len(where)))
    report: dict[str, object] = {}
    for row, one in enumerate(several):
        parts[row], report[one.name] = _part(one, sweep, sample, tolerance, where, window, angle)
    amounts = np.array([one.amount for one in several])
    return Spectrum(where, amounts @ parts, parts, report)


def _part(
    one: Species,
    sweep: Sweep,
    sample: Sample,
    tolerance: float,
    fields: Array,
    window: tuple[float, float],
    angle: float | None,
) -> tuple[Array, dict[str, object]]:
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
    grid = FieldGrid.covering(*window, shape.scale, reach, tolerance)
    low, high = window[0] - reach, window[1] + reach
    if low < 0:
        high = max(high, -low)
        low = 0.0
    request = Request(
        sweep.frequency,
        max(low, 1e-3),
        high,
        _spacing(shape, tolerance),
        shape.scale,
        tolerance,
        sweep.microwave,
        sweep.temperature,
    )
    total: dict[int, Array] = {}
    reports = []
    for system in systems(one):
        if sample.form == "crystal":
            histograms, report = _crystal(system, request, grid, sample, angle)
        elif sample.form == "powder":
            histograms, report = powder(system, request, grid)
        else:
            raise InputError(f'a sample of the form "{sample.form}" is not available yet', 'use "powder" or "crystal"')
        reports.append({"label": system.label, **vars(report)} if not isinstance(report, dict) else report)
        for order, histogram in histograms.items():
            total[order] = total.get(order, 0) + system.weight * histogram
    return grid.sample(grid.coefficients(total, shape), fields), {"systems": reports}


def _spacing(shape: Shape, tolerance: float) -> float:
    """Return how far apart in field neighbouring directions may lie, mT.

    A sum over directions spaced d apart in field aliases by the line's transform at 2 pi/d:
    exp(-2 pi^2 sigma^2/d^2 - 2 pi gamma/d), which is set to a twentieth of the tolerance: the
    derivative lifts it by 2 pi sigma/d against the line itself.
    """
    level = np.log(20 / tolerance)
    a, b = 2 * (np.pi * shape.sigma) ** 2, 2 * np.pi * shape.gamma
    inverse = 2 * level / (b + np.sqrt(b * b + 4 * a * level))
    return float(1 / inverse)


def crystal_directions(sample: Sample, angles: Sequence[float]) -> tuple[Array, Array]:
    """Return field and microwave directions in molecular axes, each of shape (len(angles), 3).

    The field is `sample.start` turned about `sample.axis` by angle - angle_zero; the microwave
    field lies along `microwave_axis`, by default the rotation axis.  The sample's tilt carries
    crystal axes into molecular axes, so components in molecular axes are R^T v.
    """
    axis = np.asarray(sample.axis, dtype=float) / np.linalg.norm(sample.axis)
    start = np.asarray(sample.start, dtype=float) / np.linalg.norm(sample.start)
    turn = np.asarray(angles, dtype=float)[:, None] - sample.angle_zero
    field_direction = (
        start * np.cos(turn) + np.cross(axis, start) * np.sin(turn) + axis * (axis @ start) * (1 - np.cos(turn))
    )
    microwave = axis if sample.microwave_axis is None else np.asarray(sample.microwave_axis, dtype=float)
    microwave = np.broadcast_to(microwave / np.linalg.norm(microwave), field_direction.shape)
    to_molecule = tilt_matrix(sample.tilt)
    return field_direction @ to_molecule, microwave @ to_molecule


def _crystal(
    system: System, request: Request, grid: FieldGrid, sample: Sample, angle: float | None
) -> tuple[dict[int, Array], dict[str, object]]:
    angles = sample.angles if angle is None else (angle,)
    if len(angles) != 1:
        raise InputError(f"{len(angles)} angles", "a spectrum is simulated for one angle at a time", place="angles")
    directions, microwave = crystal_directions(sample, angles)
    along = "parallel" if request.microwave == "parallel" else microwave
    got = find(
        system,
        directions,
        request.frequency,
        (request.low, request.high),
        microwave=along,
        temperature=request.temperature,
    )
    histogram = grid.deposit(got.field, got.weight)
    if grid.start < 0:
        histogram += grid.deposit(-got.field, got.weight)
    return {0: histogram}, {"label": system.label, "resonances": len(got.field)}


def with_angle(sample: Sample, angle: float) -> Sample:
    """Return the sample at one angle, rad."""
    return replace(sample, angles=(angle,))
