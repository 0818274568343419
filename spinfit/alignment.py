"""Partly ordered samples: how often the field has each direction in the molecular axes.

The molecules' ordering axis u (`director`, molecular axes) is distributed about the sample's director
d with the density exp(lambda cos^2 beta), beta from d (W. Maier, A. Saupe, Z. Naturforsch. A 14, 882
(1959)); lambda follows from the order parameter <P2> = <3 cos^2 beta - 1>/2.  All turns about d and
about u are equally likely.  With the field at an angle a to d, a molecule whose u lies at theta to
the field and at an azimuth psi about it has cos beta = cos a cos theta + sin a sin theta cos psi, so
a field direction n in the molecular axes occurs with the weight

    w(n) = (1/2 pi) int F(cos a cos theta + sin a sin theta cos psi) dpsi,     cos theta = n.u,

F(x) = exp(lambda x^2) / int_0^1 exp(lambda t^2) dt.  Its mean over the sphere is 1.  In Legendre
polynomials it is the sum over even l of (2l+1) <P_l> P_l(cos a) P_l(cos theta).

At complete order (<P2> = 1, or -1/2: u normal to d) the weight becomes a delta function on rings,
which are summed as such.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import special
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from spinfit.branches import Request
from spinfit.errors import InputError
from spinfit.exact import deposit
from spinfit.hamiltonian import System
from spinfit.lineshape import FieldGrid, Shape
from spinfit.orientations import Mesh
from spinfit.powder import powder
from spinfit.resonance import find
from spinfit.sheets import Histograms
from spinfit.sweep import Sample
from spinfit.symmetry import Symmetry, symmetry_of

Array = NDArray[np.float64]

COMPLETE = 1e-6
"""Within this of <P2> = 1 order counts as complete: the axes then stray by less than 0.05 degrees."""
COMPLETE_NEGATIVE = 1e-5
"""Within this of <P2> = -1/2 order counts as complete: the axes then stray by less than 0.15 degrees."""
FALL = 36.0
"""Exponent at which the distribution counts as nothing."""
KNOTS = 32
"""Knots of the table of weights for each width of a feature."""
SMALL = 40.0
"""Largest |lambda| for which moments are found by quadrature; closed forms cancel there."""
NARROW = 0.05
"""rad; a weight with features narrower than this is summed over rings about the director."""
FIRST, MOST = 12, 400_000
"""Numbers of polar angles with which the plain sum begins, and of directions at which it gives up."""

_NODES, _SHARES = (v / 2 for v in np.polynomial.legendre.leggauss(64))
_NODES = _NODES + 0.5


def order_of(strength: float) -> float:
    """Return <P2> of the Maier-Saupe distribution with this lambda."""
    if abs(strength) <= SMALL:
        weight = _SHARES * np.exp(strength * (_NODES**2 - max(0.0, np.sign(strength))))
        square = float(weight @ _NODES**2 / weight.sum())
    elif strength > 0:
        root = math.sqrt(strength)
        square = (root / float(special.dawsn(root)) - 1) / (2 * strength)
    else:
        root = math.sqrt(-strength)
        square = (1 - 2 * root * math.exp(strength) / (math.sqrt(math.pi) * math.erf(root))) / (-2 * strength)
    return 1.5 * square - 0.5


@lru_cache(maxsize=256)
def strength_of(order: float) -> float:
    """Return the Maier-Saupe lambda at which <P2> has this value; -inf and inf at complete order.

    Raises
    ------
    InputError
        Not between -1/2 and 1.
    """
    if not -0.5 <= order <= 1:
        raise InputError(f"{order:g}", "an order parameter <P2> lies between -0.5 and 1", place="order")
    if order >= 1 - COMPLETE:
        return math.inf
    if order <= -0.5 + COMPLETE_NEGATIVE:
        return -math.inf
    # <P2> -> 1 - 3/(2 lambda) and -1/2 - 3/(4 lambda): twice that is beyond the root
    low, high = -1.5 / (order + 0.5) - 1, 3 / (1 - order) + 1
    return float(brentq(lambda x: order_of(x) - order, low, high, xtol=1e-12, rtol=1e-14))


@dataclass(frozen=True, eq=False)
class Alignment:
    """The weight of field directions for one order parameter and one angle.

    Attributes
    ----------
    strength : float
        Maier-Saupe lambda; infinite at complete order, where there is no weight to evaluate.
    angle : float
        Field to sample director, rad, between 0 and pi/2.
    director : ndarray, shape (3,)
        Unit vector, molecular axes.
    feature : float
        rad; width of the narrowest feature of the weight.
    support : (float, float)
        theta between which the weight is not negligible, rad, within 0 to pi/2.
    """

    strength: float
    angle: float
    director: Array
    feature: float
    support: tuple[float, float]
    _table: CubicSpline | None = field(repr=False)

    @classmethod
    def of(cls, sample: Sample, angle: float | None = None) -> Alignment:
        """Build from a sample, at its own angle or another one (rad)."""
        director = np.asarray(sample.director, dtype=float)
        turn = sample.angle if angle is None else angle
        folded = math.acos(min(1.0, abs(math.cos(turn))))  # the distribution is even in both axes
        strength, feature, support, table = _tabulated(sample.order, folded)
        return cls(strength, folded, director / np.linalg.norm(director), feature, support, table)

    def at(self, cosine: Array) -> Array:
        """Return the weight at cos(theta) = n.u, same shape; complete order has none."""
        if self._table is None:
            raise InputError("complete order has no weight at single directions", "sum over its rings", place="order")
        theta = np.arccos(np.clip(np.abs(cosine), 0.0, 1.0))
        low, high = self.support
        inside = (theta >= low) & (theta <= high)
        return np.where(inside, self._table(np.clip(theta, low, high)), 0.0)

    def weight(self, directions: Array, symmetry: Symmetry | None = None) -> Array:
        """Return the weight of field directions, shape (v,), mean 1 over the sphere.

        Parameters
        ----------
        directions : ndarray, shape (v, 3)
            Unit vectors, molecular axes.
        symmetry : Symmetry, optional
            Average over the directions that this symmetry makes equivalent: what is needed where
            only the symmetry's domain is summed over.
        """
        if symmetry is None or symmetry.kind == "half":
            return self.at(directions @ self.director)
        if symmetry.kind == "point":
            return np.ones(len(directions))
        own, u = directions @ symmetry.axes, self.director @ symmetry.axes
        if symmetry.kind == "axial":
            return self._about_axis(own[:, 2], u[2])
        # twofold turns change the signs of two components; with inversion, mirrors are the same
        signs = [[1, 1, 1], [-1, -1, 1]] + ([[1, -1, -1], [-1, 1, -1]] if symmetry.kind == "octant" else [])
        return np.mean([self.at(own @ (u * sign)) for sign in signs], axis=0)

    def _about_axis(self, z: Array, u_z: float) -> Array:
        """Average over all turns about an axis, at which the direction has `z` and the director `u_z`."""
        sine = math.sqrt(max(0.0, 1 - u_z * u_z))
        if sine < 1e-9:
            return self.at(z)
        levels, place = np.unique(np.round(z, 12), return_inverse=True)
        turns = _turns(8 * math.ceil(1 / self.feature) + 64)
        across = sine * np.sqrt(np.maximum(0.0, 1 - levels**2))
        average = np.array([self.at(u_z * c + s * turns).mean() for c, s in zip(levels, across, strict=True)])
        return average[place]

    def polar(self, count: int) -> tuple[Array, Array]:
        """Return cos(theta) and shares, both of shape (m,), to sum over; the shares sum to 1.

        Parameters
        ----------
        count : int
            How finely: the number of polar angles, one being enough at order 1.
        """
        if self.strength == math.inf:
            return np.array([math.cos(self.angle)]), np.ones(1)
        if self.strength == -math.inf:
            if math.sin(self.angle) < 1e-9:
                return np.zeros(1), np.ones(1)
            # u at an azimuth psi in the plane normal to d, the field at `angle` to d
            psi = (np.arange(count) + 0.5) * (0.5 * np.pi / count)
            return math.sin(self.angle) * np.cos(psi), np.full(count, 1 / count)
        low, high = self.support
        nodes, shares = np.polynomial.legendre.leggauss(count)
        theta = low + 0.5 * (high - low) * (nodes + 1)
        share = shares * self.at(np.cos(theta)) * np.sin(theta)
        return np.cos(theta), share / share.sum()


def orientation_weight(
    sample: Sample, directions: Array, angle: float | None = None, *, symmetry: Symmetry | None = None
) -> Array:
    """Return how often each field direction occurs in an aligned sample, shape (v,), mean 1 over the sphere.

    Parameters
    ----------
    sample : Sample
        Its `director`, `order` and `angle`.
    directions : ndarray, shape (v, 3)
        Unit vectors, molecular axes.
    angle : float, optional
        Field to sample director, rad, in place of the sample's own.
    symmetry : Symmetry, optional
        Average over the directions that it makes equivalent.

    Raises
    ------
    InputError
        At complete order, where only rings of directions occur.
    """
    return Alignment.of(sample, angle).weight(np.asarray(directions, dtype=float), symmetry)


def _turns(count: int) -> Array:
    """Return cos of `count` even azimuths over half a turn, at midpoints: a periodic trapezium rule."""
    return np.cos((np.arange(count) + 0.5) * (np.pi / count))


@lru_cache(maxsize=64)
def _tabulated(order: float, angle: float) -> tuple[float, float, tuple[float, float], CubicSpline | None]:
    """Return lambda, the feature's width, the support and the weight over theta as a spline."""
    strength = strength_of(order)
    if math.isinf(strength):
        return strength, 0.0, (0.0, 0.5 * math.pi), None
    feature = 1 / math.sqrt(2 * abs(strength) + 10)
    support = (0.0, 0.5 * math.pi)
    if strength > 2 * FALL:  # u keeps within this angle of d, and so of the ring at `angle`
        apart = math.asin(math.sqrt(FALL / strength))
        support = (max(0.0, angle - apart), min(0.5 * math.pi, angle + apart))
    theta = np.linspace(*support, max(256, math.ceil(KNOTS * (support[1] - support[0]) / feature)))
    turns = _turns(64 + math.ceil(8 / feature))
    top = max(strength, 0.0)
    norm = _partition(strength)
    weight = np.empty(len(theta))
    step = max(1, 4_000_000 // len(turns))
    for start in range(0, len(theta), step):
        part = theta[start : start + step, None]
        x = math.cos(angle) * np.cos(part) + math.sin(angle) * np.sin(part) * turns
        weight[start : start + step] = np.exp(strength * x**2 - top).mean(axis=1) / norm
    # level at both ends: even about the pole and the equator, negligible elsewhere
    return strength, feature, support, CubicSpline(theta, weight, bc_type="clamped")


def _partition(strength: float) -> float:
    """Return int_0^1 exp(lambda t^2 - max(lambda, 0)) dt."""
    if abs(strength) <= SMALL:
        return float(_SHARES @ np.exp(strength * _NODES**2 - max(strength, 0.0)))
    root = math.sqrt(abs(strength))
    if strength > 0:
        return float(special.dawsn(root)) / root
    return 0.5 * math.sqrt(math.pi) * math.erf(root) / root


def _frame(director: Array) -> Array:
    """Return a right-handed frame whose z is the director, axes as columns, shape (3, 3)."""
    x = np.eye(3)[np.argmin(np.abs(director))]
    x = x - (x @ director) * director
    x /= np.linalg.norm(x)
    return np.column_stack([x, np.cross(director, x), director])


def ring_directions(alignment: Alignment, polar: int, azimuths: int) -> tuple[Array, Array]:
    """Return field directions in molecular axes, shape (m, 3), and their shares, summing to 1.

    Parameters
    ----------
    polar, azimuths : int
        Numbers of angles from the director and about it.
    """
    cosine, share = alignment.polar(polar)
    if np.all(np.abs(cosine) > 1 - 1e-14):
        azimuths = 1
    phi = (np.arange(azimuths) + 0.5) * (2 * np.pi / azimuths)
    sine = np.sqrt(np.maximum(0.0, 1 - cosine**2))
    own = np.stack(
        [
            np.outer(sine, np.cos(phi)),
            np.outer(sine, np.sin(phi)),
            np.broadcast_to(cosine[:, None], (len(cosine), azimuths)),
        ],
        axis=-1,
    ).reshape(-1, 3)
    return own @ _frame(alignment.director).T, np.repeat(share / azimuths, azimuths)


def mesh_directions(alignment: Alignment | None, symmetry: Symmetry, polar: int, azimuths: int) -> tuple[Array, Array]:
    """Return the directions of the symmetry's domain, shape (m, 3), and their shares, summing to 1.

    Without an alignment all directions are equally likely.
    """
    mesh = Mesh(symmetry.kind, polar, azimuths)
    theta, phi = np.linspace(0, 0.5 * np.pi, polar + 1)[:, None], mesh.phi()
    across = np.sin(theta)
    height = np.broadcast_to(np.cos(theta), (polar + 1, len(phi)))
    own = np.stack([across * np.cos(phi), across * np.sin(phi), height], axis=-1).reshape(-1, 3)
    directions = own @ symmetry.axes.T
    share = mesh.weights().ravel()
    return directions, share if alignment is None else share * alignment.weight(directions, symmetry)


BROAD = 0.1
"""rad: features of the weight at least as broad are left to the powder average, which knows fewer directions."""


def aligned(
    system: System, request: Request, grid: FieldGrid, shape: Shape, sample: Sample, angle: float | None = None
) -> tuple[Histograms, dict[str, object]]:
    """Return the histograms of an aligned sample's resonance fields, and what was used.

    Ordinary order is a powder average with a weight.  Near-complete order confines the directions
    so much that exact resonances are summed over the domain of the system's symmetry or, where order makes the
    weight narrow, over rings about the director.  The numbers of polar angles and of azimuths are
    doubled in turn until neither moves the spectrum by more than half the tolerance.

    Returns
    -------
    histograms : Histograms
    report : dict
    """
    alignment, symmetry = Alignment.of(sample, angle), symmetry_of(system)
    if alignment.feature >= BROAD:
        histograms, used = powder(system, request, grid, alignment.weight)
        return histograms, {"label": system.label, **vars(used), "maier_saupe": alignment.strength}
    rings = alignment.feature < NARROW
    # a single ring has no polar angles to refine; where the domain is a meridian there are no azimuths
    fixed_polar = rings and len(alignment.polar(2)[0]) == 1
    fixed_azimuths = not rings and symmetry.kind in ("axial", "point")

    def summed(polar: int, azimuths: int) -> tuple[Histograms, Array, int]:
        if rings:
            directions, share = ring_directions(alignment, polar, azimuths)
        else:
            directions, share = mesh_directions(alignment, symmetry, polar, azimuths)
        histograms = _deposited(system, request, grid, directions, share)
        return histograms, grid.render(histograms.transform(), shape), len(directions)

    polar = 1 if fixed_polar else FIRST
    azimuths = 1 if fixed_azimuths else FIRST
    histograms, spectrum, count = summed(polar, azimuths)
    errors = {"polar": 0.0 if fixed_polar else math.inf, "azimuths": 0.0 if fixed_azimuths else math.inf}
    goal = 0.5 * request.tolerance
    while max(errors.values()) > goal and count < MOST:
        which = max(errors, key=lambda name: errors[name])
        more = (2 * polar, azimuths) if which == "polar" else (polar, 2 * azimuths)
        finer, better, count = summed(*more)
        errors[which] = float(np.abs(spectrum - better).max() / max(np.abs(better).max(), 1e-300))
        (polar, azimuths), histograms, spectrum = more, finer, better
    report: dict[str, object] = {
        "label": system.label,
        "symmetry": "rings" if rings else symmetry.kind,
        "maier_saupe": alignment.strength,
        "directions": count,
        "estimated_error": max(errors.values()),
    }
    if max(errors.values()) > goal:
        report["notes"] = [f"{count} directions did not reach the tolerance"]
    return histograms, report


def _deposited(system: System, request: Request, grid: FieldGrid, directions: Array, share: Array) -> Histograms:
    """Find the resonances of many directions, in blocks, and deposit them with their shares."""
    histograms = Histograms(grid, request.scale)
    step = max(16, 1_000_000 // len(system.h0) ** 2)
    for start in range(0, len(directions), step):
        block = directions[start : start + step]
        got = find(
            system,
            block,
            request.frequency,
            (request.low, request.high),
            microwave=request.microwave,
            temperature=request.temperature,
            populations=request.populations,
        )
        deposit(histograms, system, request, got, block, got.weight * share[start + got.direction])
    return histograms
