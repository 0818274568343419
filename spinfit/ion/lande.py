"""The free ion: ground level by Hund's rules, Landé's g_J, effective moment.

Light on purpose: `spinfit ion` starts with this module and neither arrays nor optimisers come with it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from spinfit.errors import InputError
from spinfit.ion.names import Named, half, parse_name, term_symbol
from spinfit.ion.spin_orbit import SpinOrbit, spin_orbit_table
from spinfit.ion.terms import check_level, hund, lande_intervals, level_js
from spinfit.units import G_ELECTRON

NO_SHIFT = (
    "J = 0: g_J has no meaning, there is no first-order shift in a field; nothing is lost, since the moment "
    "comes in second order only, from mixing with the higher levels"
)


@dataclass(frozen=True)
class IonLevel:
    """Ground level of a free ion, or a level given by its symbol.

    Attributes
    ----------
    ion : str
        Canonical name: "Er3+", "3d7", "4F9/2".
    configuration : str or None
        Valence configuration, "4f11"; None when only a level was given.
    term : str
        The level, "4I15/2".
    S, L, J : str
        "3/2", "6", "15/2".
    g_J : float or None
        None for J = 0.
    moment : float
        p = g_J sqrt(J(J+1)), Bohr magnetons; 0 for J = 0.
    spin_only_moment : float
        g_S sqrt(S(S+1)), Bohr magnetons.
    levels : tuple of (J, g_J or None, energy in cm^-1 or None)
        Every level of the ground term; energies from Landé's interval rule, ground level at 0, where
        the spin-orbit constant is known.
    spin_orbit : SpinOrbit or None
    note : str
        What the reader should know; may be empty.
    g_spin, g_orbital : float
        What was used.
    """

    ion: str
    configuration: str | None
    term: str
    S: str
    L: str
    J: str
    g_J: float | None
    moment: float
    spin_only_moment: float
    levels: tuple[tuple[str, float | None, float | None], ...]
    spin_orbit: SpinOrbit | None
    note: str
    g_spin: float
    g_orbital: float

    def as_record(self) -> dict[str, object]:
        """Return the machine-readable form: ion, configuration, term, S, L, J, g_J, moment."""
        keys = ("ion", "configuration", "term", "S", "L", "J", "g_J", "moment")
        return {key: getattr(self, key) for key in keys}


def lande_g(S: float, L: float, J: float, *, g_spin: float | None = None, g_orbital: float = 1.0) -> float | None:
    """Return Landé's g_J of a level, None for J = 0.

    g_J = g_L [J(J+1) - S(S+1) + L(L+1)] / 2J(J+1) + g_S [J(J+1) + S(S+1) - L(L+1)] / 2J(J+1)
    (A. Landé, Z. Phys. 15, 189 (1923)).

    Parameters
    ----------
    S, L, J : float
    g_spin : float, optional
        The free electron's CODATA value by default; 2 for the textbook's, or another particle's.
    g_orbital : float, optional
        1 for an electron, 0 for a wholly quenched orbital moment.

    Raises
    ------
    InputError
        When J does not occur in the term or a g is not finite.
    """
    g_spin = _checked_g(g_spin, g_orbital)
    check_level(S, L, J)
    if J == 0:
        return None
    twice = 2 * J * (J + 1)
    orbital = J * (J + 1) - S * (S + 1) + L * (L + 1)
    spin = J * (J + 1) + S * (S + 1) - L * (L + 1)
    return (g_orbital * orbital + g_spin * spin) / twice


def _checked_g(g_spin: float | None, g_orbital: float) -> float:
    value = G_ELECTRON if g_spin is None else float(g_spin)
    for name, g in (("g_spin", value), ("g_orbital", g_orbital)):
        if not math.isfinite(g):
            raise InputError(f"{name} = {g}", "write a finite number")
    return value


def moment(g: float | None, J: float) -> float:
    """Return p = g sqrt(J(J+1)) in Bohr magnetons; 0 where there is no g."""
    return 0.0 if g is None else g * math.sqrt(J * (J + 1))


def orbital_to_spin(S: float, L: float, J: float) -> float | None:
    """Return r = <L>/<S> of a free level, the yardstick of a surviving orbital moment.

    r = [J(J+1) + L(L+1) - S(S+1)] / [J(J+1) - L(L+1) + S(S+1)], from the projections of L and S on J; for
    J = 0, where both vanish while L and S stay antiparallel and equal, -L/S.  None where there is no
    orbital moment or no spin.
    """
    if S == 0 or L == 0:
        return None
    if J == 0:
        return -L / S
    below = J * (J + 1) - L * (L + 1) + S * (S + 1)
    return None if below == 0 else (J * (J + 1) + L * (L + 1) - S * (S + 1)) / below


def lookup(name: str, *, g_spin: float | None = None, g_orbital: float = 1.0) -> IonLevel:
    """Return the ground level of a free ion with its Landé g and moments.

    Parameters
    ----------
    name : str
        "Er3+", "Er(III)", "Er+3", "N", "3d7", "2p3 3s1", or a level "4F9/2".
    g_spin, g_orbital : float, optional
        See `lande_g`.

    Raises
    ------
    InputError
        For a name that cannot be read.
    """
    named = parse_name(name)
    g_spin = _checked_g(g_spin, g_orbital)
    S, L, J = named.term or hund(named.open_shells)
    constant = spin_orbit_table().get(named.name)
    g = lande_g(S, L, J, g_spin=g_spin, g_orbital=g_orbital)
    return IonLevel(
        ion=named.name,
        configuration=named.configuration,
        term=term_symbol(S, L, J),
        S=half(S),
        L=str(L),
        J=half(J),
        g_J=g,
        moment=moment(g, J),
        spin_only_moment=moment(g_spin, S),
        levels=_levels(S, L, J, constant, g_spin, g_orbital),
        spin_orbit=constant,
        note=_note(S, L, J, named),
        g_spin=g_spin,
        g_orbital=g_orbital,
    )


def _levels(
    S: float, L: int, ground: float, constant: SpinOrbit | None, g_spin: float, g_orbital: float
) -> tuple[tuple[str, float | None, float | None], ...]:
    """List the term's levels from the ground level up, with g and energy."""
    lam = None if constant is None else constant.lambda_cm1
    energies = lande_intervals(S, L, lam) if lam is not None else {}
    js = sorted(level_js(S, L), key=lambda J: abs(J - ground))
    zero = energies.get(ground, 0.0)
    return tuple(
        (
            half(J),
            lande_g(S, L, J, g_spin=g_spin, g_orbital=g_orbital),
            energies[J] - zero if J in energies else None,
        )
        for J in js
    )


def _note(S: float, L: int, J: float, named: Named) -> str:
    """Say what is special about the level."""
    notes = []
    if J == 0 and (S or L):
        notes.append(NO_SHIFT)
    elif J == 0:
        notes.append("closed shells: no moment, g_J has no meaning and nothing is lost")
    if named.shells and named.term is not None:
        notes.append(f"observed ground level; Hund's rules would give {term_symbol(*hund(named.open_shells))}")
    elif len([s for s in named.open_shells if s.l > 0]) > 1:
        notes.append("two open shells: Hund's rules are less reliable here")
    return "; ".join(notes)


def numbers_of(level: IonLevel) -> tuple[float, float, float]:
    """Return (S, L, J) of a level as numbers."""
    halves = (text.partition("/") for text in (level.S, level.L, level.J))
    S, L, J = (int(whole) / int(under or 1) for whole, _, under in halves)
    return S, L, J
