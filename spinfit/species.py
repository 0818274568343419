"""What is paramagnetic: one species with its spins, tensors, nuclei, widths and amount.

Plain frozen dataclasses in internal units: energies as E/h in MHz, fields in mT, angles in rad.
A tensor keeps the form in which it was given, one number (isotropic), two ([perpendicular,
parallel]) or three ([x, y, z]); `principal` expands it.  Tilts are Euler angles (alpha, beta,
gamma), intrinsic z, y', z'', that carry the molecular axes into the tensor's own axes
(`tilt_matrix`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from spinfit.errors import InputError

Angles = tuple[float, float, float]
NO_TILT: Angles = (0.0, 0.0, 0.0)


def principal(tensor: tuple[float, ...]) -> NDArray[np.float64]:
    """Expand a tensor given as 1, 2 or 3 numbers to its principal values, shape (3,).

    One number is isotropic, two are (perpendicular, parallel) with z the parallel axis, three are
    (x, y, z).
    """
    if len(tensor) == 1:
        return np.full(3, float(tensor[0]))
    if len(tensor) == 2:
        return np.array([tensor[0], tensor[0], tensor[1]], dtype=float)
    return np.array(tensor, dtype=float)


def tilt_matrix(tilt: Angles) -> NDArray[np.float64]:
    """Return the tensor's axes in molecular components, as columns, shape (3, 3).

    `tilt` is (alpha, beta, gamma) in rad, intrinsic z, y', z'' rotations.
    """
    matrix: NDArray[np.float64] = Rotation.from_euler("ZYZ", tilt).as_matrix()
    return matrix


def tensor_matrix(tensor: tuple[float, ...], tilt: Angles = NO_TILT) -> NDArray[np.float64]:
    """Return a symmetric tensor in molecular axes, shape (3, 3): R diag(principal) R^T."""
    axes = tilt_matrix(tilt)
    return (axes * principal(tensor)) @ axes.T


def _half_integer(value: float, key: str) -> None:
    if not (math.isfinite(value) and value > 0 and float(2 * value).is_integer()):
        raise InputError(
            f"a spin of {value:g} is impossible", 'write a positive multiple of 1/2 such as "5/2"', place=key
        )


def _finite(values: tuple[float, ...], key: str) -> None:
    if not all(math.isfinite(v) for v in values):
        raise InputError(f"{values} holds a value that is not finite", "write finite numbers", place=key)


def _tensor(values: tuple[float, ...], key: str, traceless: bool = False) -> None:
    if len(values) not in (1, 2, 3):
        raise InputError(
            f"{len(values)} numbers", "write 1 (isotropic), 2 (perpendicular, parallel) or 3 (x, y, z)", place=key
        )
    _finite(values, key)
    if traceless:
        full = principal(values)
        if abs(full.sum()) > 1e-6 * max(np.abs(full).max(), 1e-300):
            raise InputError(
                f"the trace is {full.sum():g}, not 0",
                f"write traceless principal values, e.g. {', '.join(f'{v:g}' for v in full - full.mean())}",
                place=key,
            )


@dataclass(frozen=True)
class Spin:
    """One electron spin (or a whole J multiplet).

    Attributes
    ----------
    S : float
        Spin quantum number, a positive multiple of 1/2.
    g : tuple of float
        1, 2 or 3 principal values, dimensionless.
    D, E : float
        Zero-field splitting, MHz: D-tensor diag(-D/3+E, -D/3-E, 2D/3) in its own axes.
    rhombicity : float or None
        E/D, when the user gave that in place of E; `E` is then ignored (`zfs_E` is what counts).
    g_tilt, D_tilt : (alpha, beta, gamma)
        rad.
    stevens : tuple of ((k, q), MHz)
        Stevens operator coefficients B_k^q in molecular axes.
    """

    S: float = 0.5
    g: tuple[float, ...] = (2.0023,)
    D: float = 0.0
    E: float = 0.0
    rhombicity: float | None = None
    g_tilt: Angles = NO_TILT
    D_tilt: Angles = NO_TILT
    stevens: tuple[tuple[tuple[int, int], float], ...] = ()

    def __post_init__(self) -> None:
        _half_integer(self.S, "S")
        _tensor(self.g, "g")
        _finite((self.D, self.E), "D, E")
        _finite(self.g_tilt + self.D_tilt, "tilt")
        if self.rhombicity is not None:
            _finite((self.rhombicity,), "rhombicity")
        for (k, q), value in self.stevens:
            key = f"B{k}_{'m' if q < 0 else ''}{abs(q)}"
            if k not in (2, 4, 6) or abs(q) > k:
                raise InputError("there is no such operator", "k is 2, 4 or 6 and q from -k to k", place=key)
            if k > 2 * self.S:
                raise InputError(
                    f"k = {k} has no effect on S = {self.S:g}", f"k goes up to 2S = {2 * self.S:g}", place=key
                )
            _finite((value,), key)

    @property
    def zfs_E(self) -> float:
        """E in MHz, from E itself or from the rhombicity."""
        return self.E if self.rhombicity is None else self.rhombicity * self.D


@dataclass(frozen=True)
class Nucleus:
    """One nucleus, or several equivalent ones.

    Attributes
    ----------
    isotope, element : str or None
        Exactly one of the two: "63Cu", or "Cu" for every isotope in natural abundance.
    name : str or None
        How its parameters are called, where not by the isotope or element.
    A : tuple of float
        Hyperfine coupling, MHz, 1, 2 or 3 principal values.
    P : tuple of float
        Quadrupole coupling, MHz, traceless.
    A_tilt, P_tilt : (alpha, beta, gamma)
        rad.
    count : int
        How many equivalent ones there are.
    couples_to : int
        Which spin, counted from 1.
    treat : str
        "auto", "exact", "first order" or "second order".
    """

    isotope: str | None = None
    element: str | None = None
    name: str | None = None
    A: tuple[float, ...] = (0.0,)
    P: tuple[float, ...] = (0.0, 0.0, 0.0)
    A_tilt: Angles = NO_TILT
    P_tilt: Angles = NO_TILT
    count: int = 1
    couples_to: int = 1
    treat: str = "auto"

    def __post_init__(self) -> None:
        if (self.isotope is None) == (self.element is None):
            raise InputError("needs exactly one of isotope and element", 'write isotope = "63Cu" or element = "Cu"')
        _tensor(self.A, "A")
        _tensor(self.P, "P", traceless=True)
        _finite(self.A_tilt + self.P_tilt, "tilt")
        if self.count < 1:
            raise InputError(f"count = {self.count}", "write a whole number of at least 1", place="count")
        if self.treat not in ("auto", "exact", "first order", "second order"):
            raise InputError(
                f'"{self.treat}" is not known', 'write "auto", "exact", "first order" or "second order"', place="treat"
            )


@dataclass(frozen=True)
class Exchange:
    """Coupling of two spins, MHz: J S1.S2 + S1.T.S2 + d.(S1 x S2); J > 0 is antiferromagnetic.

    Attributes
    ----------
    between : (int, int)
        Which spins, counted from 1; their order is that of d.
    J : float
        MHz.
    dipolar : tuple of float
        T, MHz, traceless.
    tilt : (alpha, beta, gamma)
        rad; turns T only.
    antisymmetric : (float, float, float)
        d, MHz, in molecular axes.
    """

    between: tuple[int, int] = (1, 2)
    J: float = 0.0
    dipolar: tuple[float, ...] = (0.0, 0.0, 0.0)
    tilt: Angles = NO_TILT
    antisymmetric: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        _finite((self.J,), "J")
        _tensor(self.dipolar, "dipolar", traceless=True)
        _finite(self.tilt + self.antisymmetric, "tilt, antisymmetric")
        if self.between[0] == self.between[1]:
            raise InputError(f"spin {self.between[0]} with itself", "name two different spins", place="between")


@dataclass(frozen=True)
class Width:
    """What every resonance is broadened by.

    Attributes
    ----------
    gaussian, lorentzian : float
        Peak-to-peak widths of the derivative, mT, each component's own.
    hidden_hyperfine : tuple of float
        FWHM in MHz along the g axes, 1, 2 or 3 numbers.
    a, b, c : float or None
        Solution only: peak-to-peak width a + b m + c m^2, mT.
    """

    gaussian: float = 0.0
    lorentzian: float = 0.0
    hidden_hyperfine: tuple[float, ...] = (0.0,)
    a: float | None = None
    b: float | None = None
    c: float | None = None

    def __post_init__(self) -> None:
        for key in ("gaussian", "lorentzian"):
            value = getattr(self, key)
            if not (math.isfinite(value) and value >= 0):
                raise InputError(f"a width of {value:g} mT", "write a width that is not negative", place=f"width.{key}")
        _tensor(self.hidden_hyperfine, "width.hidden_hyperfine")
        if min(self.hidden_hyperfine) < 0:
            raise InputError("a negative width", "write widths that are not negative", place="width.hidden_hyperfine")


@dataclass(frozen=True)
class Spread:
    """Gaussian distributions across the sample, each as its FWHM.

    Attributes
    ----------
    g : tuple of float
        Dimensionless, 1, 2 or 3 numbers.
    D, E : float
        MHz.
    A : tuple of float
        MHz, 1, 2 or 3 numbers.
    correlation_g_A, correlation_D_E : float
        Between the two distributions, -1 to 1.
    tilt : float
        rad; of a crystal's mosaic: each piece is turned by a little about each of three axes.
    """

    g: tuple[float, ...] = (0.0,)
    D: float = 0.0
    E: float = 0.0
    A: tuple[float, ...] = (0.0,)
    correlation_g_A: float = 0.0
    correlation_D_E: float = 0.0
    tilt: float = 0.0

    def __post_init__(self) -> None:
        _tensor(self.g, "spread.g")
        _tensor(self.A, "spread.A")
        if min(self.g + self.A + (self.D, self.E, self.tilt)) < 0:
            raise InputError("a negative spread", "write spreads that are not negative", place="spread")
        for key in ("correlation_g_A", "correlation_D_E"):
            if not -1 <= getattr(self, key) <= 1:
                raise InputError(
                    f"{getattr(self, key):g}", "a correlation lies between -1 and 1", place=f"spread.{key}"
                )

    @property
    def any(self) -> bool:
        """Whether anything is spread at all."""
        return max(self.g + self.A + (self.D, self.E, self.tilt)) > 0


@dataclass(frozen=True)
class Species:
    """One paramagnetic species.

    Attributes
    ----------
    name : str
        How parameters are called: ``"cu"`` gives ``"cu.g_z"``.
    spins : tuple of Spin
        One, or several coupled by `exchange`.
    nuclei : tuple of Nucleus
    exchange : tuple of Exchange
    width : Width
    spread : Spread
    amount : float
        Relative number of spins (of species, not of unpaired electrons).
    populations : tuple of float or None
        Sublevels at zero field, low to high, in place of a temperature; scaled to sum to 1.
    ion : str or None
        Such as "Cu2+": used for starts and for the comparison with the free ion.
    crystal_field : frozen data or None
        What the one spin follows from, where it was given so; `spins` holds what it leads to.  Physics looks
        at `spins` alone.
    """

    name: str = "species"
    spins: tuple[Spin, ...] = (Spin(),)
    nuclei: tuple[Nucleus, ...] = ()
    exchange: tuple[Exchange, ...] = ()
    width: Width = field(default_factory=lambda: Width(gaussian=1.0))
    spread: Spread = Spread()
    amount: float = 1.0
    populations: tuple[float, ...] | None = None
    ion: str | None = None
    crystal_field: Any = None

    def __post_init__(self) -> None:
        if not self.spins:
            raise InputError("has no spin", 'give S, e.g. S = "1/2"', place=self.name)
        if not math.isfinite(self.amount):
            raise InputError(f"amount = {self.amount}", "write a finite number", place="amount")
        if self.populations is not None:
            states = math.prod(round(2 * spin.S + 1) for spin in self.spins)
            _finite(self.populations, "populations")
            if len(self.populations) != states or min(self.populations) < 0 or sum(self.populations) <= 0:
                found, right = f"{self.populations}", f"write {states} numbers, none negative, low to high"
                raise InputError(found, right, place="populations")
        n = len(self.spins)
        for nucleus in self.nuclei:
            if not 1 <= nucleus.couples_to <= n:
                raise InputError(
                    f"there is no spin {nucleus.couples_to}", f"spins are counted from 1 to {n}", place="couples_to"
                )
        for exchange in self.exchange:
            for k in exchange.between:
                if not 1 <= k <= n:
                    raise InputError(f"there is no spin {k}", f"spins are counted from 1 to {n}", place="between")
