"""From a measured g back to the crystal field: which splitting, or which reduction, the model would need."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from spinfit.errors import InputError
from spinfit.ion.first_order import first_order
from spinfit.ion.model import IonModel, solve_ground
from spinfit.ion.quench import MeasuredG, ground_state
from spinfit.ion.tensors import SpinHamiltonian
from spinfit.units import MHZ_PER_WAVENUMBER

STEP = 0.2
"""Step of the search for a root, in the logarithm of the scale."""


@dataclass(frozen=True)
class Needed:
    """What one component of a measured g asks of the model.

    Attributes
    ----------
    axis : str
        "x", "y", "z", or "all" for the best common value.
    quantity : str
        "splitting" (the energy whose n/Delta rules this component, MHz) or "reduction" (k, applied to L and
        zeta).
    value : float or None
        None when no value brings the model to the measurement.
    uncertainty : float or None
        Standard, from that of g; None when g had none.
    given : float
        What the model has now.
    reason : str
        Why there is no value.
    """

    axis: str
    quantity: str
    value: float | None
    uncertainty: float | None
    given: float
    reason: str = ""

    def as_record(self) -> dict[str, object]:
        """Return the machine-readable form; splittings in cm^-1."""
        factor = 1 / MHZ_PER_WAVENUMBER if self.quantity == "splitting" else 1.0
        scaled = [None if v is None else v * factor for v in (self.value, self.uncertainty, self.given)]
        return {
            "axis": self.axis,
            "quantity": self.quantity,
            "value": scaled[0],
            "uncertainty": scaled[1],
            "given": scaled[2],
            "unit": "cm^-1" if self.quantity == "splitting" else "",
            "reason": self.reason,
        }


def principal_g(model: IonModel) -> NDArray[np.float64]:
    """Return the g of the ground state along its axes (nearest to x, y, z), shape (3,).

    Raises
    ------
    InputError
        When there is neither a spin Hamiltonian nor a doublet.
    """
    ground = ground_state(model, solve_ground(model))
    if isinstance(ground, str):
        raise InputError(ground, "lower the symmetry of the field")
    return ground.g_principal if isinstance(ground, SpinHamiltonian) else ground.principal


def needed_reduction(model: IonModel, measured: MeasuredG) -> tuple[Needed, ...]:
    """Return the k (of L and of zeta, relative to the free ion's) each component and all together would need.

    The model's own reduction is taken out first, so that k = 1 is the free ion's L and zeta.
    """
    free = model.with_covalency(1 / model.reduction) if model.reduction else model
    curve = _Curve(free.with_covalency)
    # f electrons hardly take part in bonds: far from k = 1 there is nothing to look for.
    limits = (0.5, 1.3) if model.shell.l == 3 else (0.02, 1.6)
    rows = tuple(_needed_axis(curve, measured, axis, "reduction", limits, (1.0, model.reduction)) for axis in range(3))
    return (*rows, _together(rows, measured, "reduction", model.reduction))


def needed_splitting(model: IonModel, measured: MeasuredG) -> tuple[Needed, ...]:
    """Return the splitting Delta that each component would need, the whole field scaled alike.

    Delta is the energy of the first-order formula, sum n over sum n/Delta of the component.

    Raises
    ------
    InputError
        Where the ground state is orbitally degenerate without spin-orbit coupling: no one splitting rules g.
    """
    deltas = _ruling_splittings(model)
    curve = _Curve(lambda s: replace(model, crystal_field=model.crystal.scaled(s)))
    return tuple(
        _needed_axis(curve, measured, axis, "splitting", (0.05, 30.0), (deltas[axis], deltas[axis]))
        for axis in range(3)
    )


class _Curve:
    """g along x, y, z against the logarithm of a scale; every value is kept, since three axes ask for the same."""

    def __init__(self, build: Callable[[float], IonModel]) -> None:
        self._build = build
        self._known: dict[float, NDArray[np.float64]] = {}

    def __call__(self, log_scale: float) -> NDArray[np.float64]:
        if log_scale not in self._known:
            try:
                self._known[log_scale] = principal_g(self._build(math.exp(log_scale)))
            except InputError:
                self._known[log_scale] = np.full(3, math.nan)
        return self._known[log_scale]


def _ruling_splittings(model: IonModel) -> tuple[float, float, float]:
    """Return Delta along x, y, z: sum n over sum n/Delta, or the lowest excitation where nothing mixes."""
    mixing = first_order(model).terms
    found = []
    for axis in "xyz":
        own = [m for m in mixing if m.axis == axis]
        weight = sum(m.n / m.delta for m in own)
        found.append(sum(m.n for m in own) / weight if abs(weight) > 0 else math.nan)
    return found[0], found[1], found[2]


def _together(rows: Sequence[Needed], measured: MeasuredG, quantity: str, given: float) -> Needed:
    """Combine the components: a number that was measured once counts once, the rest by inverse variance."""
    pairs = []
    for group in measured.groups:
        solved = [rows[axis] for axis in group if rows[axis].value is not None]
        if solved:
            spreads = [r.uncertainty for r in solved if r.uncertainty]
            spread = float(np.mean(spreads)) if len(spreads) == len(solved) else None
            pairs.append((float(np.mean([r.value for r in solved])), spread))
    if not pairs:
        return Needed("all", quantity, None, None, given, "no component can be reached")
    values = np.array([p[0] for p in pairs])
    if any(p[1] is None for p in pairs):
        return Needed("all", quantity, float(values.mean()), None, given)
    weights = np.array([p[1] ** -2.0 for p in pairs])
    return Needed("all", quantity, float(weights @ values / weights.sum()), float(weights.sum() ** -0.5), given)


def _needed_axis(
    curve: _Curve,
    measured: MeasuredG,
    axis: int,
    quantity: str,
    limits: tuple[float, float],
    unit_and_given: tuple[float, float],
) -> Needed:
    """Find the multiple of the unit that brings one component of g to the measurement."""
    (unit, given), name, wanted = unit_and_given, "xyz"[axis], measured.values[axis]
    if not math.isfinite(unit):
        return Needed(name, quantity, None, None, 0.0, "no level mixes into this component in first order")

    def miss(log_scale: float) -> float:
        return float(curve(log_scale)[axis]) - wanted

    root = _nearest_root(miss, math.log(limits[0]), math.log(limits[1]), 0.0)
    if root is None:
        return Needed(name, quantity, None, None, given, f"no {quantity} gives g = {wanted:g}")
    step = 1e-4
    slope = (miss(root + step) - miss(root - step)) / (2 * step)
    value = math.exp(root) * unit
    sigma = measured.uncertainties[axis]
    uncertainty = abs(value * sigma / slope) if sigma > 0 and slope else None
    return Needed(name, quantity, value, uncertainty, given)


def _nearest_root(function: Callable[[float], float], low: float, high: float, near: float) -> float | None:
    """Return the sign change of a function nearest to `near`, refined; None without one.

    Intervals of a coarse grid are tried from `near` outwards, so that little is computed when the root is close.
    """
    below = np.linspace(near, low, max(2, math.ceil((near - low) / STEP) + 1)) if low < near else np.array([near])
    above = np.linspace(near, high, max(2, math.ceil((high - near) / STEP) + 1)) if high > near else np.array([near])
    for k in range(max(len(below), len(above)) - 1):
        for side in (above, below):
            if k + 1 >= len(side):
                continue
            a, b = float(side[k]), float(side[k + 1])
            at_a, at_b = function(a), function(b)
            # A jump from one ground state to another changes the sign as well but is no root.
            if not (math.isfinite(at_a) and math.isfinite(at_b)) or at_a * at_b > 0 or abs(at_a - at_b) > 2.0:
                continue
            root = float(brentq(function, min(a, b), max(a, b), xtol=1e-10))
            if abs(function(root)) < 1e-5:
                return root
    return None
