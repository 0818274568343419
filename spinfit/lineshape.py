"""From resonances to a spectrum: deposit on a field grid, one Fourier product, spline sampling.

Resonances are deposited with cubic B-splines on an even grid of the program's own; the transform
is divided by the spline's, multiplied by the line shape's (Gaussian, Lorentzian and their product,
the exact Voigt profile), by the detection's (derivatives, finite modulation) and by the microwave
phase, and the result is read off at any fields by an interpolating cubic spline.  The grid follows
from the line width and the tolerance alone, so values depend neither on the points asked for nor
on the window.

Conventions: f(k) = int f(B) exp(-ikB) dB; chi'' has unit area; chi' = x/(1+x^2) has the sign of
B - B0, so its transform is -i sgn(k) times that of chi''.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import fft, special

from spinfit import kernels

Array = NDArray[np.float64]

GAUSSIAN_FWHM = math.sqrt(2 * math.log(2))
"""FWHM over peak-to-peak width of a Gaussian, 1.17741."""
LORENTZIAN_FWHM = math.sqrt(3)
"""FWHM over peak-to-peak width of a Lorentzian."""

_POWER = {"absorption": 2, "derivative": 3, "second derivative": 4}


@dataclass(frozen=True)
class Shape:
    """Line shape and detection common to all resonances of a species.

    Attributes
    ----------
    sigma : float
        Standard deviation of the Gaussian, mT (half its peak-to-peak width).
    gamma : float
        Half width at half height of the Lorentzian, mT (sqrt(3)/2 of its peak-to-peak width).
    detect : str
        "absorption", "derivative" or "second derivative".
    modulation : float
        Peak-to-peak field modulation, mT.
    phase : float
        Microwave phase, rad.
    """

    sigma: float
    gamma: float
    detect: str = "derivative"
    modulation: float = 0.0
    phase: float = 0.0

    @classmethod
    def from_widths(cls, gaussian: float, lorentzian: float, **detection: object) -> Shape:
        """Build from peak-to-peak widths of the derivative, mT."""
        return cls(0.5 * gaussian, 0.5 * LORENTZIAN_FWHM * lorentzian, **detection)

    @property
    def scale(self) -> float:
        """A length, mT, over which the profile is smooth: about sigma of the whole line."""
        return math.hypot(self.sigma, 0.45 * self.gamma)

    def reach(self, tolerance: float) -> float:
        """Return the distance, mT, beyond which a line's tail is below a tenth of `tolerance` of its top."""
        mixed = math.sin(self.phase) != 0
        power = _POWER[self.detect] - mixed
        tail = (0.1 * tolerance) ** (-1.0 / power)
        gauss = self.sigma * math.sqrt(2 * math.log(100 / tolerance))
        return gauss + min(tail, 1e4) * (self.gamma + mixed * self.sigma) + 0.5 * self.modulation

    def transform(self, k: Array) -> NDArray[np.complex128]:
        """Return the Fourier transform of shape and detection at k >= 0, shape (n,), 1/mT."""
        profile = np.exp(-0.5 * (self.sigma * k) ** 2 - self.gamma * k)
        amplitude = 0.5 * self.modulation
        if self.detect == "absorption":
            detection: Array | complex | NDArray = special.j0(k * amplitude) if amplitude else 1.0
        elif self.detect == "derivative":
            detection = 2j * special.j1(k * amplitude) / amplitude if amplitude else 1j * k
        else:
            detection = -8 * special.jv(2, k * amplitude) / amplitude**2 if amplitude else -(k**2)
        out = profile * detection * (np.exp(-1j * self.phase) if self.phase else 1.0)
        out = np.asarray(out, dtype=complex)
        if self.phase:
            out[0] = profile[0] * np.asarray(detection).reshape(-1)[0] * math.cos(self.phase)
        return out


def voigt_absorption(x: Array, sigma: float, gamma: float) -> NDArray[np.complex128]:
    """Return chi'' + i chi' of a line of unit area at distance x from its centre, 1/mT.

    The slow, exact form by the Faddeeva function (`scipy.special.wofz`); a pure Lorentzian for
    sigma = 0.
    """
    if sigma == 0:
        w = 1j / (np.pi * (x + 1j * gamma))
        return w.real + 1j * w.imag
    z = (x + 1j * gamma) / (sigma * math.sqrt(2))
    return special.wofz(z) / (sigma * math.sqrt(2 * np.pi))


@dataclass(frozen=True)
class FieldGrid:
    """The program's own even field grid: `count` points from `start` in steps of `step`, mT.

    It covers the window, the reach of the lines on both sides and enough padding that the
    periodic images of the Fourier product fall outside the window.
    """

    start: float
    step: float
    count: int

    @classmethod
    def covering(
        cls, low: float, high: float, scale: float, reach: float, tolerance: float, beyond: float = 0.0
    ) -> FieldGrid:
        """Choose the grid for a window, a smoothness length and a line's reach, all mT.

        `beyond` is how far past the reach resonances are deposited all the same.

        The step is an eighth of the narrowest peak-to-peak width at the default tolerance: an
        interpolating cubic spline then misses a Gaussian derivative by less than 2e-4 of its top,
        and the error falls as the fourth power of the step.
        """
        step = 0.25 * scale * min(1.1, max(0.3, (tolerance / 1e-3) ** 0.25))
        count = math.ceil((high - low + 3 * (reach + beyond)) / step) + 16
        return cls(low - reach - beyond - 4 * step, step, fft.next_fast_len(count, real=True))

    def deposit(self, fields: Array, weights: Array) -> Array:
        """Return the histogram, shape (count,), of weighted resonances; those off the grid are left out."""
        out = np.zeros((1, self.count))
        self.deposit_rows(out, np.intp(0), np.ravel(fields), np.ravel(weights))
        return out[0]

    def deposit_rows(self, into: Array, rows: NDArray[np.intp] | np.intp, fields: Array, weights: Array) -> None:
        """Add weighted resonances to one of several histograms each, in place.

        Parameters
        ----------
        into : ndarray, shape (r, count)
        rows : ndarray of int, shape (n,), or one int
        fields, weights : ndarray, shape (n,)
        """
        kernels.deposit(into, rows, (fields - self.start) / self.step, weights)

    def wavenumbers(self) -> Array:
        """Return the non-negative wavenumbers of the real transform, shape (count//2 + 1,), rad/mT."""
        return 2 * np.pi * fft.rfftfreq(self.count, self.step)

    def transform(self, histogram: Array, order: int = 0) -> NDArray[np.complex128]:
        """Return the Fourier transform of a deposit, shape (count//2 + 1,), the spline divided out.

        Parameters
        ----------
        histogram : ndarray, shape (count,)
        order : int
            0 as it stands, 1 integrated once over the field, 2 twice.
        """
        running = histogram
        for _ in range(order):
            running = np.cumsum(running)
        out = fft.rfft(running) * _of_splines(self.count)[0]
        return out * _integration(self.wavenumbers(), self.step) ** order if order else out

    def transform_of_smeared(self, histograms: Array, sizes: Array) -> NDArray[np.complex128]:
        """Return the transform, shape (count//2 + 1,), of the sum of deposits, each smeared by its size.

        Parameters
        ----------
        histograms : ndarray, shape (r, count)
        sizes : ndarray, shape (r,)
            mT; see `smear_kernel`.
        """
        rows = np.flatnonzero(histograms.any(axis=1))
        if not len(rows):
            return np.zeros(self.count // 2 + 1, dtype=complex)
        found = fft.rfft(histograms[rows])
        for row, size in enumerate(sizes[rows]):
            if size > 0:
                found[row] *= _of_smear(self.count, float(size / self.step))
        return found.sum(axis=0) * _of_splines(self.count)[0]

    def render(self, transform: NDArray[np.complex128], shape: Shape) -> Array:
        """Return the spline coefficients, shape (count,), of a transform broadened by a shape."""
        return self.spline(transform * shape.transform(self.wavenumbers()))

    def spline(self, transforms: NDArray[np.complex128]) -> Array:
        """Return the spline coefficients, shape (..., count), of the transforms of spectra."""
        return fft.irfft(transforms * (_of_splines(self.count)[1] / self.step), self.count)

    def coefficients(self, histograms: dict[int, Array], shape: Shape) -> Array:
        """Return the spline coefficients, shape (count,), of the spectrum of deposits by order."""
        return self.render(sum(self.transform(h, order) for order, h in histograms.items()), shape)

    def sample(self, coefficients: Array, fields: Array) -> Array:
        """Return the values at any fields, shape (..., n), of splines, shape (..., count)."""
        x = (fields - self.start) / self.step
        i = np.clip(x.astype(np.intp), 1, self.count - 3)
        taps = kernels.taps(x - i)
        return sum(taps[k] * coefficients.take(i + (k - 1), axis=-1) for k in range(4))


def smear_kernel(k: Array, size: float) -> Array:
    """Return the transform of a smoothing kernel whose second and fourth moments vanish.

    exp(-x)(1 + x + x^2/2) with x = (k size)^2/2 differs from 1 by x^3/6: what is smooth over `size`
    passes unchanged, while the grain of points up to about `size` apart is gone.
    """
    x = 0.5 * (k * size) ** 2
    return np.exp(-x) * (1 + x * (1 + 0.5 * x))


@lru_cache(maxsize=32)
def _of_splines(count: int) -> tuple[Array, Array]:
    """Return what divides out the transform of depositing splines, and of the values of sampling ones."""
    turn = fft.rfftfreq(count)  # k step / 2 pi
    return np.sinc(turn) ** -4, 3 / (2 + np.cos(2 * np.pi * turn))


@lru_cache(maxsize=64)
def _of_smear(count: int, size: float) -> Array:
    """Return `smear_kernel` on a grid; `size` in steps, so that grids of one tolerance share it."""
    return smear_kernel(2 * np.pi * fft.rfftfreq(count), size)


def _integration(k: Array, step: float) -> NDArray[np.complex128]:
    """Return exact integration over running summation, (1 - exp(-ik step)) / ik, shape of k, mT."""
    half = 0.5 * k * step
    return step * np.sinc(half / np.pi) * np.exp(-1j * half)
