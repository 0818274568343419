"""One electron in a shell l: real orbitals, spherical tensors and turned orbitals.

Basis |l, m> with m = l, l-1, ..., -l and the phases of E. U. Condon and G. H. Shortley, the order of
`spinfit.operators`.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spinfit.operators import ladder, spin_matrices

Matrix = NDArray[np.complex128]

# Real orbitals as (|m|, kind): cosine combination (|-m> + (-1)^m |m>)/sqrt2, sine i(|-m> - (-1)^m |m>)/sqrt2.
REAL_ORBITALS: dict[int, dict[str, tuple[int, str]]] = {
    1: {"z": (0, "c"), "x": (1, "c"), "y": (1, "s")},
    2: {"z2": (0, "c"), "xz": (1, "c"), "yz": (1, "s"), "x2-y2": (2, "c"), "xy": (2, "s")},
    3: {
        "z3": (0, "c"),
        "xz2": (1, "c"),
        "yz2": (1, "s"),
        "z(x2-y2)": (2, "c"),
        "xyz": (2, "s"),
        "x(x2-3y2)": (3, "c"),
        "y(3x2-y2)": (3, "s"),
    },
}
"""Names of the real orbitals of p, d and f shells."""


@lru_cache(maxsize=64)
def real_orbital(l: int, m: int, kind: str) -> NDArray[np.complex128]:  # noqa: E741
    """Return a real orbital as a vector over |l, m>, shape (2l+1,); `kind` is "c" (cosine) or "s" (sine)."""
    vector = np.zeros(2 * l + 1, dtype=complex)
    if m == 0:
        vector[l] = 1.0
    else:
        sign = (-1) ** m
        plus, minus = l - m, l + m
        if kind == "c":
            vector[minus], vector[plus] = 1 / math.sqrt(2), sign / math.sqrt(2)
        else:
            vector[minus], vector[plus] = 1j / math.sqrt(2), -1j * sign / math.sqrt(2)
    vector.flags.writeable = False
    return vector


def named_orbital(l: int, name: str) -> NDArray[np.complex128]:  # noqa: E741
    """Return the real orbital of that name, shape (2l+1,)."""
    return real_orbital(l, *REAL_ORBITALS[l][name])


@lru_cache(maxsize=256)
def tensor(l: int, k: int, q: int) -> Matrix:  # noqa: E741
    """Return the matrix of the normalised spherical harmonic C^k_q = sqrt(4 pi/(2k+1)) Y_kq in |l, m>.

    Shape (2l+1, 2l+1).  C^k_k is proportional to L_+^k and the rest follows from
    [L_-, T_q] = sqrt(k(k+1) - q(q-1)) T_(q-1); the scale from <l 0|C^k_0|l 0>, an integral of three
    Legendre polynomials that Gauss's rule does exactly.
    """
    if q < 0:
        return (-1) ** q * tensor(l, k, -q).conj().T
    raising = ladder(l)
    lowering = raising.conj().T
    component = np.linalg.matrix_power(raising, k)
    wanted = None
    for step in range(k, -1, -1):
        if step == q:
            wanted = component
        if step > 0:
            component = (lowering @ component - component @ lowering) / math.sqrt(k * (k + 1) - step * (step - 1))
    nodes, weights = np.polynomial.legendre.leggauss(2 * l + k)
    legendre_l = np.polynomial.legendre.Legendre.basis(l)(nodes)
    legendre_k = np.polynomial.legendre.Legendre.basis(k)(nodes)
    integral = (2 * l + 1) / 2 * np.sum(weights * legendre_l**2 * legendre_k)
    scaled = wanted * (integral / component[l, l].real)
    scaled.flags.writeable = False
    return scaled


def tesseral(l: int, k: int, q: int) -> Matrix:  # noqa: E741
    """Return the Hermitian combination that a real Wybourne coefficient B^k_q multiplies.

    q = 0: C^k_0; q > 0: C^k_-q + (-1)^q C^k_q; q < 0: i (C^k_-|q| - (-1)^q C^k_|q|)
    (B. G. Wybourne, Spectroscopic Properties of Rare Earths (1965)).
    """
    if q == 0:
        return tensor(l, k, 0)
    m = abs(q)
    if q > 0:
        return tensor(l, k, -m) + (-1) ** m * tensor(l, k, m)
    return 1j * (tensor(l, k, -m) - (-1) ** m * tensor(l, k, m))


STEVENS_OVER_WYBOURNE: dict[tuple[int, int], float] = {
    (2, 0): 1 / 2,
    (2, 1): math.sqrt(6),
    (2, 2): math.sqrt(6) / 2,
    (4, 0): 1 / 8,
    (4, 1): math.sqrt(5) / 2,
    (4, 2): math.sqrt(10) / 4,
    (4, 3): math.sqrt(35) / 2,
    (4, 4): math.sqrt(70) / 8,
    (6, 0): 1 / 16,
    (6, 1): math.sqrt(42) / 8,
    (6, 2): math.sqrt(105) / 16,
    (6, 3): math.sqrt(105) / 8,
    (6, 4): 3 * math.sqrt(14) / 16,
    (6, 5): 3 * math.sqrt(77) / 8,
    (6, 6): math.sqrt(231) / 16,
}
"""A_k^q <r^k> = STEVENS_OVER_WYBOURNE[k, |q|] B^k_q (M. T. Hutchings, Solid State Phys. 16, 227 (1964);
D. J. Newman, B. Ng, Crystal Field Handbook (2000); from memory, re-derived in the tests)."""


def rotation(l: int, alpha: float, beta: float, gamma: float) -> Matrix:  # noqa: E741
    """Return exp(-i alpha L_z) exp(-i beta L_y) exp(-i gamma L_z), shape (2l+1, 2l+1).

    Its columns are the orbitals |l, m> turned by the angles (rad).
    """
    m = l - np.arange(2 * l + 1)
    values, vectors = np.linalg.eigh(spin_matrices(l)[1])
    about_y = (vectors * np.exp(-1j * beta * values)) @ vectors.conj().T
    return np.exp(-1j * alpha * m)[:, None] * about_y * np.exp(-1j * gamma * m)
