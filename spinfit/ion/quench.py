"""The comparison: free-ion g against the crystal field's g against a measured g, one row an ion."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.ion.defaults import default_model
from spinfit.ion.first_order import Mixing, first_order
from spinfit.ion.kramers import doublet_matches
from spinfit.ion.lande import IonLevel, lookup, numbers_of, orbital_to_spin
from spinfit.ion.magnetism import independent_part, susceptibility
from spinfit.ion.model import IonModel, Levels, solve
from spinfit.ion.names import half
from spinfit.ion.tensors import DoubletG, SpinHamiltonian, doublet_g, spin_hamiltonian
from spinfit.markup import html_table
from spinfit.units import K_B_OVER_H, MHZ_PER_WAVENUMBER

ROOM = 300.0
"""Temperature of the tabulated effective moment, K."""
FAR = 0.5
"""A measured g farther than this from that of a high spin is taken for an effective one."""
SHOWN = 8
"""How many levels are listed."""


@dataclass(frozen=True)
class MeasuredG:
    """A measured g.

    Attributes
    ----------
    values, uncertainties : (3,)
        Principal values along x, y, z and their standard uncertainties (0 where none was given).
    count : int
        How many numbers were measured: 1 (isotropic), 2 (perpendicular, parallel) or 3.
    """

    values: tuple[float, float, float]
    uncertainties: tuple[float, float, float] = (0.0, 0.0, 0.0)
    count: int = 3

    @property
    def groups(self) -> tuple[tuple[int, ...], ...]:
        """Axes that share one measured number."""
        return {1: ((0, 1, 2),), 2: ((0, 1), (2,))}.get(self.count, ((0,), (1,), (2,)))


@dataclass(frozen=True)
class QuenchRow:
    """One ion, free, quenched and measured.

    Attributes
    ----------
    level : IonLevel
        The free ion.
    spin_only : float
        g of the spin alone.
    crystal_field : str
        What the crystal field is and where it comes from; "" when there is none.
    effective_spin : float or None
        Of `g_crystal`: the spin of the ground manifold, or 1/2 of a doublet.
    kind : str
        "spin Hamiltonian", "doublet" or "" when neither exists.
    g_crystal : (3,) or None
        Exact, along the principal axes, ordered as near to x, y, z.
    g_first_order : (3,) or None
        By g_e - n lambda/Delta, along the same axes.
    mixing : tuple of Mixing
        The table of n and Delta.
    D, E : float or None
        MHz.
    projection_error : float or None
        Of D and E, rms in MHz.
    g_from_orbital : (3,) or None
        Part of `g_crystal` that comes from k L (for a spin: g minus that of the spin).
    measured : MeasuredG or None
    fraction : (3,) or None
        Orbital moment that survives, from the model.
    fraction_measured, fraction_uncertainty : (3,) or None
        The same from the measured g.
    moment_300K : float or None
        Effective moment in the crystal field at 300 K, Bohr magnetons.
    levels : tuple of (energy, states)
        Lowest crystal-field levels, MHz above the ground level, with how many states each has.
    moments : tuple of (temperature, moment)
        Effective moment at the temperatures asked for, K and Bohr magnetons.
    independent : float or None
        Powder average of van Vleck's temperature-independent susceptibility, cm^3/mol.
    notes : tuple of str
    """

    level: IonLevel
    spin_only: float
    crystal_field: str = ""
    effective_spin: float | None = None
    kind: str = ""
    g_crystal: tuple[float, ...] | None = None
    g_first_order: tuple[float, ...] | None = None
    mixing: tuple[Mixing, ...] = ()
    D: float | None = None
    E: float | None = None
    projection_error: float | None = None
    g_from_orbital: tuple[float, ...] | None = None
    measured: MeasuredG | None = None
    fraction: tuple[float, ...] | None = None
    fraction_measured: tuple[float, ...] | None = None
    fraction_uncertainty: tuple[float, ...] | None = None
    moment_300K: float | None = None
    independent: float | None = None
    levels: tuple[tuple[float, int], ...] = ()
    moments: tuple[tuple[float, float], ...] = ()
    notes: tuple[str, ...] = ()

    def _repr_html_(self) -> str:
        """Show free-ion, spin-only, crystal-field and measured g, for a notebook."""
        g_J, measured = self.level.g_J, self.measured
        rows = [
            ["free ion", *["-" if g_J is None else f"{g_J:.5g}"] * 3],
            ["spin only", *[f"{self.spin_only:.5g}"] * 3],
            ["crystal field", *_shown(self.g_crystal)],
            ["measured", *_shown(measured and measured.values, measured and measured.uncertainties)],
            ["orbital moment left, field", *_shown(self.fraction)],
            ["orbital moment left, measured", *_shown(self.fraction_measured, self.fraction_uncertainty)],
        ]
        caption = "; ".join([f"{self.level.ion} {self.level.term}", self.crystal_field, *self.notes])
        return html_table(["g", "x", "y", "z"], rows, caption=caption)

    def as_record(self) -> dict[str, Any]:
        """Return the machine-readable form; energies in cm^-1."""
        measured = self.measured

        def wavenumbers(value: float | None) -> float | None:
            return None if value is None else value / MHZ_PER_WAVENUMBER

        return self.level.as_record() | {
            "g_spin_only": self.spin_only,
            "moment_spin_only": self.level.spin_only_moment,
            "crystal_field": self.crystal_field or None,
            "effective_spin": self.effective_spin,
            "g_crystal_field": _listed(self.g_crystal),
            "g_from_orbital": _listed(self.g_from_orbital),
            "g_first_order": _listed(self.g_first_order),
            "first_order_terms": [
                {"axis": m.axis, "n": m.n, "delta_cm1": m.delta / MHZ_PER_WAVENUMBER} for m in self.mixing
            ],
            "D_cm1": wavenumbers(self.D),
            "E_cm1": wavenumbers(self.E),
            "projection_error_cm1": wavenumbers(self.projection_error),
            "g_measured": None if measured is None else list(measured.values),
            "g_measured_uncertainty": None if measured is None else list(measured.uncertainties),
            "orbital_fraction": _listed(self.fraction),
            "orbital_fraction_measured": _listed(self.fraction_measured),
            "orbital_fraction_uncertainty": _listed(self.fraction_uncertainty),
            "moment_crystal_field_300K": self.moment_300K,
            "moments": [{"temperature_K": T, "moment": p} for T, p in self.moments],
            "chi_independent_cm3_per_mol": self.independent,
            "levels": [{"energy_cm1": wavenumbers(e), "states": n} for e, n in self.levels],
            "notes": list(self.notes),
        }


def _shown(values: tuple[float, ...] | None, uncertainties: tuple[float, ...] | None = None) -> list[str]:
    """Write three numbers, with their uncertainties where there are any."""
    if values is None:
        return ["-"] * 3
    sigma = uncertainties or (0.0,) * 3
    return [f"{v:.5g}" + (f" ± {u:.2g}" if u else "") for v, u in zip(values, sigma, strict=True)]


def _listed(values: tuple[float, ...] | None) -> list[float | None] | None:
    return None if values is None else [float(v) if math.isfinite(v) else None for v in values]


def parse_measured(text: str) -> MeasuredG:
    """Read a measured g: "2.0061", "2.05, 2.33" (perpendicular, parallel) or "2.05, 2.06, 2.33".

    A standard uncertainty may follow each in brackets, in units of the last digit: "2.0061(2)".

    Raises
    ------
    InputError
    """
    right = 'write 1, 2 or 3 g values such as "2.05, 2.06, 2.33" or "2.0061(2)"'
    words = [word for word in re.split(r"[,\s]+", text.strip()) if word]
    if len(words) not in (1, 2, 3):
        raise InputError(f'"{text:.60}" holds {len(words)} values', right, place="measured")
    pairs = []
    for word in words:
        match = re.fullmatch(r"(-?\d+(?:\.(\d*))?)(?:\((\d+)\))?", word)
        if match is None:
            raise InputError(f'"{word:.30}" is not a g value', right, place="measured")
        unit = 10.0 ** -len(match[2] or "")
        value, uncertainty = float(match[1]), int(match[3] or 0) * unit
        if not 0 <= abs(value) < 100:
            raise InputError(f"g = {value:g} is beyond anything measured", right, place="measured")
        pairs.append((abs(value), uncertainty))
    full = pairs * 3 if len(pairs) == 1 else [pairs[0], pairs[0], pairs[1]] if len(pairs) == 2 else pairs
    return MeasuredG(tuple(p[0] for p in full), tuple(p[1] for p in full), len(pairs))


def measured_from_parameters(parameters: Mapping[str, Mapping[str, object]], species: str | None = None) -> MeasuredG:
    """Take a measured g from the `parameters` of an outcome (outcome.json).

    Parameters
    ----------
    parameters : mapping of name -> {"value", "uncertainty", ...}
    species : str, optional
        Needed when several species have a g.

    Raises
    ------
    InputError
    """
    found: dict[str, dict[str, Mapping[str, object]]] = {}
    for name, entry in parameters.items():
        head, _, tail = name.rpartition(".")
        if tail in ("g", "g_perp", "g_par", "g_x", "g_y", "g_z"):
            found.setdefault(head, {})[tail] = entry
    if not found:
        raise InputError("the outcome holds no g", "give the outcome.json of a fit", place="parameters")
    if species is None:
        if len(found) > 1:
            raise InputError(f"the outcome holds g of {', '.join(found)}", "name one of them", place="parameters")
        species = next(iter(found))
    if species not in found:
        raise InputError(f'the outcome has no g of "{species}"', f"it has {', '.join(found)}", place="parameters")
    own = found[species]
    names = ["g"] * 3 if "g" in own else ["g_perp", "g_perp", "g_par"] if "g_perp" in own else ["g_x", "g_y", "g_z"]
    missing = [n for n in names if n not in own]
    if missing:
        raise InputError(f"{species}.{missing[0]} is missing", "a whole g is needed", place="parameters")
    values = tuple(abs(float(own[n]["value"])) for n in names)
    uncertainties = tuple(float(own[n].get("uncertainty") or 0.0) for n in names)
    return MeasuredG(values, uncertainties, len(set(names)))


def free_ratio(level: IonLevel) -> float | None:
    """Return r = <L>/<S> of the free ground level, the yardstick of surviving orbital moment."""
    return orbital_to_spin(*numbers_of(level))


def surviving_fraction(
    g: tuple[float, ...], level: IonLevel, uncertainties: tuple[float, ...] = (0.0, 0.0, 0.0)
) -> tuple[tuple[float, ...], tuple[float, ...]] | None:
    """Return f_i = (g_i - g_e)/r and its uncertainty, for an orbital-singlet ground state; None without r."""
    r = free_ratio(level)
    if r is None:
        return None
    fractions = tuple((x - level.g_spin) / r for x in g)
    return fractions, tuple(u / abs(r) for u in uncertainties)


def quench_row(
    name: str,
    *,
    model: IonModel | None = None,
    measured: MeasuredG | None = None,
    g_spin: float | None = None,
    temperatures: Sequence[float] = (),
) -> QuenchRow:
    """Compare one ion, free, in a crystal field and measured.

    Parameters
    ----------
    name : str
    model : IonModel, optional
        The ion in its field; the typical one of the tables when left out (named in `crystal_field`), and no field at
        all, said in the notes, when the tables have none.
    measured : MeasuredG, optional
    g_spin : float, optional
        See `lande.lookup`.
    temperatures : sequence of float
        At which the effective moment is wanted as well, K.
    """
    level = lookup(name, g_spin=g_spin)
    notes = [level.note] if level.note else []
    if model is None:
        try:
            model = default_model(name)
        except InputError as error:
            notes.append(f"{error.found}; {error.right}")
    if model is not None and g_spin is not None:
        model = replace(model, g_spin=g_spin)
    row: dict[str, Any] = {}
    ruler = level  # the free level that surviving orbital moments are measured against
    if model is not None:
        if str(model.shell) not in (level.configuration or "").split():
            ruler = lookup(str(model.shell), g_spin=g_spin)
            notes.append(f"in a crystal its configuration is {model.shell}, free level {ruler.term}")
        row = _crystal_part(model, ruler, notes, temperatures)
    if measured is not None:
        row["measured"] = measured
        row |= _measured_part(measured, ruler, row, notes)
    return QuenchRow(level=level, spin_only=level.g_spin, notes=tuple(dict.fromkeys(notes)), **row)


def _crystal_part(model: IonModel, level: IonLevel, notes: list[str], temperatures: Sequence[float]) -> dict[str, Any]:
    """Fill what the crystal-field model says."""
    levels = solve(model)
    remark = model.crystal.remark or f"{model.crystal.form} field given"
    row: dict[str, Any] = {"crystal_field": remark, "levels": _lowest_levels(levels)}
    ground = ground_state(model, levels)
    if isinstance(ground, str):
        notes.append(ground.removeprefix(f"{model.name}: "))
        manifold = levels.degeneracies()[0]
    elif isinstance(ground, SpinHamiltonian):
        manifold = round(2 * ground.S) + 1
        row |= {"kind": "spin Hamiltonian", "effective_spin": ground.S, "g_crystal": tuple(ground.g_principal.tolist())}
        row |= {"D": ground.D, "E": ground.E, "projection_error": ground.zfs_error} if ground.S >= 1 else {}
        row["g_from_orbital"] = tuple((ground.g_principal - model.g_spin).tolist())
        axes = ground.g_axes
    else:
        manifold = 2
        row |= {"kind": "doublet", "effective_spin": 0.5, "g_crystal": tuple(ground.principal.tolist())}
        row["g_from_orbital"] = tuple(ground.orbital.tolist())
        axes = ground.axes
    if isinstance(ground, SpinHamiltonian) and model.shell.l < 3:
        simple = first_order(model)
        row["g_first_order"] = tuple(np.einsum("ji,jk,ki->i", axes, simple.g, axes).tolist())
        row["mixing"] = simple.terms
    row["fraction"] = _model_fraction(ground, model, levels, level)
    # L and S do not leave a term: levels above it matter neither thermally nor by mixing.
    if levels.complete or levels.excitation[-1] > 12 * K_B_OVER_H * ROOM:
        found = susceptibility(levels, [ROOM, *temperatures]).moment
        row["moment_300K"] = float(found[0])
        row["moments"] = tuple((float(T), float(p)) for T, p in zip(temperatures, found[1:], strict=True))
        if manifold < len(levels.energies):
            row["independent"] = float(np.trace(independent_part(levels, manifold=manifold)) / 3)
    return row


def _lowest_levels(levels: Levels) -> tuple[tuple[float, int], ...]:
    """Return energy and number of states of the lowest levels."""
    sizes = levels.degeneracies()[:SHOWN]
    first = np.cumsum((0, *sizes[:-1]))
    return tuple((float(levels.excitation[i]), n) for i, n in zip(first, sizes, strict=True))


def ground_state(model: IonModel, levels: Levels) -> SpinHamiltonian | DoubletG | str:
    """Return the spin Hamiltonian of the ground manifold, else its doublet's g, else why there is neither.

    For f ions other than half-filled ones the doublet alone is asked for: their orbital moment is not quenched.
    """
    reason = ""
    if model.space != "level" and (model.shell.l < 3 or model.shell.count == 7):
        try:
            return spin_hamiltonian(model, levels=levels)
        except InputError as error:
            reason = error.found
    if not model.kramers:
        return f"{model.name or model.shell}: no g of a doublet, since the number of electrons is even" + (
            f", and no spin Hamiltonian: {reason}" if reason else ""
        )
    try:
        return doublet_g(levels)
    except InputError as error:
        return error.found


def _model_fraction(
    ground: SpinHamiltonian | DoubletG | str, model: IonModel, levels: Levels, level: IonLevel
) -> tuple[float, ...] | None:
    """Return the surviving fraction: (g - g_e)/r of a spin, (<L>/<S>)/r of a doublet's exact states."""
    r = free_ratio(level)
    if r is None or isinstance(ground, str):
        return None
    if isinstance(ground, SpinHamiltonian):
        return tuple(((ground.g_principal - model.g_spin) / r).tolist())
    orbital = _divided(ground.orbital, model.reduction)
    spin = _divided(ground.spin, model.g_spin)
    return tuple(
        (model.reduction * o / s / r) if abs(s) > 1e-9 else math.nan for o, s in zip(orbital, spin, strict=True)
    )


def _divided(values: NDArray[Any], by: float) -> NDArray[Any]:
    return values / by if by else np.zeros_like(values)


def _measured_part(measured: MeasuredG, level: IonLevel, row: Mapping[str, Any], notes: list[str]) -> dict[str, Any]:
    """Fill the surviving fraction of the measurement."""
    S, L, _ = numbers_of(level)
    if L == 0 or S == 0:
        effective = _effective_g(measured, row)
        if effective:
            notes.append(effective)
        notes.append(f"the free level {level.term} has no orbital moment: the surviving fraction has no yardstick")
        return {}
    of_f = "f" in (level.configuration or "")
    if row.get("kind") == "doublet" or (of_f and row.get("kind") != "spin Hamiltonian"):
        notes.append("orbital moment unquenched or strongly mixed: the surviving fraction is the model's <L>")
        return {}
    effective = _effective_g(measured, row)
    if effective:
        notes.append(effective)
        return {}
    result = surviving_fraction(measured.values, level, measured.uncertainties)
    if result is None:
        return {}
    return {"fraction_measured": result[0], "fraction_uncertainty": result[1]}


def _effective_g(measured: MeasuredG, row: Mapping[str, Any]) -> str:
    """Say which doublet of a high spin the measurement looks like, where it is far from the spin's own g."""
    S, own = row.get("effective_spin"), row.get("g_crystal")
    if not isinstance(S, float) or own is None or S < 1.5 or round(2 * S) % 2 == 0:
        return ""
    if max(abs(a - b) for a, b in zip(measured.values, own, strict=True)) < FAR:
        return ""
    best = doublet_matches(measured.values, spins=(S,), g=float(np.mean(own)))[0]
    if best.misfit > 0.1:
        return ""
    return (
        f"measured is no g of S = {half(S)} but looks like the effective g of its doublet {best.doublet} "
        f"at E/D = {best.rhombicity:.3f}"
    )
