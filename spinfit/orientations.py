"""Directions of the field: knots to diagonalise at, meshes to sum over.

Knots lie on rings of constant theta with about as many azimuths as the ring is long;
values at the knots are continued to any mesh by Fourier series in phi on each ring and cosine (or
sine) series in theta, which respect parity at the pole and at the equator.  All continuation is
linear, so it is a cached matrix.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import interpolate, linalg

Array = NDArray[np.float64]

SPLINE = 5
"""Degree of the splines over the sphere: their error falls as the sixth power of the step."""
FEW_KNOTS = 200
"""Knots up to which one matrix for all rings is faster than one for each."""


def _phi_basis(kind: str, harmonics: int, phi: Array) -> Array:
    """Return the azimuthal basis, shape (len(phi), count), for `harmonics` as in `Rings`."""
    if kind == "axial":
        return np.ones((len(phi), 1))
    if kind == "octant":
        return np.cos(2 * np.outer(phi, np.arange(harmonics + 1)))
    unit, top = (2, harmonics) if kind == "quarter" else (1, 2 * harmonics)
    m = np.arange(top + 1)
    angle = unit * np.outer(phi, m)
    return np.concatenate([np.cos(angle), np.sin(angle[:, 1:-1])], axis=1)


def _odd_harmonics(kind: str, harmonics: int) -> NDArray[np.bool_]:
    """Which columns of `_phi_basis` have odd m, hence odd parity in theta."""
    if kind != "half":
        return np.zeros(_phi_basis(kind, harmonics, np.zeros(1)).shape[1], dtype=bool)
    m = np.concatenate([np.arange(2 * harmonics + 1), np.arange(1, 2 * harmonics)])
    return m % 2 == 1


def _ring_azimuths(kind: str, intervals: int, equator: bool) -> Array:
    if kind == "axial" or intervals == 0:
        return np.zeros(1)
    if kind == "octant":
        return 0.5 * np.pi * np.arange(intervals + 1) / intervals
    if kind == "quarter":
        return np.pi * np.arange(2 * intervals) / (2 * intervals)
    count = 2 * intervals if equator else 4 * intervals
    return 2 * np.pi * np.arange(count) / (4 * intervals)


def _ring_analysis(kind: str, harmonics: int, intervals: int, equator: bool) -> Array:
    """Return the matrix from values on one ring to its harmonic amplitudes."""
    phi = _ring_azimuths(kind, intervals, equator)
    full = _phi_basis(kind, harmonics, phi)
    if kind == "axial":
        return np.ones((1, 1))
    if intervals == 0:
        used = np.zeros(1, dtype=int)
    elif kind == "octant":
        used = np.arange(intervals + 1)
    else:
        top, own = (harmonics, intervals) if kind == "quarter" else (2 * harmonics, 2 * intervals)
        cosines = np.arange(own + 1)
        sines = top + np.arange(1, own)
        if equator and kind == "half":  # opposite points of the equator are the same direction
            cosines, sines = cosines[::2], top + np.arange(2, own, 2)
        used = np.concatenate([cosines, sines])
    out = np.zeros((full.shape[1], len(phi)))
    out[used] = np.linalg.inv(full[:, used])
    return out


def stretched(angle: Array, stretch: float) -> Array:
    """Return s = (angle + w) / 2 with tan w = stretch x tan(angle), 0 to pi/2.

    A function of theta that is even about the pole and the equator is so in s too, and analytic
    where it was.  A stretch below 1 draws s out at the equator, above 1 at the pole, where
    features may be much narrower than elsewhere; the rest keeps at least half of its room.
    """
    return 0.5 * (angle + np.arctan2(stretch * np.sin(angle), np.cos(angle)))


def unstretched(s: Array, stretch: float) -> Array:
    """Return the angle at which `stretched` gives s, by bisection and Newton steps."""
    low, high = np.zeros_like(s), np.full_like(s, 0.5 * np.pi)
    for _ in range(50):
        middle = 0.5 * (low + high)
        below = stretched(middle, stretch) < s
        low, high = np.where(below, middle, low), np.where(below, high, middle)
    return np.where(s <= 0, 0.0, np.where(s >= 0.5 * np.pi, 0.5 * np.pi, 0.5 * (low + high)))


@lru_cache(maxsize=256)
def _theta_matrices(rings: int, theta: tuple[float, ...] | int, stretch: float) -> tuple[Array, Array]:
    """Return the even and the odd continuation in theta, each of shape (len(theta), rings + 1).

    `theta` is a tuple of angles, or the number of intervals of an even mesh over 0 to pi/2.
    """
    plain = np.linspace(0, 0.5 * np.pi, theta + 1) if isinstance(theta, int) else np.array(theta)
    angles = stretched(plain, stretch)
    knots = 0.5 * np.pi * np.arange(rings + 1) / rings
    k = np.arange(rings + 1)
    even = np.cos(2 * np.outer(angles, k)) @ np.linalg.inv(np.cos(2 * np.outer(knots, k)))
    odd = np.zeros_like(even)
    inner = k[1:-1]
    if len(inner):
        odd[:, 1:-1] = np.sin(2 * np.outer(angles, inner)) @ np.linalg.inv(np.sin(2 * np.outer(knots[1:-1], inner)))
    return even, odd


@dataclass(frozen=True)
class Mesh:
    """A product mesh to sum over: even in theta (0 to pi/2) and in phi, with quadrature weights.

    Attributes
    ----------
    kind : str
        Domain.
    thetas, phis : int
        Numbers of intervals.
    """

    kind: str
    thetas: int
    phis: int

    def theta_weights(self) -> Array:
        """Return Clenshaw-Curtis weights for the average over cos(theta), shape (thetas + 1,)."""
        return _clenshaw_curtis(self.thetas)

    def phi(self) -> Array:
        """Return the azimuths, shape (n,): closed for an octant, periodic otherwise."""
        if self.kind == "axial":
            return np.zeros(1)
        if self.kind == "octant":
            return np.linspace(0, 0.5 * np.pi, self.phis + 1)
        span = np.pi if self.kind == "quarter" else 2 * np.pi
        return span * np.arange(self.phis) / self.phis

    def phi_weights(self) -> Array:
        """Return the weights of the azimuths, summing to 1."""
        if self.kind == "axial":
            return np.ones(1)
        if self.kind == "octant":
            w = np.full(self.phis + 1, 1.0 / self.phis)
            w[[0, -1]] *= 0.5
            return w
        return np.full(self.phis, 1.0 / self.phis)

    def weights(self) -> Array:
        """Return the weights of all points, shape (thetas + 1, n), summing to 1."""
        return _mesh_weights(self)


@lru_cache(maxsize=64)
def _mesh_weights(mesh: Mesh) -> Array:
    return np.outer(mesh.theta_weights(), mesh.phi_weights())


@lru_cache(maxsize=64)
def _clenshaw_curtis(intervals: int) -> Array:
    """Return weights on theta = 0 ... pi/2 of functions even about the equator; they sum to 1.

    C. W. Clenshaw, A. R. Curtis, Numer. Math. 2, 197 (1960), folded at the equator.
    """
    n = 2 * intervals
    k = np.arange(intervals + 1)
    amplitude = -2.0 / (4.0 * k**2 - 1)
    amplitude[0] = 1.0
    amplitude[-1] *= 0.5
    series = np.zeros(n)
    series[: intervals + 1] = amplitude
    w = np.fft.fft(series).real[: intervals + 1] * 2 / n
    w[0] *= 0.5
    full = w.copy()
    full[:-1] *= 2
    return full / full.sum()


@dataclass(frozen=True)
class Rings:
    """Knots on rings with min(i + extra, harmonics) azimuth intervals a right angle.

    Ring i lies at s_i = (pi/2) i/rings in the coordinate of `stretched`.

    Attributes
    ----------
    kind : str
        Domain.
    rings : int
        Even, so that every second ring is a coarser set of the same knots.
    harmonics : int
        Largest number of azimuth intervals; even, or at least `rings` + `extra`.
    extra : int
        Even.  Small rings need a few azimuths more than their length asks for: the lowest
        harmonics fall only as a low power of theta towards the pole.
    stretch : float
        1 for evenly spaced rings.
    """

    kind: str
    rings: int
    harmonics: int
    extra: int = 0
    stretch: float = 1.0

    def _intervals(self, ring: int) -> int:
        return min(ring + self.extra, self.harmonics) if ring else 0

    def angles(self) -> tuple[Array, Array]:
        """Return (theta, phi) of all knots, each of shape (n,), in the domain's frame."""
        return _knot_angles(self)

    def directions(self, axes: Array) -> Array:
        """Return the knots as unit vectors in molecular axes, shape (n, 3)."""
        theta, phi = self.angles()
        s = np.sin(theta)
        return np.column_stack([s * np.cos(phi), s * np.sin(phi), np.cos(theta)]) @ axes.T

    def halved(self) -> Rings:
        """Return the coarser set of which every knot is a knot of this one."""
        top = min(self.harmonics, self.rings + self.extra)
        return Rings(self.kind, self.rings // 2, max(1, top // 2), self.extra // 2, self.stretch)

    def halved_knots(self) -> NDArray[np.intp]:
        """Return the positions of the coarser set's knots among this one's."""
        return _positions(self.halved(), self)

    def within(self, finer: Rings) -> NDArray[np.intp]:
        """Return the position of each of this set's knots among those of a finer set, -1 for none."""
        return _positions(self, finer)

    def knot_weights(self) -> Array:
        """Return the solid angle that each knot stands for, shape (n,), summing to 1."""
        return _knot_weights(self)

    def to_mesh(self, values: Array, mesh: Mesh) -> Array:
        """Continue values at the knots, shape (q, n), to a mesh: (q, thetas + 1, azimuths)."""
        even, odd = _theta_matrices(self.rings, mesh.thetas, self.stretch)
        if self.kind == "axial":
            return (values @ even.T)[:, :, None]
        basis, is_odd = _mesh_basis(self, mesh)
        amplitude = _amplitudes(self, values)
        if is_odd is None:
            return even @ amplitude @ basis.T
        out = even @ amplitude[:, :, ~is_odd] @ basis[:, ~is_odd].T
        out += odd @ amplitude[:, :, is_odd] @ basis[:, is_odd].T
        return out

    def to_mesh_locally(self, values: Array, mesh: Mesh, rows: slice = slice(None)) -> Array:
        """Continue values at the knots, shape (q, n), to some rows of a mesh by splines: (q, rows, azimuths).

        Splines converge slower than series on smooth functions, but a kink, such as sorted levels
        have where they nearly cross, stays where it is.
        """
        around, even, odd = _local_matrices(self, mesh)
        even, odd = even[rows], odd[rows]
        if self.kind == "axial":
            return (values @ even.T)[:, :, None]
        ring, column = np.empty((len(values), len(around), len(around[0]))), 0
        for i, matrix in enumerate(around):
            np.matmul(values[:, column : column + matrix.shape[1]], matrix.T, out=ring[:, i])
            column += matrix.shape[1]
        if self.kind != "half":
            return even @ ring
        opposite = np.roll(ring, mesh.phis // 2, axis=2)
        return even @ (0.5 * (ring + opposite)) + odd @ (0.5 * (ring - opposite))

    def to_finer_locally(self, values: Array, finer: Rings) -> Array:
        """Continue values at the knots, shape (q, n), to the knots of another set by splines."""
        return values @ _knots_to_knots_locally(self, finer).T

    def without_harmonics(self, values: Array, kept: int) -> Array:
        """Return values at the knots, shape (q, n), with azimuthal harmonics above `kept` removed.

        Harmonics are counted so that `harmonics` azimuth intervals resolve as many.
        """
        return values @ _truncation(self, kept).T

    def without_highest(self, values: Array) -> Array:
        """Return values at the knots, shape (q, n), with the highest quarter of all harmonics removed.

        What is missing afterwards is about what the series would miss with a quarter of the rings less.
        """
        if len(self.angles()[0]) <= FEW_KNOTS:
            return values @ _without_highest(self).T
        return _smoothed(self, values)

    def to_finer(self, values: Array, finer: Rings) -> Array:
        """Continue values at the knots, shape (q, n), to the knots of another set, (q, n')."""
        return values @ _knots_to_knots(self, finer).T


@lru_cache(maxsize=128)
def _knot_angles(rings: Rings) -> tuple[Array, Array]:
    theta, phi = [], []
    rows = unstretched(0.5 * np.pi * np.arange(rings.rings + 1) / rings.rings, rings.stretch)
    for i in range(rings.rings + 1):
        azimuths = _ring_azimuths(rings.kind, rings._intervals(i), i == rings.rings)
        phi.append(azimuths)
        theta.append(np.full(len(azimuths), rows[i]))
    return np.concatenate(theta), np.concatenate(phi)


@lru_cache(maxsize=128)
def _knot_weights(rings: Rings) -> Array:
    theta, phi = rings.angles()
    even = stretched(theta, rings.stretch)
    ring = np.rint(even * (2 * rings.rings / np.pi)).astype(int)
    count = np.bincount(ring)
    # d(cos theta) = d(cos s) sin(theta)/sin(s) dtheta/ds
    e = rings.stretch
    grow = 2 / (1 + e / (np.cos(theta) ** 2 + (e * np.sin(theta)) ** 2))
    jacobian = grow * np.where(ring > 0, np.sin(theta) / np.maximum(np.sin(even), 1e-300), grow)
    w = _clenshaw_curtis(rings.rings)[ring] * jacobian
    if rings.kind != "octant":
        return w / count[ring]
    edge = ((phi < 1e-9) | (phi > 0.5 * np.pi - 1e-9)) & (ring > 0)
    return w / np.maximum(count - 1, 1)[ring] * np.where(edge, 0.5, 1.0)


@lru_cache(maxsize=128)
def _positions(coarse: Rings, fine: Rings) -> NDArray[np.intp]:
    keys = {(round(t * 1e9), round(p * 1e9)): i for i, (t, p) in enumerate(zip(*fine.angles(), strict=True))}
    return np.array([keys.get((round(t * 1e9), round(p * 1e9)), -1) for t, p in zip(*coarse.angles(), strict=True)])


@lru_cache(maxsize=128)
def _ring_blocks(rings: Rings) -> list[Array]:
    """Return for each ring the matrix from its values to its harmonics."""
    return [
        _ring_analysis(rings.kind, rings.harmonics, rings._intervals(i), i == rings.rings)
        for i in range(rings.rings + 1)
    ]


@lru_cache(maxsize=128)
def _analysis(rings: Rings) -> Array:
    """Return the matrix, shape ((rings + 1) * count, n), from knot values to ring harmonics."""
    return linalg.block_diag(*_ring_blocks(rings))


def _amplitudes(rings: Rings, values: Array) -> Array:
    """Return ring harmonics, shape (q, rings + 1, count), of values at the knots, shape (q, n)."""
    if values.shape[1] <= FEW_KNOTS:
        return (values @ _analysis(rings).T).reshape(len(values), rings.rings + 1, -1)
    blocks = _ring_blocks(rings)
    out = np.empty((len(values), len(blocks), blocks[0].shape[0]))
    column = 0
    for i, block in enumerate(blocks):
        out[:, i] = values[:, column : column + block.shape[1]] @ block.T
        column += block.shape[1]
    return out


def _orders(kind: str, harmonics: int) -> Array:
    """Return the order of each column of `_phi_basis`, counted as azimuth intervals are."""
    if kind == "axial":
        return np.zeros(1)
    if kind == "octant":
        return np.arange(harmonics + 1.0)
    unit, top = (1.0, harmonics) if kind == "quarter" else (0.5, 2 * harmonics)
    return unit * np.concatenate([np.arange(top + 1.0), np.arange(1.0, top)])


def _smoothed(rings: Rings, values: Array) -> Array:
    """Return values at the knots, shape (q, n), without the highest quarter of harmonics in theta and in phi."""
    count = rings.rings
    angles, inner = 0.5 * np.pi * np.arange(count + 1) / count, np.arange(1, count)
    kept = np.arange(count + 1) <= 0.75 * count
    waves = np.cos(2 * np.outer(angles, np.arange(count + 1)))
    even, odd = (waves * kept) @ np.linalg.inv(waves), np.zeros((count + 1, count + 1))
    waves = np.sin(2 * np.outer(angles[inner], inner))
    odd[1:-1, 1:-1] = (waves * kept[inner]) @ np.linalg.inv(waves)
    amplitude = _amplitudes(rings, values)
    is_odd = _odd_harmonics(rings.kind, rings.harmonics)
    amplitude[:, :, ~is_odd] = even @ amplitude[:, :, ~is_odd]
    if is_odd.any():
        amplitude[:, :, is_odd] = odd @ amplitude[:, :, is_odd]
    most = min(rings.harmonics, count + rings.extra)
    amplitude *= _orders(rings.kind, rings.harmonics) <= 0.75 * most
    _, phi = rings.angles()
    basis = _phi_basis(rings.kind, rings.harmonics, phi)
    out, column = np.empty(values.shape), 0
    for i, block in enumerate(_ring_blocks(rings)):
        part = slice(column, column + block.shape[1])
        out[:, part] = amplitude[:, i] @ basis[part].T
        column = part.stop
    return out


@lru_cache(maxsize=64)
def _without_highest(rings: Rings) -> Array:
    return _smoothed(rings, np.eye(len(rings.angles()[0]))).T


def _spline_matrix(knots: Array, angles: Array, parity: int, period: float = 0.0) -> Array:
    """Return the quintic spline through values at `knots` as a matrix, shape (len(angles), len(knots)).

    Parameters
    ----------
    parity : int
        1 or -1: even or odd about the first and the last knot; 0: periodic.
    period : float
        For parity 0, rad.
    """
    n = len(knots)
    if n == 1:
        return np.ones((len(angles), 1))
    unit = np.eye(n)
    if parity == 0:
        # three periods are enough that the ends of the spline are not felt in the middle one
        x = np.concatenate([knots - period, knots, knots + period])
        y = np.concatenate([unit, unit, unit])
    else:
        low, high = knots[0], knots[-1]
        x = np.concatenate([2 * low - knots[:0:-1], knots, 2 * high - knots[-2::-1]])
        y = np.concatenate([parity * unit[:0:-1], unit, parity * unit[-2::-1]])
        if parity < 0:
            y[:, [0, -1]] = 0.0
    return interpolate.make_interp_spline(x, y, k=min(SPLINE, len(x) - 1))(angles)


def _splines_around(rings: Rings, phi: Array) -> list[Array]:
    """Return for each ring the spline through its azimuths as a matrix, shape (len(phi), knots of the ring)."""
    if rings.harmonics < rings.rings + rings.extra:  # no more azimuths than harmonics: too few for splines
        basis = _phi_basis(rings.kind, rings.harmonics, phi)
        return [basis @ block for block in _ring_blocks(rings)]
    around = []
    for i in range(rings.rings + 1):
        equator = i == rings.rings
        azimuths = _ring_azimuths(rings.kind, rings._intervals(i), equator)
        if rings.kind in ("axial", "octant") or len(azimuths) == 1:
            around.append(_spline_matrix(azimuths, phi, 1))
            continue
        period = np.pi if rings.kind == "quarter" or equator else 2 * np.pi
        around.append(_spline_matrix(azimuths, np.mod(phi, period), 0, period))
    return around


def _splines_along(rings: Rings, theta: Array) -> tuple[Array, Array]:
    """Return the even and the odd spline in theta as matrices, shape (len(theta), rings + 1)."""
    s = stretched(theta, rings.stretch)
    knots = 0.5 * np.pi * np.arange(rings.rings + 1) / rings.rings
    return _spline_matrix(knots, s, 1), _spline_matrix(knots, s, -1)


@lru_cache(maxsize=32)
def _local_matrices(rings: Rings, mesh: Mesh) -> tuple[list[Array], Array, Array]:
    return _splines_around(rings, mesh.phi()), *_splines_along(rings, np.linspace(0, 0.5 * np.pi, mesh.thetas + 1))


@lru_cache(maxsize=64)
def _knots_to_knots_locally(coarse: Rings, fine: Rings) -> Array:
    theta, phi = fine.angles()
    even, odd = _splines_along(coarse, theta)
    here = _splines_around(coarse, phi)
    if coarse.kind != "half":
        return np.concatenate([even[:, [i]] * m for i, m in enumerate(here)], axis=1)
    there = _splines_around(coarse, phi + np.pi)
    parts = zip(here, there, strict=True)
    return np.concatenate(
        [0.5 * (even[:, [i]] * (a + b) + odd[:, [i]] * (a - b)) for i, (a, b) in enumerate(parts)], axis=1
    )


@lru_cache(maxsize=64)
def _truncation(rings: Rings, kept: int) -> Array:
    """Return the matrix, shape (n, n), that removes harmonics above `kept` on every ring."""
    theta, phi = rings.angles()
    basis = _phi_basis(rings.kind, rings.harmonics, phi)
    basis = basis * (_orders(rings.kind, rings.harmonics) <= kept)
    analysis = _analysis(rings).reshape(rings.rings + 1, -1, len(theta))
    ring = np.concatenate(
        [[i] * len(_ring_azimuths(rings.kind, rings._intervals(i), i == rings.rings)) for i in range(rings.rings + 1)]
    )
    return np.einsum("nh,nhk->nk", basis, analysis[ring])


@lru_cache(maxsize=128)
def _mesh_basis(rings: Rings, mesh: Mesh) -> tuple[Array, NDArray[np.bool_] | None]:
    odd = _odd_harmonics(rings.kind, rings.harmonics)
    return _phi_basis(rings.kind, rings.harmonics, mesh.phi()), (odd if odd.any() else None)


@lru_cache(maxsize=64)
def _knots_to_knots(coarse: Rings, fine: Rings) -> Array:
    theta, phi = fine.angles()
    unique, inverse = np.unique(np.round(theta, 12), return_inverse=True)
    even, odd = (m[inverse] for m in _theta_matrices(coarse.rings, tuple(unique), coarse.stretch))
    basis = _phi_basis(coarse.kind, coarse.harmonics, phi)
    is_odd = _odd_harmonics(coarse.kind, coarse.harmonics)
    along = np.where(is_odd[None, None, :], odd[:, :, None], even[:, :, None]) * basis[:, None, :]
    return along.reshape(len(theta), -1) @ _analysis(coarse)
