"""The same energies in the other units that papers quote: MHz, cm^-1, mT.

mT is the field at which g muB B / h is the energy, with the species' own g along the same axis (the
mean of its components where the quantity has no axis).  The uncertainty of g is left out of it.
"""

from __future__ import annotations

import re
from collections.abc import Mapping

from spinfit.errors import InputError
from spinfit.fitting.outcome import Outcome, Value
from spinfit.units import MU_B_OVER_H, from_unit, kind_of, to_unit

# Energies that papers quote in more than one unit; Stevens coefficients follow the same pattern.
_ENERGY = re.compile(r"(A|P|D|E|J_\d+|dipolar_\d+|antisymmetric_\d+|B\d_m?\d)(_(x|y|z|perp|par))?")
# Those that are compared with a field: couplings that split lines.
_SPLITTING = ("A", "D", "E", "dipolar")


def _mean_g(parameters: Mapping[str, Value], prefix: str, axis: str | None) -> float | None:
    """Return g of a species or spin along an axis, or its mean; None when it has none of its own."""
    if f"{prefix}.g" in parameters:
        return parameters[f"{prefix}.g"].value
    components = {
        name: parameters[f"{prefix}.g_{name}"].value for name in ("x", "y", "z") if f"{prefix}.g_{name}" in parameters
    }
    if f"{prefix}.g_par" in parameters:
        perp, par = parameters[f"{prefix}.g_perp"].value, parameters[f"{prefix}.g_par"].value
        components = {"x": perp, "y": perp, "z": par}
    if not components:
        return None
    named = {"perp": "x", "par": "z"}.get(axis or "", axis)
    return components.get(named) if named else sum(components.values()) / len(components)


def effective_rows(outcome: Outcome) -> list[dict[str, object]]:
    """Return rows {name, value, uncertainty, unit} of varied or tied energies in the other units."""
    rows: list[dict[str, object]] = []
    for name, value in outcome.parameters.items():
        match = _ENERGY.fullmatch(name.rpartition(".")[2])
        if match is None or not (value.varied or value.tied or value.derived) or not _is_energy(value.unit):
            continue
        energy = from_unit(value.value, value.unit, "energy")
        ratio = None if value.uncertainty is None else from_unit(value.uncertainty, value.unit, "energy")
        factors = {unit: to_unit(1.0, unit, "energy") for unit in ("MHz", "cm^-1") if unit != value.unit}
        if match[1].split("_")[0] in _SPLITTING:
            g = _mean_g(outcome.parameters, name.split(".")[0], match[3])
            if g:
                factors["mT"] = 1 / (abs(g) * MU_B_OVER_H)
        for unit, factor in factors.items():
            sigma = None if ratio is None else ratio * factor
            rows.append({"name": name, "value": energy * factor, "uncertainty": sigma, "unit": unit})
    return rows


def _is_energy(unit: str) -> bool:
    try:
        return bool(unit) and kind_of(unit) == "energy"
    except InputError:
        return False
