"""Which nuclei are treated exactly: decided once for a species and its measuring conditions.

A nucleus whose `treat` is "auto" is exact where its largest |A| exceeds 50 MHz.  Otherwise the error
of second order is estimated on the exactly treated levels at a few directions and fields, every
pair of levels counting by its strength and its closeness to resonance.  With L = |A| I and the
electron's matrix elements S_ik between levels D_ik apart, what is left out is

* third order: about sum over k of L^3 |S_ik|^2 |<S>_k - <S>_i| / D_ik^2 as a shift,
* mixed levels: an amplitude L S_ik M_kj / (D_ik M_ij) comes to that of a transition from its
  neighbours.  Its square is a change of intensity; what of it is diagonal in the nucleus changes
  intensities to first order, with opposite signs for opposite lines.  Between levels closer than
  the line is wide the spectrum does not feel it.

A nucleus for which that exceeds the tolerance is exact too, the strongest first, while the matrices
stay small enough; otherwise second order stands and a warning says what it may cost.  Beside a strongly
coupled nucleus whose sublevels lie about as far apart as the weak one's (14N of 30 MHz and more on Cu(II)
near the plane normal to its axis) the error is as large as estimated; for weaker ones it is a tenth of it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.hamiltonian import System, systems
from spinfit.levels import solve
from spinfit.nuclei import WEAK_LIMIT, kinds
from spinfit.operators import multiplicity
from spinfit.resonance import level_pairs
from spinfit.species import Nucleus, Species
from spinfit.weak import electron_matrices

Array = NDArray[np.float64]

MOST_STATES = 12
"""Largest matrix to which a weakly coupled nucleus is added of our own choice."""
MOST_NEEDED, CLEARLY = 24, 10.0
"""The same where the estimated error is so many times the tolerance: then it is no exaggeration."""
FEW_STATES = 4
"""Matrices up to this size are cheaper than splitting patterns: everything in them is exact."""
SMOOTHING = 0.6
"""Largest change of a Gaussian derivative, relative to its top, per shift in line widths, averaged over signs."""


@dataclass(frozen=True)
class Treatment:
    """How each nucleus of a species is treated.

    Attributes
    ----------
    species : Species
        With every `treat` decided.
    nuclei : tuple of dict
        nucleus, count, treat, and the estimated error of the spectrum where it is not exact.
    warnings : tuple of (code, text)
    """

    species: Species
    nuclei: tuple[dict[str, object], ...]
    warnings: tuple[tuple[str, str], ...]


def decided(
    species: Species, frequency: float, window: tuple[float, float], scale: float, tolerance: float, microwave: str
) -> Treatment:
    """Decide how every nucleus is treated.

    Parameters
    ----------
    frequency : float
        MHz.
    window : (float, float)
        Fields of interest, mT.
    scale : float
        Length over which a line is smooth, mT.
    tolerance : float
        Of the spectrum, relative to its largest value.
    microwave : str
        "perpendicular" or "parallel".
    """
    if not species.nuclei:
        return Treatment(species, (), ())
    start = tuple(
        replace(one, treat="exact" if _strong(one) else "second order") if one.treat == "auto" else one
        for one in species.nuclei
    )
    if species.spread.A and max(species.spread.A) > 0:
        start = _with_strongest_exact(start)
    now = replace(species, nuclei=start)
    free = [k for k, one in enumerate(species.nuclei) if one.treat == "auto" and start[k].treat != "exact"]
    free.sort(key=lambda k: -max(map(abs, species.nuclei[k].A)))
    errors = dict.fromkeys(range(len(start)), 0.0)
    for k in free:
        larger = _with(now, k, "exact")
        if _states(larger) <= FEW_STATES:
            now = larger
    if any(one.treat != "exact" for one in now.nuclei):
        errors = _errors(now, frequency, window, scale, microwave)
        for k in free:
            larger = _with(now, k, "exact")
            most = MOST_NEEDED if errors[k] > CLEARLY * tolerance else MOST_STATES
            if now.nuclei[k].treat != "exact" and errors[k] > tolerance and _states(larger) <= most:
                now = larger
                errors = _errors(now, frequency, window, scale, microwave)
    records, warnings = [], []
    for k, one in enumerate(now.nuclei):
        name = str(one.isotope or one.element)
        record: dict[str, object] = {"nucleus": name, "count": one.count, "treat": one.treat}
        if one.treat != "exact":
            record["estimated_error"] = float(errors[k])
            if errors[k] > tolerance:
                text = f"{name} is treated to {one.treat}, which may move the spectrum by {errors[k]:.1g} of its top"
                warnings.append(("weak_nucleus", f'{text}; treat = "exact" takes it exactly'))
        records.append(record)
    return Treatment(now, tuple(records), tuple(warnings))


def _strong(one: Nucleus) -> bool:
    return max(abs(value) for value in one.A) > WEAK_LIMIT


def _with(species: Species, k: int, treat: str) -> Species:
    nuclei = list(species.nuclei)
    nuclei[k] = replace(nuclei[k], treat=treat)
    return replace(species, nuclei=tuple(nuclei))


def _with_strongest_exact(nuclei: tuple[Nucleus, ...]) -> tuple[Nucleus, ...]:
    """A spread of A moves levels, so the nucleus that it belongs to stands among them."""
    k = max(range(len(nuclei)), key=lambda i: max(abs(a) for a in nuclei[i].A))
    return tuple(replace(one, treat="exact") if i == k else one for i, one in enumerate(nuclei))


def whole_states(species: Species) -> int:
    """Return the size of the largest matrix with every nucleus in it, building none."""
    return _states(replace(species, nuclei=tuple(replace(one, treat="exact") for one in species.nuclei)))


def _states(species: Species) -> int:
    """Return the size of the largest matrix, building none."""
    n = 1
    for spin in species.spins:
        n *= multiplicity(spin.S)
    for one in species.nuclei:
        if one.treat != "exact":
            continue
        spin = max(kind.spin for kind in kinds(one))
        n *= multiplicity(spin) ** one.count if any(one.P) else multiplicity(spin * one.count)
    return n


def _probes() -> Array:
    """Return 13 directions: the axes, face and space diagonals of a cube, turned off the axes a little."""
    grid = np.stack(np.meshgrid(*[[-1, 0, 1]] * 3, indexing="ij"), -1).reshape(-1, 3)[14:].astype(float)
    grid += [0.05, 0.11, 0.03]
    return grid / np.linalg.norm(grid, axis=1, keepdims=True)


def _errors(
    species: Species, frequency: float, window: tuple[float, float], scale: float, microwave: str
) -> dict[int, float]:
    """Return the estimated error of the spectrum for each nucleus that is not exact."""
    system = max(systems(species, perturb=True), key=lambda one: one.weight)
    directions = _probes()
    fields = np.linspace(max(window[0], 0.05 * window[1], 1.0), window[1], 7)
    unit, field = np.tile(directions, (len(fields), 1)), np.repeat(fields, len(directions))
    got = solve(system, unit, field, microwave=microwave)
    lower, upper = level_pairs(len(system.h0))
    gap = got.energy[:, upper] - got.energy[:, lower]
    # by amplitude: weak transitions may be the sharpest features of a powder
    near = np.sqrt(got.intensity[:, lower, upper]) / (1 + ((gap - frequency) / (0.1 * frequency)) ** 2) ** 2
    of_pair = near.sum(axis=0)
    weak = [k for k, one in enumerate(species.nuclei) if one.treat != "exact"]
    out = dict.fromkeys(range(len(species.nuclei)), 0.0)
    for k, one in zip(weak, system.weak, strict=True):
        spins = _in_levels(system, one.electron, unit, field)
        coupling = max(np.linalg.norm(kind.hyperfine, 2) * kind.spin for kind in one.kinds) * np.sqrt(one.count)
        shift, mixed, turned = _left_out(got.energy, got.intensity, spins, coupling, one.order, 28.0 * scale)
        error = SMOOTHING * (shift[:, lower] + shift[:, upper]) / (28.0 * scale)
        error = error + mixed[:, lower, upper] + 0.3 * turned[:, lower, upper] * min(1.0, coupling / (28.0 * scale))
        # each pair makes a feature of its own, and the one that errs most counts
        # where nothing is allowed without nuclei, all there is depends on them
        out[k] = float((near * np.minimum(error, 1.0)).sum(axis=0).max() / of_pair.max()) if of_pair.any() else 1.0
    return out


def _in_levels(system: System, electron: int, unit: Array, field: Array) -> NDArray[np.complex128]:
    """Return the spin matrices between the levels at each point, shape (m, 3, n, n)."""
    h = system.h0 + np.tensordot(unit * field[:, None], system.zeeman, 1)
    _, v = np.linalg.eigh(h)
    v = v[:, None]
    return v.conj().swapaxes(-1, -2) @ electron_matrices(system, electron) @ v


def _left_out(
    energy: Array, intensity: Array, spins: NDArray[np.complex128], coupling: float, order: int, width: float
) -> tuple[Array, Array, Array]:
    """Return what a treatment leaves out at each point.

    Returns
    -------
    shift : ndarray, shape (m, n)
        Of each level, MHz.
    mixed, turned : ndarray, shape (m, n, n)
        Change of each pair's intensity, relative to it, in second and in first order.
    """
    gap = np.abs(energy[:, :, None] - energy[:, None, :])
    np.einsum("mii->mi", gap)[:] = np.inf
    size = (np.abs(spins) ** 2).sum(axis=1)
    mean = np.einsum("mxii->mix", spins).real
    turn = np.linalg.norm(mean[:, :, None] - mean[:, None, :], axis=-1)
    safe = np.maximum(gap**2, coupling**2 * size + 1e-12)
    shift = (coupling**3 * size * turn / safe).sum(axis=-1)
    if order == 1:
        shift = (coupling**2 * size / np.sqrt(safe)).sum(axis=-1)
    felt = np.minimum(1.0, gap / width) / safe * coupling**2
    axis = mean / np.maximum(np.linalg.norm(mean, axis=-1, keepdims=True), 1e-9)
    along = np.abs(np.einsum("mix,mxik->mik", axis, spins)) ** 2
    own = np.maximum(intensity, 1e-300)

    def brought(amplitude: Array) -> Array:
        return np.minimum((amplitude @ intensity + intensity @ amplitude.swapaxes(-1, -2)) / own, 1e6)

    return shift, brought(felt * size), np.sqrt(brought(felt * along))
