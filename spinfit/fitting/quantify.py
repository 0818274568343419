"""Relative numbers of spins: an integral or a fitted area against that of a reference.

The area of an isotropic multiplet's field-swept absorption is, for one spin,

    g 2S B_S(h nu / kT)  ->  g (2/3) S(S+1) h nu / kT        (kT >> h nu: Curie's law)

times what the spectrometer makes of it: sqrt(power), gain, number of scans, and modulation amplitude
for the first harmonic (its square for the second).  One factor g is what a sweep of the field leaves
of the g^2 of the transition probability (R. Aasa, T. Vanngard, J. Magn. Reson. 19, 308 (1975), from
memory); for a powder with g = (g_x, g_y, g_z) it becomes the mean over directions n of

    1/2 [ tr(g g) - sum_i g_i^4 n_i^2 / g^2 ] / g,   g^2 = sum_i g_i^2 n_i^2,

which is computed here by quadrature and not by their approximation.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from spinfit.errors import InputError
from spinfit.fitting.integral import Integral
from spinfit.units import K_B_OVER_H, g_of

# Frequencies further apart than this part were hardly measured in one resonator.
_SAME_RESONATOR = 0.02
# A ratio with this relative uncertainty is no result.
_WORTHLESS = 0.5
# Gauss-Legendre points in cos(theta) and even points in phi of the mean over directions: exact to
# rounding for g values within a factor of 2.
_POLAR, _AZIMUTH = 48, 64


@dataclass(frozen=True)
class Conditions:
    """What a signal was measured under, and what is known of the species; None where nothing was said.

    Attributes
    ----------
    frequency, temperature, modulation, power : float or None
        MHz, K, mT peak to peak, mW.
    gain : float or None
        On a linear scale.
    scans : float or None
        Sweeps whose *sum* the trace is; an average counts as one.
    g : tuple of float or None
        One, two (perpendicular, parallel) or three values.
    S : float or None
    kinds : tuple of (fraction of spins, g, S)
        Of a model, in place of g and S.
    relative_uncertainty : float
        Standard uncertainty of everything else (tube, position, quality of the resonator), relative.
    """

    frequency: float | None = None
    temperature: float | None = None
    modulation: float | None = None
    power: float | None = None
    gain: float | None = None
    scans: float | None = None
    g: tuple[float, ...] | None = None
    S: float | None = None
    kinds: tuple[tuple[float, tuple[float, ...], float], ...] = ()
    relative_uncertainty: float = 0.0


@dataclass(frozen=True)
class FittedArea:
    """Amount times scale of a fit: what the model says is there, with nothing cut off.

    Attributes
    ----------
    value, uncertainty : float
        Sum over the species.
    fractions : mapping of species -> (value, uncertainty or None)
        Relative numbers of spins.
    thermal : bool
        Whether the model had a temperature, so that g, S and populations are accounted for in full;
        without one only g and S are.
    notes : tuple of (code, text)
    """

    value: float
    uncertainty: float
    fractions: dict[str, tuple[float, float | None]]
    thermal: bool
    notes: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True)
class Side:
    """The trace, or the reference.

    Attributes
    ----------
    name : str
    detect : str
    conditions : Conditions
    integral : Integral or None
    fitted : FittedArea or None
    """

    name: str
    detect: str
    conditions: Conditions
    integral: Integral | None = None
    fitted: FittedArea | None = None


@dataclass(frozen=True)
class Factor:
    """One correction: the ratio of integrals times all of them is the ratio of spins."""

    name: str
    trace: str
    reference: str
    factor: float
    fitted: bool = True


@dataclass(frozen=True)
class Share:
    """A number with its standard uncertainty, and what that is made of (relative)."""

    value: float
    uncertainty: float
    parts: dict[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class SpinRatio:
    """Spins of the trace over spins of the reference.

    Attributes
    ----------
    ratio : Share or None
        By integration.
    fitted : Share or None
        By the models' areas.
    species : mapping of name -> Share
        Of the trace's model, over the reference's spins.
    factors : tuple of Factor
    notes : tuple of (code, text)
    good : bool
        False when an integral does not stand out of its noise, or the ratio of its uncertainty.
    """

    ratio: Share | None
    fitted: Share | None
    species: dict[str, Share]
    factors: tuple[Factor, ...]
    notes: tuple[tuple[str, str], ...]
    good: bool


def field_swept_factor(g: Sequence[float]) -> float:
    """Intensity of a powder in a field sweep relative to g = 1: g itself for an isotropic g.

    Parameters
    ----------
    g : sequence of 1, 2 or 3 floats
        Isotropic; perpendicular and parallel; x, y, z.
    """
    x, y, z = (g[0],) * 3 if len(g) == 1 else (g[0], g[0], g[1]) if len(g) == 2 else tuple(g)
    squares = np.array([x, y, z], dtype=float) ** 2
    cosines, weights = np.polynomial.legendre.leggauss(_POLAR)
    phi = (np.arange(_AZIMUTH) + 0.5) * (2 * math.pi / _AZIMUTH)
    sines = np.sqrt(1 - cosines**2)
    n = np.stack(
        [np.outer(sines, np.cos(phi)), np.outer(sines, np.sin(phi)), np.outer(cosines, np.ones_like(phi))], axis=-1
    )
    square = (n**2) @ squares
    strength = (squares.sum() - (n**2) @ squares**2 / square) / 2 / np.sqrt(square)
    return float(weights @ strength.mean(axis=1) / 2)


def spin_factor(S: float, frequency: float | None, temperature: float | None) -> float:
    """Thermal part of a multiplet's intensity, in units of h nu / kT at 1 K and 1 MHz.

    S B_S(x) at x = h nu / kT in place of its limit S(S+1) x / 3, so that low temperatures come out right;
    without a temperature or a frequency S(S+1) alone.
    """
    if temperature is None:
        return S * (S + 1) * 2 / 3 * (1.0 if frequency is None else frequency)
    if frequency is None:
        return S * (S + 1) * 2 / 3 / temperature
    x = frequency / (K_B_OVER_H * temperature)
    if x < 1e-4:  # the difference of the two hyperbolic cotangents would be rounding
        return S * (S + 1) * 2 / 3 * frequency / temperature
    polarisation = (S + 0.5) / math.tanh((S + 0.5) * x) - 0.5 / math.tanh(x / 2)
    return 2 * polarisation * K_B_OVER_H


def compare_spins(trace: Side, reference: Side) -> SpinRatio:
    """Put a trace's spins against a reference's.

    Raises
    ------
    InputError
        For a condition that is known of one side only, and for traces that were detected differently.
    """
    if trace.detect != reference.detect:
        raise InputError(
            f"{trace.name} is a {trace.detect}, {reference.name} a {reference.detect}",
            "compare traces that were detected alike",
            place="reference",
        )
    notes: list[tuple[str, str]] = []
    shared = _instrument(trace, reference, notes)
    own: list[Factor] = []
    ratio = fitted = None
    good = True
    if trace.integral is not None and reference.integral is not None:
        notes += [*trace.integral.notes, *reference.integral.notes]
        good = not any(code == "no_signal" for code, _ in notes)
        own = _species(trace, reference, notes)
        ratio = _by_integrals(trace, reference, [*shared, *own])
    if trace.fitted is not None and reference.fitted is not None:
        more = _thermal(trace, reference)
        fitted = _by_areas(trace, reference, [*shared, *more])
        notes += [*trace.fitted.notes, *reference.fitted.notes]
    species = {}
    base = fitted or ratio
    if trace.fitted is not None and base is not None and len(trace.fitted.fractions) > 1:
        for name, (part, sigma) in trace.fitted.fractions.items():
            parts = dict(base.parts) | {"fraction": (sigma or 0.0) / part if part else 0.0}
            species[name] = Share(
                base.value * part, math.hypot(base.uncertainty * part, base.value * (sigma or 0)), parts
            )
    notes += _disagreement(ratio, fitted)
    if ratio is not None and ratio.uncertainty > _WORTHLESS * abs(ratio.value):
        good = False
        notes.append(("uncertain", "The ratio by integration is known to no better than a half of itself."))
    for share in (ratio, fitted):
        if share is not None and share.value < 0:
            notes.append(("upside_down", "One of the two traces is upside down: the ratio came out negative."))
            break
    factors = tuple([*shared, *own] if ratio is not None else shared)
    return SpinRatio(ratio, fitted, species, factors, tuple(dict.fromkeys(notes)), good)


def _instrument(trace: Side, reference: Side, notes: list[tuple[str, str]]) -> list[Factor]:
    """Corrections for what the spectrometer does, the same for integrals and fitted areas."""
    first, second = trace.conditions, reference.conditions
    harmonics = {"absorption": 0, "derivative": 1, "second derivative": 2}[trace.detect]
    out, silent = [], []
    for name, key, power, unit in (
        ("gain", "gain", 1.0, ""),
        ("modulation", "modulation", float(harmonics), " mT"),
        ("scans", "scans", 1.0, ""),
        ("microwave power", "power", 0.5, " mW"),
    ):
        a, b = getattr(first, key), getattr(second, key)
        if power == 0:
            continue
        if a is None and b is None:
            silent.append(name)
        elif a is None or b is None:
            raise _one_sided(name, trace if a is None else reference, a is None)
        else:
            out.append(Factor(name, f"{a:g}{unit}", f"{b:g}{unit}", (b / a) ** power))
    if silent:
        notes.append(("taken_as_equal", f"Not said of either trace and taken as equal: {', '.join(silent)}."))
    f, g = first.frequency, second.frequency
    if f is not None and g is not None and abs(f / g - 1) > _SAME_RESONATOR:
        text = (
            f"The frequencies, {f / 1e3:.4g} and {g / 1e3:.4g} GHz, are not of one resonator: sensitivity and filling "
            "are not corrected for, and the ratio means little."
        )
        notes.append(("frequencies", text))
    return out


def _one_sided(name: str, without: Side, of_trace: bool) -> InputError:
    option = {"microwave power": "power"}.get(name, name)
    prefix = "" if of_trace else "reference-"
    return InputError(
        f"not known for {without.name}, and known for the other",
        f"add --{prefix}{option}, or say it for neither if it was the same",
        place=name,
    )


def _kinds(side: Side, notes: list[tuple[str, str]]) -> tuple[tuple[float, tuple[float, ...] | None, float], ...]:
    """Fraction, g and S of what is in a trace; g None where nothing tells it."""
    c = side.conditions
    if c.kinds and c.g is None and c.S is None:
        return c.kinds
    g = c.g
    if g is None and c.frequency is not None and side.integral is not None:
        g = (g_of(side.integral.centre, c.frequency),)
        notes.append(("g_from_centre", f"{side.name}: no g was given; {g[0]:.4f} is that of the absorption's centre."))
    if c.S is None:
        notes.append(("spin_half", f"{side.name}: no spin was given; S = 1/2 is taken."))
    return ((1.0, g, 0.5 if c.S is None else c.S),)


def _species(trace: Side, reference: Side, notes: list[tuple[str, str]]) -> list[Factor]:
    """Corrections for g, spin and temperature, of integrals: a model's area has them inside."""
    first, second = trace.conditions, reference.conditions
    if (first.temperature is None) != (second.temperature is None):
        raise _one_sided("temperature", trace if first.temperature is None else reference, first.temperature is None)
    kinds = [_kinds(side, notes) for side in (trace, reference)]
    out = []
    if any(g is None for several in kinds for _, g, _ in several):
        notes.append(("g_unknown", "g is not known of both species and is taken as equal."))
        kinds = [tuple((part, (1.0,), S) for part, _, S in several) for several in kinds]
    squares = [sum(part * S * (S + 1) for part, _, S in several) for several in kinds]
    swept = [sum(p * field_swept_factor(g) * S * (S + 1) for p, g, S in several) for several in kinds]
    both = first.frequency is not None and second.frequency is not None
    whole = [
        sum(
            p * field_swept_factor(g) * spin_factor(S, c.frequency if both else None, c.temperature)
            for p, g, S in several
        )
        for several, c in zip(kinds, (first, second), strict=True)
    ]
    g = [a / b for a, b in zip(swept, squares, strict=True)]
    warm = [a / b for a, b in zip(whole, swept, strict=True)]
    if first.temperature is None:
        notes.append(("temperature", "No temperatures were given: they are taken as equal."))
    said = ["not given" if c.temperature is None else f"{c.temperature:g} K" for c in (first, second)]
    out.append(Factor("g (field sweep)", f"{g[0]:.5g}", f"{g[1]:.5g}", g[1] / g[0], fitted=False))
    out.append(Factor("S(S+1)", f"{squares[0]:.4g}", f"{squares[1]:.4g}", squares[1] / squares[0], fitted=False))
    out.append(Factor("temperature (Boltzmann)", *said, warm[1] / warm[0], fitted=False))
    return out


def _thermal(trace: Side, reference: Side) -> list[Factor]:
    """Populations of models that have no temperature: their areas stand for a difference of 1 over the levels."""
    pair = []
    for side in (trace, reference):
        c = side.conditions
        assert side.fitted is not None
        if side.fitted.thermal:
            pair.append(1.0)
        else:
            pair.append((c.frequency or 1.0) / (K_B_OVER_H * c.temperature) if c.temperature else None)
    if None in pair:
        if trace.fitted.thermal != reference.fitted.thermal:
            which = trace if pair[0] is None else reference
            raise InputError(
                f"the model of {which.name} has no temperature and the other's has",
                "give both jobs a temperature",
                place="temperature",
            )
        f, g = (c.frequency or 1.0 for c in (trace.conditions, reference.conditions))
        pair = [f, g]
    if pair[0] == pair[1]:
        return []
    return [Factor("populations of the models", "", "", pair[1] / pair[0])]


def _relative(part: float, whole: float) -> float:
    return abs(part / whole) if whole else math.inf


def _by_integrals(trace: Side, reference: Side, factors: list[Factor]) -> Share | None:
    first, second = trace.integral, reference.integral
    assert first is not None
    assert second is not None
    if second.value == 0:
        return None
    value = first.value / second.value * math.prod(f.factor for f in factors)
    parts = {
        f"{kind} of the {who}": _relative(getattr(one, kind), one.value)
        for kind in ("noise", "baseline", "truncation")
        for who, one in (("trace", first), ("reference", second))
    }
    return _share(value, parts, trace, reference)


def _by_areas(trace: Side, reference: Side, factors: list[Factor]) -> Share | None:
    first, second = trace.fitted, reference.fitted
    assert first is not None
    assert second is not None
    if second.value == 0:
        return None
    value = first.value / second.value * math.prod(f.factor for f in factors)
    parts = {
        "fit of the trace": _relative(first.uncertainty, first.value),
        "fit of the reference": _relative(second.uncertainty, second.value),
    }
    return _share(value, parts, trace, reference)


def _share(value: float, parts: dict[str, float], trace: Side, reference: Side) -> Share:
    for who, side in (("trace", trace), ("reference", reference)):
        if side.conditions.relative_uncertainty:
            parts[f"other of the {who}"] = side.conditions.relative_uncertainty
    return Share(value, abs(value) * math.hypot(*parts.values()), parts)


def _disagreement(ratio: Share | None, fitted: Share | None) -> list[tuple[str, str]]:
    if ratio is None or fitted is None:
        return []
    apart = abs(ratio.value - fitted.value)
    if apart <= 3 * math.hypot(ratio.uncertainty, fitted.uncertainty):
        return []
    text = (
        f"Integrals give {ratio.value:.3g} and models {fitted.value:.3g}: more apart than their uncertainties. "
        "Something in a trace is not in its model, or lies outside the sweep."
    )
    return [("disagree", text)]
