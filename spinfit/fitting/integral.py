"""The double integral of a trace: baseline, integration, and what is doubtful about it.

Every step (cumulative trapezoids, a polynomial through the line-free ends, the last integration) is
linear in the trace, so the integral is a sum of points times known weights, and the noise of the
trace goes through the same weights.  The baseline is taken off the *absorption*, that is, after the
integrations that lead to it: there it must vanish at both ends, which ties the constant of
integration as well.  A polynomial of order n in a derivative is one of order n + 1 in the absorption.

What a double integral cannot know is how much of the lines' tails lies outside the sweep, and how
much of those inside the baseline has taken away.  The same weights applied to Gaussian and to
Lorentzian lines of the trace's own width, where its own absorption is, tell both ends of that doubt.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse, special
from scipy.sparse import linalg as sparse_linalg

from spinfit.errors import InputError
from spinfit.fitting.noise import noise_level, residual_noise
from spinfit.fitting.turning import Analysis, analyse

Array = NDArray[np.float64]

ASYMMETRIC = "asymmetric"
# Integrations that lead from each kind of trace to the absorption.
_TO_ABSORPTION = {"absorption": 0, "derivative": 1, "second derivative": 2}
# Part of the sweep at each end that holds no line, unless the user says where there is none.
_END = 0.1
# Weight of points above an asymmetric baseline; P. H. C. Eilers, H. F. M. Boelens (2005, report, from
# memory) recommend 0.001 to 0.1.
_ABOVE = 0.01
_MOST_ROUNDS = 50
# Lines stand for the absorption at this many places of equal area.
_PLACES = 40
# Extreme baselines are as likely as any between (JCGM 100:2008, 4.3.7).
_RECTANGULAR = math.sqrt(3.0)
# Peak-to-peak widths from its centre at which nothing is left of a Gaussian line (5 standard deviations).
_GONE = 2.5
# Points that must be left to an end for a polynomial through it.
_FEWEST = 4


@dataclass(frozen=True)
class Baseline:
    """How the baseline of a trace is found.

    Attributes
    ----------
    order : int or "asymmetric"
        Of the polynomial in the trace as measured; or asymmetric least squares on the absorption.
    ranges : tuple of (low, high)
        Fields without lines, mT; empty for a tenth of the sweep at each end.
    smoothness : float or None
        Of an asymmetric baseline, mT: waves shorter than that belong to the lines.  By default the length of the sweep.
    """

    order: int | str = 1
    ranges: tuple[tuple[float, float], ...] = ()
    smoothness: float | None = None


@dataclass(frozen=True, eq=False)
class Integral:
    """A double integral (of a derivative; as many integrations as lead to an area) with its doubts.

    Attributes
    ----------
    value : float
        Signal's unit times mT for each integration.
    noise, baseline, truncation : float
        Standard uncertainties, in the unit of `value`: from the trace's noise; from the choice of a baseline;
        from tails beyond the sweep and under the baseline.
    lost : (float, float)
        Part of the true area that is missing if the lines are Gaussian; if they are Lorentzian.
    tails : float
        How much of a Lorentzian's tails the trace leaves room for at most, 0 to 1.
    others : tuple of (str, float)
        The integral with other baselines, by what they are.
    centre : float
        Mean field of the absorption, mT.
    width : float
        Peak-to-peak width of the narrowest line, mT.
    absorption : ndarray, shape (n,)
        Baseline taken off, at `field`.
    field : ndarray, shape (n,)
    notes : tuple of (code, text)
    """

    value: float
    noise: float
    baseline: float
    truncation: float
    lost: tuple[float, float]
    tails: float
    others: tuple[tuple[str, float], ...]
    centre: float
    width: float
    field: Array
    absorption: Array
    notes: tuple[tuple[str, str], ...]

    @property
    def uncertainty(self) -> float:
        """Standard uncertainty of all three in quadrature."""
        return math.hypot(self.noise, self.baseline, self.truncation)


def double_integral(
    field: Array, signal: Array, *, detect: str = "derivative", baseline: Baseline = Baseline(), name: str = "trace"
) -> Integral:
    """Integrate a trace to the area of its absorption.

    Parameters
    ----------
    field, signal : ndarray, shape (n,)
        Field in mT, strictly increasing; at least 16 points, glitches left out.
    detect : str
        As in `spinfit.sweep.Sweep`: a derivative is integrated twice, an absorption once.
    baseline : Baseline
    name : str
        What to call the trace in notes and errors.

    Raises
    ------
    InputError
        For too few points, or ranges of the baseline that hold too few of them.
    """
    field, signal = np.asarray(field, dtype=float), np.asarray(signal, dtype=float)
    if field.size < 16:
        raise InputError(f"{field.size} points", "a double integral needs 16 or more", place=name)
    steps = _TO_ABSORPTION[detect]
    raised = signal - signal.mean()  # keeps rounding small; a constant is the baseline's
    absorption = _integrated(raised, field, steps)
    ends = _ends(field, baseline.ranges, name)
    chosen = _weights(field, absorption, steps, baseline, ends, name)
    value = float(chosen.weights @ raised)
    white = noise_level(signal)
    others, moves = _other_baselines(field, raised, absorption, steps, baseline, name, chosen.weights, white)
    flat = absorption - chosen.under
    seen = analyse(field, signal, detect=detect)
    width = _width(seen, field, flat * math.copysign(1.0, value or 1.0))
    noise = _noise_through(chosen.weights, field, signal, ends, steps, baseline)
    upright = flat * math.copysign(1.0, value or 1.0)
    width = max(width, 2 * float(np.median(np.diff(field))))
    places = _places(field, upright, width, seen)

    def missed(lorentzian: bool) -> float:
        # The same recipe on lines alone: an asymmetric baseline follows what it is put under.
        lines = _lines(field, places, width, steps, lorentzian)
        same = _weights(field, _integrated(lines, field, steps), steps, baseline, ends, name)
        return 1 - float(same.weights @ lines)

    lost = missed(False), missed(True)
    order = 1 if baseline.order == ASYMMETRIC else int(baseline.order)
    tails = _tails(field, signal, places, width, steps, value, order)
    most = max(abs(lost[0]), min(tails * max(lost[1], 0.0), 0.95))
    return Integral(
        value=value,
        noise=noise,
        baseline=(max(0.0, *moves) - min(0.0, *moves)) / 2 / _RECTANGULAR,
        truncation=abs(value) * most / (1 - min(most, 0.95)) / _RECTANGULAR,
        lost=lost,
        tails=tails,
        others=tuple(others),
        centre=_centre(field, upright),
        width=width,
        field=field,
        absorption=flat,
        notes=tuple(_notes(name, field, signal, seen, ends, lost, most, value, noise)),
    )


@dataclass(frozen=True, eq=False)
class _Weighted:
    """What makes the integral of the trace, and the baseline under the absorption; both shape (n,)."""

    weights: Array
    under: Array


def _trapezoids(field: Array) -> Array:
    """Weights of an integration by trapezoids."""
    h = np.diff(field)
    out = np.zeros(field.size)
    out[:-1] += h / 2
    out[1:] += h / 2
    return out


def _integrated(values: Array, field: Array, times: int) -> Array:
    for _ in range(times):
        values = np.concatenate(([0.0], np.cumsum(np.diff(field) * (values[:-1] + values[1:]) / 2)))
    return values


def _integrated_back(weights: Array, field: Array, times: int) -> Array:
    """Carry weights of an integrated trace to weights of the trace: the transpose of `_integrated`."""
    h = np.diff(field)
    for _ in range(times):
        above = weights.sum() - np.cumsum(weights)[:-1]
        out = np.zeros(field.size)
        out[:-1] += h / 2 * above
        out[1:] += h / 2 * above
        weights = out
    return weights


def _ends(field: Array, ranges: Sequence[tuple[float, float]], name: str, part: float = _END) -> NDArray[np.bool_]:
    """Which points are line-free."""
    if not ranges:
        span = field[-1] - field[0]
        return (field <= field[0] + part * span) | (field >= field[-1] - part * span)
    out = np.zeros(field.size, dtype=bool)
    for low, high in ranges:
        inside = (field >= low) & (field <= high)
        if inside.sum() < _FEWEST:
            found = f"{int(inside.sum())} points of {name} lie in {low:g} to {high:g} mT"
            right = f"name a range with {_FEWEST} or more; the trace covers {field[0]:g} to {field[-1]:g} mT"
            raise InputError(found, right, place="baseline-range")
        out |= inside
    return out


def _weights(
    field: Array, absorption: Array, steps: int, baseline: Baseline, ends: NDArray[np.bool_], name: str
) -> _Weighted:
    last = _trapezoids(field)
    order = steps + (1 if baseline.order == ASYMMETRIC else int(baseline.order))
    if ends.sum() <= order + 1:
        found = f"{int(ends.sum())} points of {name} for a baseline of {order + 1} free numbers"
        raise InputError(found, "name wider ranges without lines, or a lower order", place="baseline")
    x = (2 * field - field[0] - field[-1]) / (field[-1] - field[0])
    polynomials = np.polynomial.legendre.legvander(x, order)
    solving = np.linalg.pinv(polynomials[ends])
    under = polynomials @ (solving @ absorption[ends])
    kept = last
    if baseline.order == ASYMMETRIC:
        more, kept = _asymmetric(field, absorption - under, baseline.smoothness or float(field[-1] - field[0]), last)
        under = under + more
    out = kept.copy()
    out[ends] -= solving.T @ (polynomials.T @ kept)
    return _Weighted(_integrated_back(out, field, steps), under)


def _asymmetric(field: Array, absorption: Array, smoothness: float, last: Array) -> tuple[Array, Array]:
    """Asymmetric-least-squares baseline under an absorption, and the integral's weights with it taken off.

    The baseline z minimises sum_i w_i (a_i - z_i)^2 + lambda sum (second difference of z)^2, w small on the
    lines' side of it and near 1 on the other (P. H. C. Eilers, H. F. M. Boelens, 2005, from memory).
    lambda^(1/4) steps over 2 pi is the period that half passes.  A straight line under a derivative is a
    parabola here, which the differences would not let pass: a polynomial has been taken off before.
    """
    sign = math.copysign(1.0, float(last @ absorption))  # a trace may be upside down
    n, h = field.size, np.diff(field)
    mean = (field[-1] - field[0]) / (n - 1)
    diagonals = (mean / h[:-1], -mean / h[:-1] - mean / h[1:], mean / h[1:])
    second = sparse.diags_array(diagonals, offsets=(0, 1, 2), shape=(n - 2, n))
    penalty = (smoothness / (2 * math.pi * mean)) ** 4 * (second.T @ second)
    weights = np.ones(n)
    for _ in range(_MOST_ROUNDS):
        solve = sparse_linalg.factorized(sparse.csc_matrix(sparse.diags_array(weights) + penalty))
        under = solve(weights * absorption)
        new = np.where(sign * (absorption - under) > 0, _ABOVE, 1 - _ABOVE)
        if np.array_equal(new, weights):
            break
        weights = new
    return under, last - weights * solve(last)


def _other_baselines(
    field: Array,
    raised: Array,
    absorption: Array,
    steps: int,
    baseline: Baseline,
    name: str,
    weights: Array,
    white: float,
) -> tuple[list[tuple[str, float]], list[float]]:
    """The integral with baselines that somebody else might as well have chosen, and by how much they move it.

    Moves are without what the noise alone makes of the difference of two integrals of one trace.
    """
    tried: list[tuple[str, Baseline, float]] = []
    order = 1 if baseline.order == ASYMMETRIC else int(baseline.order)
    ends = _ends(field, baseline.ranges, name)
    for other in sorted({max(order - 1, 0), order, order + 1} - {baseline.order}):
        if other < order and _stiffer_fails(field[ends], raised[ends], other, order):
            continue
        tried.append((f"polynomial of order {other}", Baseline(other, baseline.ranges), _END))
    if not baseline.ranges:
        for part in (0.5 * _END, 1.5 * _END):
            tried.append((f"order {order}, {100 * part:g} % of the sweep at each end", Baseline(order), part))
    if baseline.order != ASYMMETRIC:
        tried.append(("asymmetric least squares", Baseline(ASYMMETRIC), _END))
    out, moves = [], []
    for text, other, part in tried:
        ends = _ends(field, other.ranges, name, part)
        if other.order != ASYMMETRIC and ends.sum() <= int(other.order) + steps + 1:
            continue
        change = _weights(field, absorption, steps, other, ends, name).weights - weights
        move = float(change @ raised)
        out.append((text, float(weights @ raised) + move))
        beyond = math.sqrt(max(move**2 - white**2 * float(change @ change), 0.0))
        moves.append(math.copysign(beyond, move))
    return out, moves


def _stiffer_fails(field: Array, signal: Array, order: int, chosen: int) -> bool:
    """Whether the line-free ends rule out a polynomial of lower order (F-test, 1 in 100)."""
    x = (2 * field - field[0] - field[-1]) / (field[-1] - field[0])
    left = []
    for k in (order, chosen):
        polynomials = np.polynomial.legendre.legvander(x, k)
        residual = signal - polynomials @ np.linalg.lstsq(polynomials, signal, rcond=None)[0]
        left.append(float(residual @ residual))
    freedom = max(field.size - chosen - 1, 1)
    ratio = (left[0] - left[1]) / (chosen - order) / max(left[1] / freedom, 1e-300)
    return bool(special.fdtrc(chosen - order, freedom, max(ratio, 0.0)) < 0.01)


def _noise_through(
    weights: Array, field: Array, signal: Array, ends: NDArray[np.bool_], steps: int, baseline: Baseline
) -> float:
    """Standard deviation of the integral from noise as the line-free ends show it.

    An integral adds up slow noise: where neighbours hang together (a detector's time constant) that
    counts, so the noise is read as an autoregressive process where there are points enough.
    """
    white = noise_level(signal)
    if ends.sum() < 30:
        return white * float(np.linalg.norm(weights))
    x = (2 * field[ends] - field[0] - field[-1]) / (field[-1] - field[0])
    order = 1 if baseline.order == ASYMMETRIC else int(baseline.order)
    known = np.linalg.qr(np.polynomial.legendre.legvander(x, order))[0]
    residual = signal[ends] - known @ (known.T @ signal[ends])
    noise = residual_noise(residual, known)
    if noise.order == 0:
        return white * float(np.linalg.norm(weights))
    column = weights[:, None]
    return math.sqrt(max(float((column.T @ noise.applied(column))[0, 0]), white**2 * float(weights @ weights)))


def _width(seen: Analysis, field: Array, absorption: Array) -> float:
    """Peak-to-peak width of the narrowest line; else the absorption's, from its width at half height."""
    if seen.narrowest is not None:
        return seen.narrowest
    top = float(absorption.max())
    above = field[absorption >= top / 2] if top > 0 else field[:1]
    # FWHM of a Gaussian is sqrt(2 ln 2) of its peak-to-peak width.
    return max(float(np.ptp(above)) / math.sqrt(2 * math.log(2)), float(np.median(np.diff(field))))


def _places(field: Array, absorption: Array, width: float, seen: Analysis) -> Array:
    """Fields at which lines of a peak-to-peak width make up the absorption, in parts of equal area.

    Equal parts of the absorption are spread by the lines' own width already; they are drawn together by as
    much as a Lorentzian line, whose quartiles are its half width from its centre, makes up of that.
    """
    area = np.cumsum(np.clip(absorption, 0.0, None) * _trapezoids(field))
    if area[-1] <= 0:
        return field[[field.size // 2]]
    low, middle, high = np.interp(np.array([0.25, 0.5, 0.75]) * area[-1], area, field)
    parts = np.interp((np.arange(_PLACES) + 0.5) / _PLACES * area[-1], area, field)
    left = 1 - min(math.sqrt(3) * width / max(high - low, 1e-300), 1.0) ** 2
    turning = [point.field for point in seen.turning_points]
    return np.clip(middle + (parts - middle) * math.sqrt(left), min(turning, default=low), max(turning, default=high))


def _centre(field: Array, absorption: Array) -> float:
    weight = np.clip(absorption, 0.0, None) * _trapezoids(field)
    return float(weight @ field / weight.sum()) if weight.sum() > 0 else float(field.mean())


def _line(field: Array, centre: float, width: float, steps: int, lorentzian: bool) -> Array:
    """A line of unit area or its derivative of the trace's order; `width` is peak to peak."""
    if lorentzian:
        half = math.sqrt(3) / 2 * width
        z = (field - centre) / half
        base = 1 + z**2
        shape = (1 / base, -2 * z / base**2, (6 * z**2 - 2) / base**3)[steps]
        return shape / (math.pi * half ** (1 + steps))
    sigma = width / 2
    z = (field - centre) / sigma
    shape = special.eval_hermitenorm(steps, z) * (-1) ** steps * np.exp(-(z**2) / 2)
    return shape / (math.sqrt(2 * math.pi) * sigma ** (1 + steps))


def _lines(field: Array, places: Array, width: float, steps: int, lorentzian: bool) -> Array:
    """Lines of unit area in all at the given places."""
    return np.mean([_line(field, place, width, steps, lorentzian) for place in places], axis=0)


def _tails(field: Array, signal: Array, places: Array, width: float, steps: int, area: float, order: int) -> float:
    """How large the lines' tails may be at most, relative to Lorentzian ones: 0 to 1.

    Where a Gaussian line would have ended, the trace is compared with a baseline plus Lorentzian tails; the upper
    end is two standard deviations above what is found.
    """
    beyond = (field < places.min() - _GONE * width) | (field > places.max() + _GONE * width)
    x = (2 * field[beyond] - field[0] - field[-1]) / (field[-1] - field[0])
    if x.size < 20 + order:
        return 1.0
    tails = area * _lines(field[beyond], places, width, steps, True)
    columns = np.column_stack((tails, np.polynomial.legendre.legvander(x, order)))
    solution, _, rank, _ = np.linalg.lstsq(columns, signal[beyond], rcond=1e-10)
    if rank < columns.shape[1]:
        return 1.0
    residual = signal[beyond] - columns @ solution
    noise = residual_noise(residual, np.linalg.qr(columns)[0])
    response = np.linalg.pinv(columns)[:1].T
    sigma = math.sqrt(max(float((response.T @ noise.applied(response))[0, 0]), 0.0))
    return float(np.clip(solution[0] + 2 * sigma, 0.0, 1.0))


def _notes(
    name: str,
    field: Array,
    signal: Array,
    seen: Analysis,
    ends: NDArray[np.bool_],
    lost: tuple[float, float],
    most: float,
    value: float,
    noise: float,
) -> list[tuple[str, str]]:
    notes = []
    if abs(value) < 3 * noise:
        text = f"{name}: the integral is {abs(value) / noise if noise else 0:.1f} times its noise: no line stands out"
        notes.append(("no_signal", text))
    inside = [p.field for p in seen.turning_points if ends[int(np.argmin(np.abs(field - p.field)))]]
    if inside:
        where = ", ".join(f"{b:.4g}" for b in inside[:4])
        text = f"{name}: lines (near {where} mT) stand where the baseline is taken: sweep wider, or name other ranges"
        notes.append(("lines_in_baseline", text))
    if most > 0.1:
        text = (
            f"{name}: with Lorentzian tails {100 * lost[1]:.0f} % of the area would lie outside the sweep or under the "
            f"baseline (Gaussian ones: {100 * lost[0]:.0f} %): sweep wider, or fit a model"
        )
        notes.append(("truncated", text))
    return notes
