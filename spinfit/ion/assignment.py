"""Which ion, in which state, could have a measured g: candidates with what each would need."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import permutations

from spinfit.errors import InputError
from spinfit.ion.families import Fitted, axial_fits, cobalt_fits, cubic_fits, low_spin_d5_fits
from spinfit.ion.kramers import doublet_matches
from spinfit.ion.names import half
from spinfit.ion.quench import MeasuredG
from spinfit.ion.spin_orbit import read_table
from spinfit.units import G_ELECTRON

WORST = 30.0
"""Candidates with a score beyond this are not listed."""
# What each kind of model misses by itself, as a standard uncertainty of g: the size of what it neglects.
_FORMULA_FLOOR = 0.003
_DOUBLET_SHARE = 0.04


@dataclass(frozen=True)
class Candidate:
    """One possible assignment.

    Attributes
    ----------
    name : str
    ion, state : str
        "Cu2+", "3d9 S=1/2".
    g : (3,)
        g of the candidate at its best, in the order of the measured values.
    needs : tuple of (quantity, value, unit)
        What it would need: Delta/k^2 in cm^-1, E/D, Delta/zeta, ...
    known : str
        The range in which such ions are found.
    in_range : bool
    score : float
        Squared misfit plus squared distance outside the range, each in units of what is expected, plus a
        little for what is seldom met or fits anything; the lower the better.
    decide : str
        Which measurement would decide.
    """

    name: str
    ion: str
    state: str
    g: tuple[float, ...]
    needs: tuple[tuple[str, float, str], ...]
    known: str
    in_range: bool
    score: float
    decide: str

    def as_record(self) -> dict[str, object]:
        """Return the machine-readable form."""
        return {
            "name": self.name,
            "ion": self.ion,
            "state": self.state,
            "g": list(self.g),
            "needs": [{"quantity": q, "value": v, "unit": u} for q, v, u in self.needs],
            "known_range": self.known,
            "in_range": self.in_range,
            "score": self.score,
            "decide": self.decide,
        }


def candidates(measured: MeasuredG, *, limit: int | None = 12) -> tuple[Candidate, ...]:
    """List the assignments that are compatible with a measured g, best first.

    Parameters
    ----------
    measured : MeasuredG
        In any order of axes.
    limit : int, optional
        At most so many.

    Raises
    ------
    InputError
        When g is not positive.
    """
    if min(measured.values) <= 0:
        raise InputError(f"g = {min(measured.values):g}", "a measured g to be assigned is positive", place="measured")
    found = [*_from_table(measured), *_high_spin(measured), *_from_families(measured)]
    best: dict[str, Candidate] = {}
    for candidate in found:
        if candidate.score <= WORST and candidate.score < best.get(candidate.name, candidate).score + 1e-12:
            best[candidate.name] = candidate
    ranked = sorted(best.values(), key=lambda c: (c.score, c.name))
    return tuple(ranked if limit is None else ranked[:limit])


def _outside(value: float, low: float, high: float) -> float:
    """Return how far a positive value lies outside a range, in units of 20 %, plus a slight pull to the middle."""
    middle, half_width = math.log(low * high) / 2, math.log(high / low) / 2
    distance = abs(math.log(value) - middle)
    beyond = max(0.0, distance - half_width) / math.log(1.2)
    return beyond + 0.3 * min(1.0, distance / half_width)


# ---------------------------------------------------------------- formulas and windows


def _from_table(measured: MeasuredG) -> Iterator[Candidate]:
    for row in read_table("assignments.csv"):
        orders = set(permutations(range(3)))
        options = [
            _formula(row, measured, o) if row["kind"] == "formula" else _window(row, measured, o) for o in orders
        ]
        valid = [c for c in options if c is not None]
        if valid:
            yield min(valid, key=lambda c: c.score)


def _formula(row: dict[str, str], measured: MeasuredG, order: tuple[int, ...]) -> Candidate:
    """Try g_e - n lambda k^2/Delta with the measured components taken as (perp, perp, par) in this order."""
    lam = float(row["lambda"])
    score, needs, inside = float(row["rarity"]), [], True
    model = list(measured.values)
    isotropic = row["n_perp"] == row["n_par"]
    for place, axis in enumerate(order):
        end = "par" if place == 2 else "perp"
        n, low, high = float(row[f"n_{end}"]), float(row[f"low_{end}"]), float(row[f"high_{end}"])
        g, sigma = measured.values[axis], measured.uncertainties[axis]
        if n == 0:
            middle, half_width = (low + high) / 2, (high - low) / 2
            score += ((g - middle) / math.hypot(half_width, sigma)) ** 2
            inside &= low - 3 * sigma <= g <= high + 3 * sigma
            model[axis] = min(max(g, low), high)
            continue
        shift = (G_ELECTRON - g) / (n * lam)  # k^2/Delta, positive when lambda has the right sign
        if shift <= 0:
            # The wrong side of g_e: only forgiven within the formula's own error.
            score += 4 + ((G_ELECTRON - g) / math.hypot(_FORMULA_FLOOR, sigma)) ** 2
            inside = False
            continue
        apparent = 1 / shift
        # A g close to g_e fixes its Delta badly: the range is widened by the error of the shift.
        relative = math.hypot(_FORMULA_FLOOR, sigma) / abs(G_ELECTRON - g)
        beyond = _outside(apparent, low / (1 + relative), high * (1 + relative))
        score += beyond**2
        inside &= beyond <= 0.3
        label = "Delta/k^2" if isotropic else f"Delta_{end}/k^2"
        needs.append((f"{label} (g = {g:g})", apparent, "cm^-1"))
    score += _shape_misfit(measured.values, order, isotropic)
    return Candidate(
        row["name"],
        row["ion"],
        row["state"],
        tuple(model),
        tuple(dict.fromkeys(needs)),
        _range_text(row),
        inside,
        score,
        row["decide"],
    )


def _shape_misfit(values: tuple[float, ...], order: tuple[int, ...], isotropic: bool) -> float:
    """Return what speaks against a ground state that is isotropic, or axial with this order of components."""
    spread = max(values) - min(values)
    if isotropic:
        shift = abs(G_ELECTRON - sum(values) / 3)
        return (spread / (0.15 * shift + _FORMULA_FLOOR)) ** 2
    pair = [values[i] for i in order[:2]]
    shift = max(abs(G_ELECTRON - g) for g in pair)
    rhombic = (abs(pair[0] - pair[1]) / (0.5 * shift + _FORMULA_FLOOR)) ** 2
    # Such ground states are never isotropic: equal components only when everything is averaged.
    overall = max(abs(G_ELECTRON - g) for g in values)
    return rhombic + 6.0 * max(0.0, 1 - spread / (0.3 * overall + 1e-12)) ** 2


def _range_text(row: dict[str, str]) -> str:
    parts = []
    for end in ("perp", "par"):
        low, high = float(row[f"low_{end}"]), float(row[f"high_{end}"])
        if row["kind"] == "window" or row[f"n_{end}"] == "0":
            parts.append(f"g_{end} {low:g} to {high:g}")
        else:
            parts.append(f"Delta_{end}/k^2 {low:.0f} to {high:.0f} cm^-1")
    if row["n_perp"] == row["n_par"] and parts[0].split(" ", 1)[1] == parts[1].split(" ", 1)[1]:
        return parts[0].replace("_perp", "")
    return ", ".join(parts)


def _window(row: dict[str, str], measured: MeasuredG, order: tuple[int, ...]) -> Candidate:
    """Try a window of g, for ions and radicals without a formula of one splitting."""
    score, inside = float(row["rarity"]), True
    model = list(measured.values)
    for place, axis in enumerate(order):
        end = "par" if place == 2 else "perp"
        low, high = float(row[f"low_{end}"]), float(row[f"high_{end}"])
        g, sigma = measured.values[axis], measured.uncertainties[axis]
        middle, half_width = (low + high) / 2, (high - low) / 2
        beyond = max(0.0, abs(g - middle) - half_width) / math.hypot(0.3 * half_width, sigma)
        score += (beyond + 0.3 * min(1.0, abs(g - middle) / half_width)) ** 2
        inside &= beyond == 0
        model[axis] = min(max(g, low), high)
    # A wide window says little: it comes after a narrow one that fits as well.
    score += 0.1 * math.log10(1 + (float(row["high_par"]) - float(row["low_par"])) / 1e-3)
    return Candidate(
        row["name"], row["ion"], row["state"], tuple(model), (), _range_text(row), inside, score, row["decide"]
    )


# ---------------------------------------------------------------- effective g of high spins


_HIGH_SPIN = {
    2.5: ("Fe3+ or Mn2+", "3d5 S=5/2"),
    1.5: ("Co2+ (tetrahedral), Cr3+, Fe3+ (intermediate spin)", "S=3/2"),
    3.5: ("Gd3+, Eu2+ or a coupled cluster", "S=7/2"),
}
_HIGH_SPIN_DECIDE = "intensity against temperature gives D and its sign; a second microwave frequency tells g' from g"
_HIGH_SPIN_PENALTY = {2.5: 0.0, 1.5: 0.3, 3.5: 1.0}


def _high_spin(measured: MeasuredG) -> Iterator[Candidate]:
    """Try the Kramers doublets of S = 3/2, 5/2, 7/2 with h nu much below D."""
    for match in doublet_matches(measured.values):
        score = (match.misfit / _DOUBLET_SHARE) ** 2 + _HIGH_SPIN_PENALTY[match.S]
        if score > WORST:
            continue
        ion, state = _HIGH_SPIN[match.S]
        yield Candidate(
            f"high spin S = {half(match.S)}, doublet {match.doublet} of {round(match.S + 0.5)} ({ion})",
            ion,
            state,
            _in_order(match.g, measured),
            (("E/D", match.rhombicity, ""),),
            "E/D 0 to 1/3, D well above h nu",
            True,
            score,
            _HIGH_SPIN_DECIDE,
        )


def _in_order(rising: tuple[float, ...], measured: MeasuredG) -> tuple[float, ...]:
    """Put rising model values into the order of the measured ones."""
    order = sorted(range(3), key=lambda i: measured.values[i])
    values = [0.0] * 3
    for value, axis in zip(sorted(rising), order, strict=True):
        values[axis] = value
    return tuple(values)


# ---------------------------------------------------------------- families with a curve


def _from_families(measured: MeasuredG) -> Iterator[Candidate]:
    """Try low-spin d5, octahedral cobalt and the f^n doublets."""
    for family in (low_spin_d5_fits, cobalt_fits, cubic_fits, axial_fits):
        for fit in family(measured.values):
            yield _candidate_of(fit, measured)


def _candidate_of(fit: Fitted, measured: MeasuredG) -> Candidate:
    score = (fit.misfit / fit.expected) ** 2 + fit.penalty
    beyond = [_range_distance(value, low, high) for _, value, _, low, high in fit.parameters]
    score += sum(b**2 for b in beyond)
    known = ", ".join(f"{name} {low:g} to {high:g}" for name, _, _, low, high in fit.parameters) or fit.remark
    return Candidate(
        fit.name,
        fit.ion,
        fit.state,
        _in_order(fit.g, measured),
        tuple((name, value, unit) for name, value, unit, _, _ in fit.parameters),
        known,
        max(beyond, default=0.0) == 0 and fit.misfit < 3 * fit.expected,
        score,
        fit.decide,
    )


def _range_distance(value: float, low: float, high: float) -> float:
    """Return how far a value lies outside its range, in units of a quarter of its width."""
    return max(0.0, low - value, value - high) / (0.25 * (high - low))
