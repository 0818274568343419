"""More about a free ion than its ground level, as plain records: all terms, all levels, where Landé's lines end."""

from __future__ import annotations

from typing import Any

from spinfit.errors import InputError
from spinfit.ion.defaults import free_ion
from spinfit.ion.free_levels import free_levels
from spinfit.ion.lande import IonLevel, numbers_of
from spinfit.ion.names import parse_name, term_symbol
from spinfit.ion.terms import ls_terms
from spinfit.ion.weak_field import parting_field
from spinfit.units import MHZ_PER_WAVENUMBER

SHOWN = 12
"""How many levels of the whole configuration are listed."""


def term_details(level: IonLevel) -> dict[str, Any]:
    """Return every LS term of the configuration with how often it occurs.

    Raises
    ------
    InputError
        For a level that was given without a configuration.
    """
    shells = parse_name(level.ion).shells
    if not shells:
        raise InputError(
            f"{level.ion} is a level without a configuration", 'name an ion or a configuration such as "3d7"'
        )
    return {"terms": [{"term": term_symbol(S, L), "count": n} for (S, L), n in ls_terms(shells).items()]}


def level_details(level: IonLevel) -> dict[str, Any]:
    """Return the levels of the ground term, the end of the weak field, and levels in intermediate coupling.

    Keys: "levels" (term, J, g, energy by Landé's rule), "weak_field_limit_mT" (where first-order and exact
    levels part by 1 %; None without lambda), "intermediate" (lowest levels of the whole configuration; empty
    where the tables lack a constant) and "source".
    """
    S, L, J = numbers_of(level)
    symbol = term_symbol(S, int(L))
    listed = [{"level": f"{symbol}{j}", "J": j, "g": g, "energy_cm1": energy} for j, g, energy in level.levels]
    lam = None if level.spin_orbit is None else level.spin_orbit.lambda_cm1
    part = None
    if lam is not None and level.g_J:
        part = parting_field(S, int(L), J, lam * MHZ_PER_WAVENUMBER, g_spin=level.g_spin, g_orbital=level.g_orbital)
    found, source = _intermediate(level)
    return {"levels": listed, "weak_field_limit_mT": part, "intermediate": found, "source": source}


def _intermediate(level: IonLevel) -> tuple[list[dict[str, Any]], str]:
    """Return the lowest levels of the whole configuration and the source of its constants."""
    if level.configuration is None:
        return [], ""
    try:
        model, source = free_ion(level.ion)
    except InputError:
        return [], ""
    return [
        {
            "label": x.label,
            "energy_cm1": x.energy / MHZ_PER_WAVENUMBER,
            "g": x.g,
            "share": x.share,
        }
        for x in free_levels(model, lowest=SHOWN)
    ], source
