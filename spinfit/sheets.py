"""Summing resonances over a mesh of directions without its grain showing.

A sheet is one resonance field as a function on the mesh.  Where neighbouring directions lie closer
in field than the line is wide, the plain weighted sum converges exponentially.  Where the field
changes faster the spectrum is smooth, and each point is smeared by a kernel that leaves smooth
things as they are.  Folds of looping transitions, where the field changes without bound, are the
subject of `spinfit.loops`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spinfit import kernels
from spinfit.errors import InputError
from spinfit.lineshape import FieldGrid, Shape
from spinfit.orientations import Mesh

Array = NDArray[np.float64]


SMEAR_LEAST, SMEAR_MOST, SMEAR_RATIO = 0.4, 10.0, 1.6
"""Smallest and largest smear in line widths, and the ratio from one class to the next."""
VARIANCE_LEAST, VARIANCE_RATIO = 0.25, 1.16
"""First rung of the ladder of Gaussian widths, in line widths, and the ratio of its variances."""
MOST_NUMBERS = 100_000_000
"""Numbers in the histograms of one species, 0.8 GB."""
HIDDEN = 1.05
"""How many times `Grain.close` the points of a branch may lie apart along either angle before they are smeared.

A product mesh aliases along each angle by itself; a branch on a mesh that was made for a plain sum must get one, since
its turning points are too coarse for a smear.
"""
ONSET = 0.3
"""Square of the distance, in units of `Grain.close`, at which half of the smear is in force."""
SMEAR_REACH = 7.0
"""How far a smear reaches, in units of itself: a window without features feels what is cut off beyond it."""


def smear_for(apart: Array, close: float, smear: float) -> Array:
    """Return the smear of points that lie `apart`; see `Grain.smear_for`."""
    ratio = (apart / close) ** 2
    return smear * apart * ratio / (ratio + ONSET)


smear_at = kernels.compiled(smear_for)
"""`smear_for` for one point, inside kernels."""


class Histograms:
    """Deposits on one grid: plain, smeared by classes of size, and broadened by classes of width.

    Parameters
    ----------
    grid : FieldGrid
    scale : float
        Smoothness length of the line, mT; smears are multiples of it.
    """

    def __init__(self, grid: FieldGrid, scale: float = 0.0) -> None:
        self.grid = grid
        self.sizes = np.empty(0)
        if scale > 0:
            number = 1 + math.ceil(math.log(SMEAR_MOST / SMEAR_LEAST) / math.log(SMEAR_RATIO))
            self.sizes = scale * SMEAR_LEAST * SMEAR_RATIO ** np.arange(number)
        self.plain = np.zeros((1 + len(self.sizes), grid.count))
        self.scale = scale
        self.variances = np.zeros(1)
        self.widened = np.zeros((1, grid.count))

    def transform(self) -> NDArray[np.complex128]:
        """Return the Fourier transform of everything deposited."""
        total = self.grid.transform_of_smeared(self.plain, np.concatenate([[0.0], self.sizes]))
        for variance, histogram in zip(self.variances, self.widened, strict=True):
            if histogram.any():
                total += self.grid.transform(histogram) * np.exp(-0.5 * variance * self.grid.wavenumbers() ** 2)
        return total

    def sheets(self, x: Array, y: Array, inverse: NDArray[np.bool_], mesh: Mesh, grain: Grain) -> None:
        """Add branches continued to a mesh, smeared where their points lie too far apart for the line to hide it.

        Parameters
        ----------
        x, y : ndarray, shape (q, thetas + 1, azimuths)
            As in `continued`.
        inverse : ndarray of bool, shape (q,)
        """
        grid = self.grid
        classes = (grain.close, grain.smear, float(self.sizes[0]), SMEAR_RATIO)
        around = {"axial": ALONE, "octant": CLOSED}.get(mesh.kind, PERIODIC)
        for sign in (1, -1) if grid.start < 0 else (1,):  # the spectrum is even in B
            place = (sign / grid.step, -grid.start / grid.step)
            deposit_sheets(self.plain, place, x, y, inverse, mesh.weights(), around, classes)

    def points(self, fields: Array, weights: Array) -> None:
        """Add resonances at `fields` with `weights`, both of one shape."""
        self._add(self.plain[0], fields, weights)

    def smeared(self, fields: Array, weights: Array, smear: Array) -> None:
        """Add resonances, each smeared over about `smear`, mT; arrays of shape (n,).

        Each goes to the two classes next to its size, in smooth shares, so that no edge between
        classes shows.
        """
        grid = self.grid
        for sign in (1, -1) if grid.start < 0 else (1,):  # the spectrum is even in B
            x = (sign * fields - grid.start) / grid.step
            kernels.deposit_smeared(self.plain, x, weights, smear, float(self.sizes[0]), SMEAR_RATIO)

    def broadened(self, fields: Array, weights: Array, variance: Array) -> None:
        """Add resonances, each with its own further Gaussian variance, mT^2; arrays of shape (n,).

        Each is shared among the four nearest of a ladder of variances by cubic interpolation,
        which reproduces a Gaussian of any width in between to about 1e-4.
        """
        self.reach_variance(float(variance.max(initial=0.0)))
        ladder = self.variances
        variance = np.clip(variance, 0.0, ladder[-1])
        first = np.clip(np.searchsorted(ladder, variance, side="right") - 2, 0, len(ladder) - 4)
        nodes = ladder[first + np.arange(4)[:, None]]
        rows, shares = [], []
        for i in range(4):
            share = weights.copy()
            for j in range(4):
                if i != j:
                    share *= (variance - nodes[j]) / (nodes[i] - nodes[j])
            rows.append(first + i)
            shares.append(share)
        columns = (np.concatenate(rows), np.concatenate([fields] * 4), np.concatenate(shares))
        self.grid.deposit_rows(self.widened, *columns)
        if self.grid.start < 0:  # the spectrum is even in B
            self.grid.deposit_rows(self.widened, columns[0], -columns[1], columns[2])

    def reach_variance(self, largest: float) -> None:
        """Lengthen the ladder of variances until it holds `largest`."""
        ladder = list(self.variances)
        if len(ladder) == 1:
            ladder += [(VARIANCE_LEAST * self.scale) ** 2 * f for f in (1.0, 2.0, 3.0)]
        while ladder[-1] < largest:
            ladder.append(ladder[-1] * VARIANCE_RATIO)
        if len(ladder) * self.grid.count > MOST_NUMBERS:
            raise InputError(
                f"{len(ladder)} classes of width on {self.grid.count} fields",
                "give a wider gaussian or lorentzian width, or a narrower range of fields",
                place="width",
            )
        if len(ladder) > len(self.variances):
            self.variances = np.array(ladder)
            extra = np.zeros((len(ladder) - len(self.widened), self.grid.count))
            self.widened = np.concatenate([self.widened, extra])

    def join(self, other: Histograms) -> None:
        """Add everything deposited in another set on the same grid and of the same scale."""
        self.plain += other.plain
        self.reach_variance(float(other.variances[-1]))
        self.widened[: len(other.widened)] += other.widened

    def _add(self, into: Array, fields: Array, weights: Array) -> None:
        into += self.grid.deposit(fields, weights)
        if self.grid.start < 0:  # the spectrum is even in B
            into += self.grid.deposit(-fields, weights)


def continued(fields: Array, weights: Array) -> tuple[Array, Array, NDArray[np.bool_]]:
    """Return what is continued in place of fields and weights, shape (p, n), and which rows are inverse.

    B^-2 and W B^-3 are polynomials of second degree in the direction for a pure Zeeman doublet;
    branches that come close to zero field are continued as they are.
    """
    inverse = fields.min(axis=1, keepdims=True) > 0.1 * fields.max(axis=1, keepdims=True)
    if inverse.all():
        square = 1 / (fields * fields)
        return square, weights * square / fields, inverse
    safe = np.where(inverse, fields, 1.0)
    square = 1 / (safe * safe)
    return np.where(inverse, square, fields), np.where(inverse, weights * square / safe, weights), inverse


def restored(x: Array, y: Array, inverse: NDArray[np.bool_]) -> tuple[Array, Array]:
    """Return fields and weights from what was continued; `inverse` broadcasts against x and y."""
    if inverse.all():
        fields = 1 / np.sqrt(np.maximum(x, 1e-30))
        return fields, y * (fields * fields * fields)
    fields = np.where(inverse, 1 / np.sqrt(np.where(inverse, np.maximum(x, 1e-30), 1.0)), x)
    return fields, np.where(inverse, y * (fields * fields * fields), y)


ALONE, CLOSED, PERIODIC = range(3)
"""What follows the last azimuth of a mesh: nothing at all, a mirror, or the first."""


def deposit_sheets_numpy(
    into: Array,
    place: tuple[float, float],
    x: Array,
    y: Array,
    inverse: NDArray[np.bool_],
    shares: Array,
    around: int,
    classes: tuple[float, float, float, float],
) -> None:
    """Add branches over a mesh to histograms by size of smear, in place.

    Parameters
    ----------
    into : ndarray, shape (r, count), C-contiguous
        As for `kernels.deposit_smeared`.
    place : (float, float)
        Places in grid steps are field x the first + the second.
    x, y : ndarray, shape (q, thetas + 1, azimuths), and inverse : ndarray of bool, shape (q,)
        As in `restored`.
    shares : ndarray, shape (thetas + 1, azimuths)
        Of the solid angle.
    around : int
        `ALONE`, `CLOSED` or `PERIODIC`.
    classes : (close, smear, least, ratio)
        Of `Grain`, and of the classes of size.
    """
    close, smear, least, ratio = classes
    for k in range(len(x)):
        fields, weights = restored(x[k], y[k], inverse[k : k + 1])
        apart = np.abs(_central(fields, -2, False))
        widest = apart.max()
        if around != ALONE:
            across = np.abs(_central(fields, -1, around == PERIODIC))
            apart, widest = np.hypot(apart, across), max(widest, across.max())
        at, weights = (fields * place[0] + place[1]).ravel(), (weights * shares).ravel()
        if widest <= HIDDEN * close:
            kernels.deposit_numpy(into[:1], np.intp(0), at, weights)
        else:
            kernels.deposit_smeared_numpy(into, at, weights, smear_for(apart, close, smear).ravel(), least, ratio)


def _compiled_sheets(into, factor, origin, x, y, inverse, shares, around, close, smear, least, ratio):
    rows, count = into.shape
    branches, thetas, phis = x.shape
    scale = 1.0 / math.log(ratio)
    field = np.empty((thetas, phis))
    apart = np.empty((thetas, phis))
    for k in range(branches):
        for i in range(thetas):
            for j in range(phis):
                field[i, j] = 1.0 / math.sqrt(max(x[k, i, j], 1e-30)) if inverse[k] else x[k, i, j]
        widest = 0.0
        for i in range(thetas):
            before, after = max(i - 1, 0), min(i + 1, thetas - 1)
            for j in range(phis):
                along = 0.5 * (field[after, j] - field[before, j])
                square = along * along
                widest = max(widest, square)
                if around != ALONE:
                    left, right = j - 1, j + 1
                    if around == CLOSED:
                        left, right = max(left, 0), min(right, phis - 1)
                    else:
                        left, right = (phis - 1 if j == 0 else left), (0 if j == phis - 1 else right)
                    across = 0.5 * (field[i, right] - field[i, left])
                    widest = max(widest, across * across)
                    square += across * across
                apart[i, j] = square
        plain = widest <= (HIDDEN * close) ** 2
        for i in range(thetas):
            for j in range(phis):
                b = field[i, j]
                at = b * factor + origin
                if not (at >= 1.0 and at < count - 3):
                    continue
                w = y[k, i, j] * shares[i, j]
                if inverse[k]:
                    w *= b * b * b
                n = int(at)
                t = kernels.taps_at(at - n)
                row = 0
                if not plain:
                    own = smear_at(math.sqrt(apart[i, j]), close, smear)
                    row, upper = kernels.smear_class(own, least, scale, rows)
                    kernels.add_at(into[row + 1], n, w * upper, t)
                    w *= 1.0 - upper
                kernels.add_at(into[row], n, w, t)


_compiled_sheets = kernels.compiled(_compiled_sheets)


def deposit_sheets(
    into: Array,
    place: tuple[float, float],
    x: Array,
    y: Array,
    inverse: NDArray[np.bool_],
    shares: Array,
    around: int,
    classes: tuple[float, float, float, float],
) -> None:
    """Do what `deposit_sheets_numpy` does, compiled where that is possible."""
    if not kernels.COMPILED:
        deposit_sheets_numpy(into, place, x, y, inverse, shares, around, classes)
        return
    x, y = np.ascontiguousarray(x), np.ascontiguousarray(y)
    _compiled_sheets(into, *place, x, y, inverse, shares, around, *classes)


def spacing(values: Array, mesh: Mesh) -> Array:
    """Return how far apart neighbouring points of a mesh lie in value, same shape (..., T+1, F)."""
    along = np.abs(_central(values, -2, False))
    if mesh.kind == "axial":
        return along
    around = np.abs(_central(values, -1, mesh.kind != "octant"))
    return np.hypot(along, around)


def widest(values: Array, mesh: Mesh) -> Array:
    """Return how far apart neighbours along either angle lie in value at the most, shape of the leading axes."""
    return np.abs(differences(values, mesh)).max(axis=(0, -2, -1))


def differences(values: Array, mesh: Mesh) -> Array:
    """Return the signed central differences along theta and phi, shape (2, ..., T+1, F)."""
    along = _central(values, -2, False)
    if mesh.kind == "axial":
        return np.stack([along, np.zeros_like(along)])
    return np.stack([along, _central(values, -1, mesh.kind != "octant")])


def _central(values: Array, axis: int, periodic: bool) -> Array:
    if periodic:
        return 0.5 * (np.roll(values, -1, axis) - np.roll(values, 1, axis))
    v = np.moveaxis(values, axis, 0)
    out = np.empty_like(v)
    out[1:-1] = 0.5 * (v[2:] - v[:-2])
    # even about both ends: the difference there is a curvature, half a step away
    out[0], out[-1] = 0.5 * (v[1] - v[0]), 0.5 * (v[-1] - v[-2])
    return np.moveaxis(out, 0, axis)


def point_share(apart: Array, allowed: float) -> Array:
    """Return the share of a point that the sum over points takes: 1 for close neighbours, 0 for far ones.

    Parameters
    ----------
    apart : ndarray
        Distance in field to the neighbours, mT.
    allowed : float
        Distance up to which the sum over points is accurate, mT.
    """
    x = np.clip((apart / allowed - 0.4) / 0.6, 0.0, 1.0)
    return 1.0 - x * x * x * (10 + x * (6 * x - 15))


@dataclass(frozen=True)
class Grain:
    """How far apart in field neighbouring points may lie, mT, for the tolerance in force.

    Attributes
    ----------
    close : float
        Up to here the line itself hides the grain.
    far : float
        Up to here a smear of the allowed size does.
    smear : float
        Smear per distance that hides it.
    """

    close: float
    far: float
    smear: float

    @classmethod
    def of(cls, shape: Shape, tolerance: float) -> Grain:
        """Derive the distances from a line shape.

        A sum over points d apart aliases by the line's transform at k = 2 pi/d, which is set to
        a tenth of the tolerance (the derivative lifts it by about 2 pi sigma/d).
        """
        level = math.log(10 / tolerance)
        a, b = 2 * (math.pi * shape.sigma) ** 2, 2 * math.pi * shape.gamma
        close = (b + math.sqrt(b * b + 4 * a * level)) / (2 * level)
        x = level
        for _ in range(20):  # exp(-x)(1 + x + x^2/2) at the same level
            x = level + math.log(1 + x + 0.5 * x * x)
        smear = math.sqrt(2 * x) / (2 * math.pi)
        return cls(close, SMEAR_MOST * shape.scale / smear, smear)

    def smear_for(self, apart: Array) -> Array:
        """Return the smear of points whose neighbours lie `apart`, mT.

        It sets in slowly: what a varying smear does to a density is the sixth derivative of the
        density times the sixth power of the smear, so a quick onset would be a feature itself.
        """
        return smear_for(apart, self.close, self.smear)
