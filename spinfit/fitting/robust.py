"""Robust fits: points that no noise explains count less.

A loss rho replaces the square of each standardised residual r (published definitions, as in
`scipy.optimize.least_squares`: z = (r/c)^2, c^2 rho(z) is summed):

    linear   z            soft_l1   2 (sqrt(1 + z) - 1)
    huber    z, and 2 sqrt(z) - 1 beyond z = 1        cauchy   ln(1 + z)

The minimum is found by iteratively reweighted least squares, weights rho'(z) (P. W. Holland, R. E. Welsch,
Commun. Stat. A 6, 813 (1977), from memory): in each round scale, baseline and parameters are solved as in a plain fit
with these weights, so that they belong together.  The default c leave 95 % of the efficiency of least squares where
the noise is Gaussian.

At the minimum the fit to *pseudo-values*, fitted curve + psi(r)/mean(psi'), psi(r) = r rho'(z), is a plain
least-squares fit with the same solution, and its covariance is that of the robust one,
mean(psi^2)/mean(psi')^2 (J'J)^-1 (P. J. Huber, Robust Statistics (1981), chapter 7, from memory).  So
everything after the minimum, from uncertainties to tests of residuals, looks at the pseudo-values.

A smooth baseline under an absorption may be asymmetric: points above it count `asymmetry`, those below
1 - asymmetry (P. H. C. Eilers, H. F. M. Boelens, 2005, from memory), so that lines of absorption that no species
explains do not lift it.  That too is a loss, and goes the same way.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.fitting.baseline import coefficients
from spinfit.fitting.data import Trace
from spinfit.fitting.outcome import Note
from spinfit.fitting.residuals import Point, Problem, Progress, Seen, View, seen_of
from spinfit.fitting.solve import Descent, Goal, descend

Array = NDArray[np.float64]

# 95 % efficient for Gaussian noise: huber and cauchy by Holland and Welsch (1977), from memory; soft_l1 by the same
# integral, mean(psi')^2 / mean(psi^2), which a test does again.
SCALES = {"huber": 1.345, "cauchy": 2.385, "soft_l1": 1.287}
# Standard deviations beyond which a point is listed: noise gets there in 1 of 16 000.
LISTED = 4.0
_MOST_LISTED = 12
_MOST_ROUNDS = 30
# Change of the fitted curves, in standard deviations of one parameter, below which a round changes nothing.
_STILL = 0.02
# A weight of 0 would divide by it.
_NEXT_TO_NOTHING = 1e-8
_MAD_NORMAL = 0.6745


@dataclass(frozen=True)
class Loss:
    """A loss by name with its scale c, in standard deviations; `asymmetry` None for one that is even."""

    name: str = "linear"
    scale: float = 1.0
    asymmetry: float | None = None

    def weight(self, r: Array) -> Array:
        """psi(r)/r, shape (n,)."""
        z = (r / self.scale) ** 2
        if self.name == "huber":
            out = 1 / np.sqrt(np.maximum(z, 1.0))
        elif self.name == "soft_l1":
            out = 1 / np.sqrt(1 + z)
        elif self.name == "cauchy":
            out = 1 / (1 + z)
        else:
            out = np.ones_like(r)
        return out * self._side(r)

    def slope(self, r: Array) -> Array:
        """Derivative of psi, shape (n,)."""
        z = (r / self.scale) ** 2
        if self.name == "huber":
            out = (z <= 1).astype(float)
        elif self.name == "soft_l1":
            out = (1 + z) ** -1.5
        elif self.name == "cauchy":
            out = (1 - z) / (1 + z) ** 2
        else:
            out = np.ones_like(r)
        return out * self._side(r)

    def _side(self, r: Array) -> Array | float:
        if self.asymmetry is None:
            return 1.0
        # Relative to the heavier side, so that a weight is 1 at most.
        return np.where(r > 0, self.asymmetry, 1 - self.asymmetry) / max(self.asymmetry, 1 - self.asymmetry)


def losses_of(problem: Problem) -> tuple[Loss, ...]:
    """The loss of each trace."""
    job = problem.job
    scale = job.loss_scale or SCALES.get(job.loss, 1.0)
    return tuple(Loss(job.loss, scale, trace.asymmetry) for trace in job.traces)


def is_robust(problem: Problem) -> bool:
    """Whether any trace has a loss other than least squares."""
    return any(loss.name != "linear" or loss.asymmetry is not None for loss in losses_of(problem))


def plain_residuals(point: Point, view: View) -> list[Array]:
    """Trace less fitted curve over the noise, without weights, one array a trace."""
    out = []
    for seen, signal, scale in zip(view.seen, point.signals, point.scales, strict=True):
        rest = seen.signal - scale * signal / seen.noise
        if seen.known.shape[1]:
            rest = rest - seen.known @ coefficients(seen.known, seen.penalty, rest)
        out.append(rest if seen.weight is None else rest / np.sqrt(seen.weight))
    return out


def _standardised(residual: Array) -> Array:
    """Divide by what the bulk of the residuals scatters, where that is more than the noise.

    A model that misses the trace everywhere would otherwise have most of its points called glitches.
    """
    return residual / max(1.0, float(np.median(np.abs(residual))) / _MAD_NORMAL)


def reweighted(problem: Problem, point: Point, view: View) -> View:
    """The view with the weights that the residuals at a point give."""
    seen = []
    residuals = plain_residuals(point, view)
    for trace, one, loss, residual in zip(problem.job.traces, view.seen, losses_of(problem), residuals, strict=True):
        weight = np.maximum(loss.weight(_standardised(residual)), _NEXT_TO_NOTHING)
        seen.append(_with_weight(trace, one, weight))
    return replace(view, seen=tuple(seen))


def _with_weight(trace: Trace, one: Seen, weight: Array | None) -> Seen:
    """The same points with other weights; None for all alike."""
    noise = one.noise if one.weight is None else one.noise * np.sqrt(one.weight)
    plain = float(np.mean(noise))
    background = trace.background[trace.used] if trace.background is not None else None
    now = plain if weight is None else plain / np.sqrt(weight)
    return replace(seen_of(trace, one.field, one.signal * one.noise, background, now), weight=weight)


def forgiving(problem: Problem, view: View, goal: Goal, progress: Progress | None = None) -> View:
    """The view without the points that stand far off the first minimum below the start.

    A search judges a minimum by whether its residuals are noise, which glitches are not.  Where that minimum
    misses the lines nearly every point is off, and none is far.
    """
    first = descend(problem, view, problem.start, goal=goal, progress=progress)
    seen = []
    for trace, one, residual in zip(problem.job.traces, view.seen, plain_residuals(first.point, view), strict=True):
        far = np.abs(_standardised(residual)) > LISTED
        seen.append(_with_weight(trace, one, np.where(far, _NEXT_TO_NOTHING, 1.0)))
    return replace(view, seen=tuple(seen))


def settle(
    problem: Problem, view: View, descent: Descent, *, goal: Goal, progress: Progress | None = None
) -> tuple[Descent, View]:
    """Reweigh and descend until nothing moves; then look at the pseudo-values.

    Returns
    -------
    descent : Descent
        Its point and Jacobian belong to the pseudo-values.
    view : View
        Of the pseudo-values, with the weights.
    """
    before = None
    for _ in range(_MOST_ROUNDS):
        view = reweighted(problem, descent.point, view)
        descent = descend(problem, view, descent.point.free, goal=goal, progress=progress)
        point = descent.point
        curves = np.concatenate([s * signal for s, signal in zip(point.scales, point.signals, strict=True)])
        noise = np.concatenate([np.broadcast_to(one.noise, one.field.shape) for one in view.seen])
        if before is not None and float(np.linalg.norm((curves - before) / noise)) < _STILL:
            break
        before = curves
    view = pseudo_view(problem, descent.point, view)
    # The same solution; its Jacobian is computed when the uncertainties ask for it.
    return replace(descent, point=problem.evaluate(descent.point.free, view), jacobian=None), view


def settled_at(problem: Problem, view: View, free: Array) -> View:
    """The pseudo-values at parameters that a robust fit found; the view itself for least squares."""
    if not is_robust(problem):
        return view
    for _ in range(_MOST_ROUNDS):
        point = problem.evaluate(free, view)
        new = reweighted(problem, point, view)
        change = max(
            1.0 if old.weight is None else float(np.abs(old.weight - one.weight).max())
            for old, one in zip(view.seen, new.seen, strict=True)
        )
        view = new
        if change < 1e-4:
            break
    return pseudo_view(problem, problem.evaluate(free, view), view)


def pseudo_view(problem: Problem, point: Point, view: View) -> View:
    """The view of the pseudo-values, all points alike; it keeps the deviations for the record."""
    seen = []
    residuals = plain_residuals(point, view)
    for trace, one, loss, residual in zip(problem.job.traces, view.seen, losses_of(problem), residuals, strict=True):
        r = _standardised(residual)
        # Half of the points would have to be far outside for a mean slope near 0; no uncertainty means much then.
        slope = max(float(np.mean(loss.slope(r))), 0.1)
        plain = _with_weight(trace, one, None)
        signal = plain.signal + (loss.weight(r) / slope - 1) * residual
        background = trace.background[trace.used] if trace.background is not None else None
        again = seen_of(trace, one.field, signal * plain.noise, background, plain.noise)
        seen.append(replace(again, deviation=r))
    return replace(view, seen=tuple(seen))


def weights_of(problem: Problem, view: View) -> tuple[Array | None, ...]:
    """Weight of every used point of each trace at the end of a robust fit; None for least squares."""
    return tuple(
        None if one.deviation is None else loss.weight(one.deviation)
        for one, loss in zip(view.seen, losses_of(problem), strict=True)
    )


def robust_notes(problem: Problem, view: View) -> list[Note]:
    """List the points that no noise explains."""
    notes = []
    for trace, one, loss in zip(problem.job.traces, view.seen, losses_of(problem), strict=True):
        r = one.deviation
        if loss.name == "linear" or r is None:
            continue
        far = np.flatnonzero(np.abs(r) > LISTED)
        if far.size == 0:
            continue
        order = far[np.argsort(-np.abs(r[far]), kind="stable")][:_MOST_LISTED]
        where = ", ".join(f"{one.field[k]:.2f}" for k in np.sort(order))
        more = f" and {far.size - order.size} more" if far.size > order.size else ""
        text = (
            f"{far.size} points of {trace.name} lie more than {LISTED:g} standard deviations off and count less "
            f"(weights {loss.weight(r)[far].min():.2g} to {loss.weight(r)[far].max():.2g}): near {where} mT{more}; "
            "every point's weight stands in curves.csv."
        )
        notes.append(Note("down_weighted", text))
    return notes
