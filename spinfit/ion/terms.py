"""LS terms of a configuration by counting, Hund's ground term and level, Landé intervals."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from itertools import combinations

from spinfit.errors import InputError
from spinfit.ion.names import Shell, half, term_symbol

Term = tuple[float, int]
"""(S, L)."""


def _shell_states(shell: Shell) -> Counter[tuple[int, int]]:
    """Count the determinants of a shell by (2 M_S, M_L)."""
    ms = range(-shell.l, shell.l + 1)
    counts: Counter[tuple[int, int]] = Counter()
    up_sums: dict[int, Counter[int]] = {}
    for k in range(min(shell.count, 2 * shell.l + 1) + 1):
        up_sums[k] = Counter(sum(c) for c in combinations(ms, k))
    for up in up_sums:
        down = shell.count - up
        if down not in up_sums:
            continue
        for m_up, n_up in up_sums[up].items():
            for m_down, n_down in up_sums[down].items():
                counts[up - down, m_up + m_down] += n_up * n_down
    return counts


def _peel(counts: Counter[tuple[int, int]]) -> Counter[Term]:
    """Turn numbers of states by (2 M_S, M_L) into numbers of terms: second differences."""

    def n(two_ms: int, ml: int) -> int:
        return counts.get((two_ms, ml), 0)

    terms: Counter[Term] = Counter()
    for two_s, L in counts:
        if two_s < 0 or L < 0:
            continue
        number = n(two_s, L) - n(two_s + 2, L) - n(two_s, L + 1) + n(two_s + 2, L + 1)
        if number:
            terms[two_s / 2, L] = number
    return terms


def ls_terms(shells: Sequence[Shell]) -> dict[Term, int]:
    """Count the LS terms of a configuration.

    Parameters
    ----------
    shells : sequence of Shell
        One or several; electrons of one shell are equivalent.

    Returns
    -------
    dict of (S, L) -> number of terms of that kind
        Highest S first, then highest L.
    """
    total: Counter[tuple[int, int]] = Counter({(0, 0): 1})
    for shell in shells:
        states = _shell_states(shell)
        joined: Counter[tuple[int, int]] = Counter()
        for (s1, m1), n1 in total.items():
            for (s2, m2), n2 in states.items():
                joined[s1 + s2, m1 + m2] += n1 * n2
        total = joined
    terms = _peel(total)
    return dict(sorted(terms.items(), key=lambda item: (-item[0][0], -item[0][1])))


def hund(shells: Sequence[Shell]) -> tuple[float, int, float]:
    """Return (S, L, J) of the ground level by Hund's rules.

    Each open shell is filled with the largest S, then the largest L; several open shells are coupled to
    the largest S and L.  J is the end of the multiplet that spin-orbit coupling lowers: in the stretched
    state its sign is that of the sum of +L_i (shells less than half full) and -L_i (more than half full).
    Two open shells that are not s follow the rules less faithfully (Ce: 4f 5d lies lowest as 1G4).
    """
    S, L, sign = 0.0, 0, 0
    for shell in shells:
        orbitals = 2 * shell.l + 1
        up = min(shell.count, orbitals)
        down = shell.count - up
        shell_l = sum(range(shell.l, shell.l - up, -1)) + sum(range(shell.l, shell.l - down, -1))
        S += (up - down) / 2
        L += shell_l
        sign += shell_l if down == 0 else -shell_l
    return S, L, L + S if sign < 0 else abs(L - S)


def level_js(S: float, L: int) -> tuple[float, ...]:
    """Return the J of a term, from |L-S| to L+S."""
    return tuple(abs(L - S) + k for k in range(int(L + S - abs(L - S)) + 1))


def check_level(S: float, L: int, J: float) -> None:
    """Refuse a J that the term does not have.

    Raises
    ------
    InputError
        Naming the J that it has.
    """
    if J not in level_js(S, L):
        raise InputError(
            f"J = {J:g} does not occur in {term_symbol(S, L)}",
            "J is one of " + ", ".join(half(j) for j in level_js(S, L)),
        )


def lande_intervals(S: float, L: int, lam: float) -> dict[float, float]:
    """Return J -> energy of the levels of lambda L.S, in the unit of `lam`, centroid at 0.

    E(J) = lambda/2 [J(J+1) - L(L+1) - S(S+1)]; neighbours differ by lambda J (A. Landé, Z. Phys. 15, 189 (1923)).
    """
    return {J: lam / 2 * (J * (J + 1) - L * (L + 1) - S * (S + 1)) for J in level_js(S, L)}
