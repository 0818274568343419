"""The crystal field of a species: the numbers of an ion's model by name, and the spin that follows from them.

A species carries its field as plain frozen data, so that it can be compared, kept and rebuilt like every
other number of a model; g, D and E are worked out when a value changes.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache

from spinfit.errors import InputError
from spinfit.ion.model import IonModel, racah_to_slater
from spinfit.ion.parameters import SpinParameters, spin_parameters
from spinfit.species import Spin

FACTORS = ("reduction", "covalency")
"""Parameters that are plain numbers; all others are energies."""
LARGEST_FACTOR = 2.0
RACAH = ("B", "C")


@dataclass(frozen=True)
class SpeciesField:
    """An ion in its crystal field, as the numbers that may be varied.

    Attributes
    ----------
    base : IonModel
        What does not vary: shell, space, kind of field.  Its own numbers are replaced by `values`; it is
        compared by identity, so that fields of one file entry compare by their values.
    names : tuple of str
        Of `base.parameters`, "B" and "C" in place of F2 and F4 where the repulsion was given so, and
        "reduction" (k of k L in the Zeeman operator) or "covalency" (k of L and of zeta alike).
    values : tuple of float
        MHz; plain numbers for `FACTORS`.
    """

    base: IonModel
    names: tuple[str, ...]
    values: tuple[float, ...]

    @property
    def own(self) -> tuple[str, ...]:
        """The parameters of the crystal field itself, without zeta, repulsion and factors."""
        return self.base.crystal.names

    @property
    def size(self) -> float:
        """Size of the whole field, MHz: its energies count from an arbitrary zero."""
        values = [v for n, v in zip(self.names, self.values, strict=True) if n in self.own]
        spread = max(values) - min(values) if self.base.crystal.form == "orbitals" else 0.0
        return spread or max(map(abs, values), default=0.0) or abs(self.base.zeta) or 1.0

    def scale(self, name: str) -> float:
        """Return the size on which a parameter matters: that of the field, its own, or 1 for a factor."""
        if name in FACTORS:
            return 1.0
        return self.size if name in self.own else abs(self.values[self.names.index(name)]) or self.size

    def model(self) -> IonModel:
        """Return the ion with the values put in."""
        values = dict(zip(self.names, self.values, strict=True))
        covalency = values.pop("covalency", None)
        if "B" in values:
            slater = racah_to_slater(values.pop("B"), values.pop("C"))
            values |= {f"F{k}": value for k, value in slater.items()}
        model = self.base.with_parameters(values)
        return model if covalency is None else model.with_covalency(covalency)


def species_field(
    base: IonModel, *, covalency: float | None = None, racah: tuple[float, float] | None = None
) -> SpeciesField:
    """Return the field of a species from a model.

    Parameters
    ----------
    base : IonModel
        Without covalency.
    covalency : float, optional
        Its k, a parameter in place of "reduction".
    racah : (B, C), optional
        MHz; parameters in place of F2 and F4.
    """
    values = base.parameters
    if racah is not None:
        values = {n: v for n, v in values.items() if n not in ("F2", "F4")} | dict(zip(RACAH, racah, strict=True))
    factor = {"reduction": base.reduction} if covalency is None else {"covalency": covalency}
    values = values | factor
    return SpeciesField(base, tuple(values), tuple(map(float, values.values())))


@lru_cache(maxsize=256)
def tensors_of(field: SpeciesField) -> SpinParameters:
    """Return S, g and D of the ground manifold, kept by the values.

    Raises
    ------
    InputError
        When the ground state is neither a spin nor a doublet.
    """
    return spin_parameters(field.model())


def spin_of(field: SpeciesField, S: float | None = None) -> Spin:
    """Return the spin that the field leads to.

    Parameters
    ----------
    S : float, optional
        What the species' spin is; another one is refused, since the levels would be other ones.

    Raises
    ------
    InputError
    """
    found = tensors_of(field)
    if S is not None and found.S != S:
        raise InputError(
            f"this crystal field has a ground state of S = {found.S:g}, not {S:g}",
            "stay on one side of the crossing, by limits or another start",
        )
    return found.as_spin()


def moved(field: SpeciesField, name: str, change: float) -> SpeciesField:
    """Return the field with one value changed by an amount."""
    k = field.names.index(name)
    values = (*field.values[:k], field.values[k] + change, *field.values[k + 1 :])
    return replace(field, values=values)
