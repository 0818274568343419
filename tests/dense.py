"""Dense powder sums with exact resonances: the independent reference of the engine's promise.

Every direction of a product mesh is diagonalised; nothing is continued over the sphere.  Where the
resonance field moves by less than about the line's sigma from one direction to the next, exact
roots are added, which converges exponentially.  Elsewhere, and within a few sigma of a fold, where
two roots of a pair meet and the weight diverges, the exact level differences at fixed fields are
added through a bell in frequency as wide as the step to the neighbouring directions or fields: that
errs as the fourth power of the step, without any singularity.  `converged` compares meshes until they agree.

Fields in mT, energies and frequencies as E/h in MHz, widths peak to peak of the derivative in mT.
"""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from reference import populations
from scipy.interpolate import CubicSpline
from scipy.signal import fftconvolve
from scipy.special import wofz

from spinfit.hamiltonian import System

Array = NDArray[np.float64]
SUB = np.linspace(0.0, 1.0, 9)


@dataclass(frozen=True)
class Scan:
    """What is recorded: see `spinfit.sweep.Sweep` for the words."""

    frequency: float
    fields: tuple[float, float, int]
    gaussian: float = 0.0
    lorentzian: float = 0.0
    mode: str = "perpendicular"
    temperature: float | None = None
    detect: str = "derivative"

    @property
    def sigma(self) -> float:
        """Standard deviation of the Gaussian, mT."""
        return 0.5 * self.gaussian

    @property
    def gamma(self) -> float:
        """Half width at half height of the Lorentzian, mT."""
        return 0.5 * np.sqrt(3) * self.lorentzian

    @property
    def scale(self) -> float:
        """A length over which the line is smooth, mT."""
        return float(np.hypot(self.sigma, 0.45 * self.gamma))


def product_mesh(domain: str, n_theta: int, n_phi: int) -> tuple[Array, Array, Array, float, float]:
    """Return theta, phi, shares (all (n,)) and the steps in theta and phi.

    Fejer's first rule in theta, folded at the equator; even steps in phi.  `domain` is "axial" (one
    meridian), "octant" or "hemisphere".
    """
    n = 2 * n_theta
    theta = (np.arange(n_theta) + 0.5) * np.pi / n
    k = np.arange(1, n // 2 + 1)
    share = (1 - 2 * (np.cos(2 * np.outer(theta, k)) / (4 * k**2 - 1)).sum(axis=1)) * 2 / n
    if domain == "axial":
        return theta, np.zeros(n_theta), share, np.pi / n, 0.0
    h = (0.5 * np.pi if domain == "octant" else 2 * np.pi) / n_phi
    phi = (np.arange(n_phi) + 0.5) * h
    return np.repeat(theta, n_phi), np.tile(phi, n_theta), np.repeat(share / n_phi, n_phi), np.pi / n, h


class _Sum:
    """Collects one system's resonances of one mesh on a fine grid of fields."""

    def __init__(self, system: System, scan: Scan, nodes: int) -> None:
        self.system, self.scan = system, scan
        first, last, _ = scan.fields
        reach = 7 * scan.sigma + (150 if scan.detect == "absorption" else 50) * scan.gamma
        self.low, self.high = max(first - reach, 1e-3), max(last + reach, reach - first)
        self.nodes = np.linspace(self.low, self.high, nodes)
        self.lower, self.upper = np.triu_indices(len(system.h0), 1)
        self.step = scan.scale / 40
        self.start = first - reach - 5 * self.step
        self.bins = np.zeros(int(np.ceil((last + reach - self.start) / self.step)) + 10)
        self.mirrored = self.start < 0

    def deposit(self, fields: Array, weights: Array) -> None:
        """Divide each weight between the two neighbouring bins."""
        for sign in (1, -1) if self.mirrored else (1,):
            x = (sign * fields - self.start) / self.step
            inside = (x >= 0) & (x < len(self.bins) - 1)
            i = x[inside].astype(int)
            u = x[inside] - i
            w = weights[inside]
            self.bins += np.bincount(i, w * (1 - u), len(self.bins)) + np.bincount(i + 1, w * u, len(self.bins))

    def solve(self, frames: Array, fields: Array, i: NDArray, j: NDArray) -> tuple[Array, ...]:
        """Return gap, slope, curvature, steps along theta and phi per rad, strength of a pair at each point.

        The curvature is of second order: E_i'' = 2 sum_k |<i|dH/dB|k>|^2 / (E_i - E_k).
        `frames` has shape (m, 3, 3): rows are the direction and its derivatives by theta and phi.
        """
        along = np.tensordot(frames, self.system.zeeman, 1)
        energy, v = np.linalg.eigh(self.system.h0 + fields[:, None, None] * along[:, 0])
        rows = np.arange(len(fields))
        a, b = v[rows, :, i], v[rows, :, j]
        za, zb = (self.system.zeeman @ w[:, None, :, None] for w in (a, b))
        moment = np.einsum("mk,mxk->mx", b.conj(), za[..., 0])
        mean = [np.einsum("mk,mxk->mx", w.conj(), z[..., 0]).real for w, z in ((a, za), (b, zb))]
        change = np.einsum("mdx,mx->md", frames, mean[1] - mean[0])
        parallel = np.abs(np.einsum("mx,mx->m", frames[:, 0], moment)) ** 2
        strength = parallel if self.scan.mode == "parallel" else (np.sum(np.abs(moment) ** 2, axis=1) - parallel) / 2
        if self.scan.temperature is None:
            strength = strength / energy.shape[1]
        else:
            p = populations(energy, self.scan.temperature)
            strength = strength * (p[rows, i] - p[rows, j])
        gap = energy[rows, j] - energy[rows, i] - self.scan.frequency
        bend = 0.0
        for z, level, sign in ((za, i, -1), (zb, j, 1)):
            mixed = np.abs(np.einsum("mkl,mk->ml", v.conj(), np.einsum("mx,mxk->mk", frames[:, 0], z[..., 0]))) ** 2
            apart = energy[rows, level][:, None] - energy
            bend = bend + sign * 2 * np.where(apart == 0, 0.0, mixed / np.where(apart == 0, 1.0, apart)).sum(axis=1)
        return gap, change[:, 0], np.abs(bend), fields * change[:, 1], fields * change[:, 2], strength

    def add(self, theta: Array, phi: Array, share: Array, h_theta: float, h_phi: float) -> None:
        """Add some directions."""
        s, c, sp, cp = np.sin(theta), np.cos(theta), np.sin(phi), np.cos(phi)
        frames = np.stack([[s * cp, s * sp, c], [c * cp, c * sp, -s], [-s * sp, s * cp, 0 * s]], axis=0)
        frames = frames.transpose(2, 0, 1)
        along = np.tensordot(frames, self.system.zeeman, 1)
        energy, v = np.linalg.eigh(self.system.h0 + self.nodes[:, None, None] * along[:, None, 0])
        moved = np.stack([(v.conj() * (along[:, None, d] @ v)).sum(axis=-2).real for d in range(3)])
        gap = energy[..., self.upper] - energy[..., self.lower] - self.scan.frequency
        change = moved[..., self.upper] - moved[..., self.lower]
        length = self.nodes[1] - self.nodes[0]
        f = np.stack([gap[:, :-1], gap[:, 1:]])
        g = np.stack([change[0][:, :-1], change[0][:, 1:]]) * length
        wide = np.hypot(change[1] * h_theta, change[2] * h_phi) * self.nodes[:, None]
        wide = np.maximum(wide[:, :-1], wide[:, 1:])
        hull = np.stack([f[0], f[0] + g[0] / 3, f[1] - g[1] / 3, f[1]])
        span = hull.max(axis=0) - hull.min(axis=0)
        near = (hull.min(axis=0) - 0.3 * span < 0) & (hull.max(axis=0) + 0.3 * span > 0)
        self._roots(frames, share, h_theta, h_phi, near, f, g)
        # the derivative's hull, and the largest bend of the cubic, on the safe side
        inner = 3 * (f[1] - f[0]) - g[0] - g[1]
        reach = np.stack([g[0], inner, g[1]])
        slow = np.where((reach.min(axis=0) < 0) & (reach.max(axis=0) > 0), 0, np.abs(reach).min(axis=0))
        bend = np.maximum(np.abs(inner - g[0]), np.abs(g[1] - inner)) * 2
        turning = slow * length < 2.5 * self.slowest(2 * bend, wide * length**2) + 0.2 * length * np.ptp(reach, axis=0)
        least = np.maximum(np.maximum(hull.min(axis=0), -hull.max(axis=0)) - 0.3 * span, 0)
        self._folds(frames, share, h_theta, h_phi, turning & (least < 6 * wide), f, g, wide)

    def slowest(self, bend: Array, wide: Array) -> Array:
        """Return a slope below which roots alone do not converge: too close to a fold, or neighbours too far."""
        return bend * self.scan.scale + wide / self.scan.scale

    def share_of_roots(self, slope: Array, bend: Array, wide: Array) -> Array:
        """Return 1 where roots alone converge, 0 near folds, smooth between.

        Near a fold the weight diverges, so that a sum over roots would converge as the root of the
        step only; a zone of fixed size in field leaves that to the sum over level differences.
        """
        x = np.clip(np.abs(slope) / np.maximum(self.slowest(bend, wide), 1e-9) - 1, 0, 1)
        return x**3 * (10 - 15 * x + 6 * x**2)

    def _roots(self, frames: Array, share: Array, h_theta: float, h_phi: float, near: NDArray, f: Array, g: Array):
        which, cell, pair = np.nonzero(near)
        curve = _cubic(f[:, which, cell, pair], g[:, which, cell, pair], SUB[:, None])
        sub, at = np.nonzero((curve[1:] < 0) != (curve[:-1] < 0))
        which, cell, pair = which[at], cell[at], pair[at]
        a, b = SUB[sub], SUB[sub + 1]
        ends = f[:, which, cell, pair], g[:, which, cell, pair]
        left = curve[sub, at] < 0
        for _ in range(25):
            t = 0.5 * (a + b)
            same = (_cubic(*ends, t) < 0) == left
            a, b = np.where(same, t, a), np.where(same, b, t)
        length = self.nodes[1] - self.nodes[0]
        field = self.nodes[cell] + t * length
        i, j = self.lower[pair], self.upper[pair]
        for turn in range(3):
            gap, slope, bend, by_theta, by_phi, strength = self.solve(frames[which], field, i, j)
            step = -gap / np.where(slope == 0, 1e-12, slope)
            if turn < 2:
                field = field + np.clip(step, -0.1 * length, 0.1 * length)
        good = np.abs(step) < 1e-3 * self.scan.scale
        wide = np.hypot(by_theta * h_theta, by_phi * h_phi)
        weight = share[which] * self.share_of_roots(slope, bend, wide) * strength / np.maximum(np.abs(slope), 1e-12)
        self.deposit(field[good], weight[good])

    def _folds(self, frames: Array, share: Array, h_theta: float, h_phi: float, near: NDArray, f, g, wide):
        which, cell, pair = np.nonzero(near)
        if not len(which):
            return
        step = self.scan.scale / 10
        length = self.nodes[1] - self.nodes[0]
        first = np.ceil(self.nodes[cell] / step).astype(int)
        last = np.ceil((self.nodes[cell] + length) / step).astype(int)  # the next cell's first
        number = last - first
        row = np.repeat(np.arange(len(which)), number)
        offset = np.arange(len(row)) - np.repeat(np.cumsum(number) - number, number)
        field = (first[row] + offset) * step
        which, cell, pair = which[row], cell[row], pair[row]
        gap = _cubic(f[:, which, cell, pair], g[:, which, cell, pair], (field - self.nodes[cell]) / length)
        miss = 0.02 * np.abs(f[1] - f[0])[which, cell, pair] + 0.05 * np.abs(g).max(axis=0)[which, cell, pair]
        steep = np.abs(g).max(axis=0)[which, cell, pair] / length
        close = np.abs(gap) < 6 * np.maximum(wide[which, cell, pair], steep * step) + miss
        which, pair, field = which[close], pair[close], field[close]
        for k in range(0, len(which), 20000):
            part = slice(k, k + 20000)
            at = which[part]
            gap, slope, bend, by_theta, by_phi, strength = self.solve(
                frames[at], field[part], self.lower[pair[part]], self.upper[pair[part]]
            )
            wide_here = np.hypot(by_theta * h_theta, by_phi * h_phi)
            rest = 1 - self.share_of_roots(slope, bend, wide_here)
            # Where the gap hardly changes from one direction to the next (a turning point close to the fold), it is
            # the next field that must lie within the bell.  A bell without second moment shifts nothing to fourth
            # order; sampled at 1.1 of its widths it integrates to 4e-6.
            narrow = np.maximum(0.9 * np.maximum(wide_here, np.abs(slope) * step), 1e-6)
            u = np.minimum((gap / narrow) ** 2, 1400)
            bell = (1.5 - 0.5 * u) * np.exp(-0.5 * u) / (narrow * np.sqrt(2 * np.pi))
            self.deposit(field[part], share[at] * strength * rest * bell * step)

    def spectrum(self) -> Array:
        """Return the broadened spectrum at the scan's fields."""
        scan, n = self.scan, len(self.bins)
        x = self.step * np.arange(-n, n + 1)
        # dividing a weight between two bins broadens by step^2/6, taken back here
        kernel = profile(x, np.sqrt(max(scan.sigma**2 - self.step**2 / 6, 0.0)), scan.gamma, scan.detect)
        full = fftconvolve(self.bins, kernel)[n : 2 * n]
        return CubicSpline(self.start + self.step * np.arange(n), full)(np.linspace(*scan.fields))


def _cubic(f: Array, g: Array, t: Array) -> Array:
    u = 1 - t
    return u * u * (1 + 2 * t) * f[0] + t * t * (3 - 2 * t) * f[1] + u * u * t * g[0] - t * t * u * g[1]


def profile(x: Array, sigma: float, gamma: float, detect: str) -> Array:
    """Return a line of unit area or its derivatives, from the Faddeeva function and its own derivatives."""
    order = {"absorption": 0, "derivative": 1, "second derivative": 2}[detect]
    if sigma == 0:
        z = x + 1j * gamma
        return np.real((1j / np.pi) * (1 / z, -1 / z**2, 2 / z**3)[order])
    root = sigma * np.sqrt(2)
    z = (x + 1j * gamma) / root
    w = wofz(z)
    first = -2 * z * w + 2j / np.sqrt(np.pi)
    values = (w, first, -2 * w - 2 * z * first)[order]
    return values.real / (sigma * np.sqrt(2 * np.pi)) / root**order


def dense_powder(
    systems: tuple[System, ...], scan: Scan, domain: str, n_theta: int, n_phi: int, nodes: int = 24
) -> Array:
    """Return the powder spectrum of all systems of a species from one mesh."""
    total = np.zeros(scan.fields[2])
    for system in systems:
        one = _Sum(system, scan, nodes)
        theta, phi, share, h_theta, h_phi = product_mesh(domain, n_theta, n_phi)
        n = len(system.h0)
        block = max(1, int(3e6 / (nodes * max(n * n * 3, 4 * len(one.lower)))))
        for start in range(0, len(theta), block):
            part = slice(start, start + block)
            one.add(theta[part], phi[part], share[part], h_theta, h_phi)
        total += system.weight * one.spectrum()
    return total


def converged(
    systems: tuple[System, ...],
    scan: Scan,
    domain: str,
    n_theta: int,
    n_phi: int,
    *,
    nodes: int = 24,
    enough: float = 1e-4,
    seconds: float = 60.0,
) -> tuple[Array, float, tuple[int, int]]:
    """Refine the mesh by 1.5, and the fields between which levels are cubic by 1.25, until two spectra agree.

    Returns the spectrum, its difference and the mesh.  The difference is relative to the largest value; the finer
    mesh is better than it says.  Stops once the next mesh would take longer than `seconds`.
    """
    before = dense_powder(systems, scan, domain, n_theta, n_phi, nodes)
    while True:
        n_theta, n_phi, nodes = int(1.5 * n_theta) + 1, int(1.5 * n_phi) + 1, int(1.25 * nodes) + 1
        begun = time.perf_counter()
        now = dense_powder(systems, scan, domain, n_theta, n_phi, nodes)
        took = time.perf_counter() - begun
        difference = float(np.abs(now - before).max() / np.abs(now).max())
        if difference < enough or took * 2.25 > seconds:
            return now, difference, (n_theta, n_phi)
        before = now
