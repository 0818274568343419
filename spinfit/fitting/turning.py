"""What a measured trace shows by itself, before any model: noise, turning points, widths.

Physics-free but for g = h nu / muB B.  Fields in mT, frequencies in MHz.  Maxima and minima are looked
for at every scale: the trace is smoothed by Gaussians of doubling width, which never make an extremum
that was not there (A. P. Witkin, Int. Joint Conf. Artificial Intelligence 1983, 1019, from memory), and
what stands out of the noise that is left counts at the narrowest scale that shows it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal as filters
from scipy import special

from spinfit.fitting.noise import noise_level
from spinfit.fitting.smoothing import gaussian
from spinfit.units import g_of

Array = NDArray[np.float64]

# An extremum counts when its prominence passes this many standard deviations of the smoothed noise: the
# highest of 2000 points of noise already stands 7 above the lowest ...
SIGNIFICANT = 9.5
# ... and this part of the largest peak-to-peak height.
SMALLEST_PART = 0.004
# A scale's own extrema closer than this many of its standard deviations to one already found are its image.
NEIGHBOURHOOD = 3.0
# Where the curve merely returns to the baseline between two lines it has an extremum too; nothing turns there.
RETURN = 0.1
# Extrema of one line are at most this many times their own width apart (1.3 times for a Gaussian).
FARTHEST = 6.0
# Noise of all frequencies this many times that of neighbouring points is slow noise; less may be the lines' own.
SLOW_NOISE = 1.5
# Common practice: over-modulation sets in at about a third of the narrowest peak-to-peak width.
LARGEST_MODULATION = 1 / 3
# Lower quartile of |x| of a standard normal deviate.
_QUARTILE = float(special.ndtri(0.625))
# Variance of the difference of white noise smoothed by s and by 2s, 1 + 1/2 - 2 sqrt(2/5) of that at s, summed
# over octaves.
_OCTAVES = 2 * (1.5 - 2 * np.sqrt(0.4))


@dataclass(frozen=True)
class TurningPoint:
    """One maximum, minimum or crossing of the baseline.

    Attributes
    ----------
    kind : str
        "maximum", "minimum" or "crossing".
    field, field_uncertainty : float
        mT; the uncertainty is that of the noise alone.
    height : float
        Above the baseline, in the signal's unit; 0 for a crossing.
    g, g_uncertainty : float or None
        None without a frequency.
    """

    kind: str
    field: float
    field_uncertainty: float
    height: float
    g: float | None = None
    g_uncertainty: float | None = None


@dataclass(frozen=True, eq=False)
class Analysis:
    """What `analyse` found.

    Attributes
    ----------
    noise : float
        Standard deviation of the points, in the signal's unit, slow noise included where there is some.
    white_noise : float
        What neighbouring points differ by; less than `noise` where noise hangs together over points.
    peak_to_peak : float
        Largest minus smallest height of a turning point.
    signal_to_noise : float
        Largest height above or below the baseline over the noise.
    turning_points : tuple of TurningPoint
        By field.
    narrowest : float or None
        Smallest distance of a maximum and a minimum with a crossing between them, mT: the peak-to-peak
        width of the narrowest line of a derivative.
    """

    noise: float
    white_noise: float
    peak_to_peak: float
    signal_to_noise: float
    turning_points: tuple[TurningPoint, ...]
    narrowest: float | None


@dataclass(frozen=True)
class _Extremum:
    index: int
    kind: str
    scale: float  # of the smoothing, in points
    width: float  # twice the nearer flank's distance where the top has lost 0.3 of its prominence, in points
    prominence: float


def _smooth(values: Array, scale: float) -> Array:
    return gaussian(values, scale, mode="reflect")


def _noise_left(scale: float) -> float:
    """Return what part of white noise a Gaussian of `scale` points leaves: the norm of its weights."""
    if scale == 0:
        return 1.0
    x = np.arange(-int(5 * scale) - 1, int(5 * scale) + 2)
    weights = np.exp(-0.5 * (x / scale) ** 2)
    return float(np.linalg.norm(weights) / weights.sum())


def _scales(points: int) -> list[float]:
    """Return the smoothing scales, in points: 0, 1, 2, 4, ... up to a thirtieth of the trace."""
    return [0.0] + [2.0**k for k in range(20) if 2.0**k <= points / 30]


def noise_by_scale(values: Array, white: float) -> dict[float, float]:
    """Return the standard deviation of the noise that is left at each scale.

    A detector's time constant makes noise hang together over neighbouring points, and smoothing then
    takes little of it away.  So noise is measured octave by octave, as what two scales differ by; the
    lower quartile of its size keeps the lines out, unless they fill three quarters of the trace.  Octaves
    of white noise overlap: their variances sum to `_OCTAVES` of that of all coarser scales together.
    Never less than white noise of standard deviation `white` would leave.
    """
    scales = _scales(values.size)
    smooth = [_smooth(values, scale) for scale in [*scales, 2 * scales[-1] or 1.0]]
    out: dict[float, float] = {}
    variance = 0.0
    for k in range(len(scales) - 1, -1, -1):
        octave = np.abs(smooth[k] - smooth[k + 1])
        if scales[k]:
            variance += (float(np.quantile(octave, 0.25)) / _QUARTILE) ** 2 / _OCTAVES
            total = float(np.sqrt(variance))
        else:
            total = float(np.sqrt(variance + white**2 * (1 - _noise_left(1.0) ** 2)))
        out[scales[k]] = max(total, white * _noise_left(scales[k]))
    return dict(sorted(out.items()))


def significant(points: float) -> float:
    """Return by how many standard deviations an extremum must stand out among so many points of noise.

    Of n normal deviates fewer than n exp(-z^2 / 2) exceed z, so that few are beyond z = sqrt(2 ln n) on either side.
    """
    return max(SIGNIFICANT, 2 * float(np.sqrt(2 * np.log(max(points, 1.0)))) + 1)


def _extrema(values: Array, left: dict[float, float]) -> list[_Extremum]:
    """Return every extremum that stands out of the noise, at the narrowest scale that shows it."""
    found: list[_Extremum] = []
    smallest = SMALLEST_PART * float(np.ptp(_smooth(values, 1.0)))
    for scale, noise in left.items():
        smooth = _smooth(values, scale)
        prominence = max(smallest, significant(values.size / max(scale, 1.0)) * noise, 1e-300)
        new: list[_Extremum] = []
        for sign, kind in ((1.0, "maximum"), (-1.0, "minimum")):
            index, more = filters.find_peaks(sign * smooth, prominence=prominence, width=0, rel_height=0.3)
            flanks = 2 * np.minimum(index - more["left_ips"], more["right_ips"] - index)
            for k, width, height in zip(index, flanks, more["prominences"], strict=True):
                if all(abs(k - old.index) > NEIGHBOURHOOD * scale for old in found):
                    new.append(_Extremum(int(k), kind, scale, float(width), float(height)))
        found += new
    return sorted(found, key=lambda e: e.index)


def _alternating(extrema: list[_Extremum], values: Array) -> list[_Extremum]:
    """Keep the outermost of maxima (minima) that follow each other: one flat top, met at two scales."""
    kept: list[_Extremum] = []
    for extremum in extrema:
        if kept and kept[-1].kind == extremum.kind:
            scale = max(kept[-1].scale, extremum.scale)
            smooth = _smooth(values, scale) * (1 if extremum.kind == "maximum" else -1)
            if smooth[extremum.index] <= smooth[kept[-1].index]:
                continue
            kept.pop()
        kept.append(extremum)
    return kept


def _vertex(field: Array, values: Array, extremum: _Extremum, noise: float) -> tuple[float, float, float]:
    """Return field, its standard uncertainty and value of an extremum, by a parabola through its top."""
    half = max(1 if extremum.width < 7 else 2, round(max(0.28 * extremum.width, 1.2 * extremum.scale)))
    part = slice(max(extremum.index - half, 0), min(extremum.index + half + 1, field.size))
    x = field[part] - field[extremum.index]
    design = np.stack([np.ones_like(x), x, x**2], axis=1)
    c = np.linalg.lstsq(design, values[part], rcond=None)[0]
    reach = float(np.ptp(x)) / 2
    shift = -c[1] / (2 * c[2]) if c[2] else np.inf
    if abs(shift) > reach / 2 or (c[2] < 0) != (extremum.kind == "maximum"):
        return float(field[extremum.index]), reach, float(c[0])  # too flat for more than the point itself
    gradient = np.array([0.0, -1 / (2 * c[2]), c[1] / (2 * c[2] ** 2)])
    sigma = noise * float(np.sqrt(gradient @ np.linalg.pinv(design.T @ design) @ gradient))
    return float(field[extremum.index] + shift), min(sigma, reach), float(c[0] - c[1] ** 2 / (4 * c[2]))


def _crossing(
    field: Array, height: Array, as_white: dict[float, float], first: _Extremum, second: _Extremum
) -> tuple | None:
    """Return field and uncertainty of a line's centre between two extrema of opposite sign, or None.

    A line's centre is steep and its extrema are about as far apart as each is wide: where the slope at
    the crossing is less than the mean slope between the extrema, or these lie far apart, two different
    lines were met.
    """
    start, stop = first.index, second.index
    if stop - start > FARTHEST * max(first.width, second.width, first.scale, second.scale):
        return None
    scale = max(first.scale, second.scale, 1.0 if stop - start > 12 else 0.0)
    part = _smooth(height, scale)[start : stop + 1]
    signs = np.flatnonzero(np.sign(part[:-1]) != np.sign(part[1:]))
    if part[0] * part[-1] >= 0 or signs.size == 0:
        return None
    k = int(signs[signs.size // 2])
    reach = max(1, (stop - start) // 10)
    a, b = max(k - reach, 0), min(k + 1 + reach, part.size - 1)
    spacing = field[1] - field[0]
    slope, mean_slope = (part[b] - part[a]) / (b - a), (part[-1] - part[0]) / (part.size - 1)
    if slope * np.sign(mean_slope) < 0.9 * abs(mean_slope):
        return None
    where = field[start + k] - part[k] / (part[k + 1] - part[k]) * spacing
    return float(where), float(as_white[scale] * _noise_left(scale) / abs(slope) * spacing)


def _baseline(field: Array, values: Array) -> Array:
    """Return the straight line through the medians of the first and the last twentieth."""
    edge = max(3, field.size // 20)
    first, last = np.median(values[:edge]), np.median(values[-edge:])
    here, there = np.mean(field[:edge]), np.mean(field[-edge:])
    return first + (last - first) * (field - here) / (there - here)


def analyse(
    field: Array,
    signal: Array,
    *,
    frequency: float | None = None,
    detect: str = "derivative",
    noise: float | None = None,
) -> Analysis:
    """Look at a trace: its noise, its turning points and the g values there.

    Parameters
    ----------
    field, signal : ndarray, shape (n,)
        Field in mT, strictly increasing; at least 8 points.
    frequency : float, optional
        MHz; without it no g.
    detect : str
        As in `spinfit.sweep.Sweep`: crossings are looked for in a "derivative" only.
    noise : float, optional
        Standard deviation of white noise; by default `spinfit.fitting.noise.noise_level`.
    """
    grid = np.linspace(field[0], field[-1], len(field))
    values = np.interp(grid, field, signal)
    white = noise_level(np.asarray(signal, float)) if noise is None else noise
    left = noise_by_scale(values, white)
    # White noise that leaves as much at a scale: for uncertainties of what is found there.
    as_white = {scale: sigma / _noise_left(scale) for scale, sigma in left.items()}
    baseline = _baseline(grid, values)
    points: list[TurningPoint] = []
    found: list[_Extremum] = []
    for extremum in _alternating(_extrema(values, left), values):
        where, sigma, top = _vertex(grid, values, extremum, as_white[extremum.scale])
        height = top - float(np.interp(where, grid, baseline))
        if abs(height) >= RETURN * extremum.prominence:
            found.append(extremum)
            points.append(_with_g(extremum.kind, where, sigma, height, frequency))
    heights = [point.height for point in points] or [0.0]
    narrowest: list[float] = []
    for k in range(len(found) - 1 if detect == "derivative" else 0):
        crossing = _crossing(grid, values - baseline, as_white, found[k], found[k + 1])
        if crossing is not None:
            points.append(_with_g("crossing", *crossing, 0.0, frequency))
            narrowest.append(points[k + 1].field - points[k].field)
    total = left[0.0] if left[0.0] > SLOW_NOISE * white else white
    largest = max(abs(h) for h in heights)
    return Analysis(
        noise=total,
        white_noise=white,
        peak_to_peak=max([*heights, 0.0]) - min([*heights, 0.0]),
        signal_to_noise=largest / total if total > 0 else 0.0,
        turning_points=tuple(sorted(points, key=lambda point: point.field)),
        narrowest=min(narrowest, default=None),
    )


def _with_g(kind: str, field: float, uncertainty: float, height: float, frequency: float | None) -> TurningPoint:
    """Add the g value of a field, where it has one."""
    if frequency is None or field <= 0:
        return TurningPoint(kind, field, uncertainty, height)
    g = g_of(field, frequency)
    return TurningPoint(kind, field, uncertainty, height, g, g * uncertainty / field)


def largest_modulation(narrowest: float) -> float:
    """Return the peak-to-peak modulation, mT, from which the narrowest line is broadened."""
    return LARGEST_MODULATION * narrowest
