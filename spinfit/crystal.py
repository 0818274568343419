"""Single crystals: directions of the field in each site's molecular axes, and their resonances.

The field is `start` turned about `axis` by angle - angle_zero (right-handed, crystal frame).  With T
the matrix of the sample's tilt (its columns are the molecular axes of the first site in crystal
components) and R_k the rotations of the point group, the molecular axes of site k are R_k T, so a
vector v of the crystal frame has the components T^T R_k^T v in the molecular axes of site k.

A crystal's spectrum is the mean over its sites: its area does not depend on their number.

The microwave field lies along `microwave_axis`, by default the rotation axis, and the intensity is
|M.b1|^2 for that vector as it stands, also where it is not normal to the static field.  With
microwave = "parallel" it lies along the static field, whatever `microwave_axis` says.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import Request
from spinfit.errors import InputError
from spinfit.exact import Lines, deposit
from spinfit.hamiltonian import System
from spinfit.lineshape import FieldGrid
from spinfit.resonance import find
from spinfit.sheets import Histograms
from spinfit.sites import operations
from spinfit.species import tilt_matrix
from spinfit.sweep import Sample

Array = NDArray[np.float64]

OBLIQUE = math.sin(math.radians(10.0))
"""Cosine of the angle between the two fields from which on a perpendicular microwave field is remarked on."""
SAME = 1e-9
"""Directions are the same when no component differs by more."""


class Directions(NamedTuple):
    """Distinct directions in molecular axes, one for each set of magnetically equivalent sites.

    Attributes
    ----------
    angle : ndarray of int, shape (d,)
        Index into the angles asked for, rising.
    field, microwave : ndarray, shape (d, 3)
        Unit vectors in the molecular axes of a site.
    share : ndarray, shape (d,)
        Fraction of the sites; those of one angle sum to 1.
    members : tuple of ndarray of int
        The sites, in the order of `spinfit.sites.operations`.
    """

    angle: NDArray[np.intp]
    field: Array
    microwave: Array
    share: Array
    members: tuple[NDArray[np.intp], ...]


def _unit(vector: Sequence[float], key: str) -> Array:
    v = np.asarray(vector, dtype=float)
    length = float(np.linalg.norm(v))
    if v.shape != (3,) or not (math.isfinite(length) and length > 0):
        raise InputError(f"{tuple(vector)} has no direction", "write three numbers, not all 0", place=key)
    return v / length


def laboratory_directions(sample: Sample, angles: Sequence[float]) -> tuple[Array, Array]:
    """Return field and microwave directions in the crystal frame, each of shape (len(angles), 3).

    Parameters
    ----------
    angles : sequence of float
        rad, before `angle_zero` is taken off.
    """
    axis, start = _unit(sample.axis, "axis"), _unit(sample.start, "from")
    turn = np.asarray(angles, dtype=float)[:, None] - sample.angle_zero
    field = start * np.cos(turn) + np.cross(axis, start) * np.sin(turn) + axis * (axis @ start) * (1 - np.cos(turn))
    microwave = axis if sample.microwave_axis is None else _unit(sample.microwave_axis, "microwave_axis")
    return field, np.broadcast_to(microwave, field.shape)


def crystal_directions(sample: Sample, angles: Sequence[float]) -> tuple[Array, Array]:
    """Return field and microwave directions in the first site's molecular axes, each of shape (len(angles), 3)."""
    to_molecule = tilt_matrix(sample.tilt)
    field, microwave = laboratory_directions(sample, angles)
    return field @ to_molecule, microwave @ to_molecule


def site_directions(sample: Sample, angles: Sequence[float]) -> Directions:
    """Return the distinct directions of the fields in the molecular axes of all sites.

    Two sites are magnetically equivalent when both fields lie along the same lines in their
    molecular axes: the spectrum does not change when either field is reversed.

    Raises
    ------
    InputError
        An unknown point group, or a vector without direction.
    """
    field, microwave = every_site(sample, angles)
    kept, sites, share, members = [], [], [], []
    for row in range(len(field)):
        left = np.arange(field.shape[1])
        while len(left):
            first = left[0]
            alike = _same_line(field[row, left], field[row, first]) & _same_line(
                microwave[row, left], microwave[row, first]
            )
            kept.append(row)
            sites.append(first)
            share.append(alike.sum() / field.shape[1])
            members.append(left[alike])
            left = left[~alike]
    row = np.array(kept, dtype=np.intp)
    return Directions(row, field[row, sites], microwave[row, sites], np.array(share), tuple(members))


def every_site(sample: Sample, angles: Sequence[float]) -> tuple[Array, Array]:
    """Return static and microwave field in the molecular axes of every site, each of shape (angles, sites, 3)."""
    frames = operations(sample.point_group) @ tilt_matrix(sample.tilt)
    # T^T R_k^T v, written as v^T R_k T
    field, microwave = (np.einsum("ai,kij->akj", v, frames) for v in laboratory_directions(sample, angles))
    return field, microwave


def moved_directions(lines: Lines, sample: Sample, angles: Sequence[float]) -> tuple[Array, Array]:
    """Return where the directions of `lines` are in a sample that is a little different.

    Of equivalent sites, whose lines may part then, the mean is taken: to first order that is what
    their common line does.

    Returns
    -------
    field, microwave : ndarray, shape (d, 3)
    """
    moved = every_site(sample, angles)
    out = []
    for now, before in zip(moved, (lines.field, lines.wave), strict=True):
        rows = []
        for angle, sites, known in zip(lines.angle, lines.members, before, strict=True):
            vectors = now[angle, sites]
            mean = (vectors * np.sign(vectors @ known)[:, None]).mean(axis=0)
            rows.append(mean / np.linalg.norm(mean))
        out.append(np.array(rows))
    return out[0], out[1]


def _same_line(vectors: Array, one: Array) -> NDArray[np.bool_]:
    """Whether each of `vectors`, shape (n, 3), is `one` or its opposite."""
    return np.minimum(np.abs(vectors - one).max(axis=1), np.abs(vectors + one).max(axis=1)) < SAME


def crystal(
    system: System,
    request: Request,
    grid: FieldGrid,
    sample: Sample,
    angles: Sequence[float],
    keep: list[Lines] | None = None,
) -> tuple[list[Histograms], dict[str, object]]:
    """Return one histogram of resonance fields for each angle, and what was used.

    Parameters
    ----------
    angles : sequence of float
        rad.
    keep : list, optional
        Gets the resonances appended.

    Returns
    -------
    histograms : list of Histograms
    report : dict
        Label of the system, number of sites, of distinct directions and of resonances.
    """
    where = site_directions(sample, angles)
    along = "parallel" if request.microwave == "parallel" else where.microwave
    got = find(
        system,
        where.field,
        request.frequency,
        (request.low, request.high),
        microwave=along,
        temperature=request.temperature,
        populations=request.populations,
    )
    if keep is not None:
        keep.append(Lines(request, got, where.field, where.microwave, where.share, where.angle, where.members))
    weight = got.weight * where.share[got.direction]
    angle = where.angle[got.direction]
    histograms = []
    for k in range(len(angles)):
        own = angle == k
        histograms.append(Histograms(grid, request.scale))
        deposit(histograms[-1], system, request, got.only(own), where.field, weight[own], along)
    report = {
        "label": system.label,
        "sites": len(operations(sample.point_group)),
        "directions": len(where.share),
        "resonances": len(got.field),
    }
    return histograms, report


def remarks(sample: Sample, angles: Sequence[float], microwave: str) -> tuple[tuple[str, str], ...]:
    """Warn, as (code, text), of a perpendicular microwave field that is far from normal to the field."""
    if microwave == "parallel":
        return ()
    field, wave = laboratory_directions(sample, angles)
    cosine = np.abs(np.sum(field * wave, axis=1))
    k = int(np.argmax(cosine))
    if cosine[k] <= OBLIQUE:
        return ()
    between = math.degrees(math.acos(min(1.0, float(cosine[k]))))
    at = math.degrees(angles[k])
    text = (
        f"at {at:g} deg the microwave field is {between:.0f} deg from the static field, not 90: "
        "intensities are those of its direction as given (microwave_axis, by default axis)"
    )
    return (("oblique_microwave", text),)
