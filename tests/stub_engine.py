"""A stand-in for the engine with a closed form: one Gaussian line for each principal value of g.

The lines lie at h nu / (g muB), moved by +-D/(2 x 28 MHz/mT) for S > 1/2 and split by A/28 MHz/mT by
the first nucleus as a spin 1/2; each has unit area and the species' Gaussian peak-to-peak width.
It knows frequency, detect, phase and temperature (which weighs the two D lines) as the real one
does, so that everything above the engine can be tested against closed forms.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.special import wofz

from spinfit.species import principal
from spinfit.units import MU_B_OVER_H


@dataclass
class Spectrum:
    fields: np.ndarray
    signal: np.ndarray
    parts: np.ndarray
    report: dict = field(default_factory=dict)
    warnings: tuple = ()


def line(x: np.ndarray, center: float, width: float, phase: float, detect: str) -> np.ndarray:
    """Gaussian of unit area with dispersion admixed, or its derivative; `width` is peak to peak."""
    sigma = width / 2
    z = (x - center) / (sigma * np.sqrt(2))
    w = wofz(z)
    slope = -2 * z * w + 2j / np.sqrt(np.pi)  # dw/dz, Abramowitz & Stegun 7.1.20
    norm = 1 / (sigma * np.sqrt(2 * np.pi))
    chi = w if detect == "absorption" else slope / (sigma * np.sqrt(2))
    return norm * (np.cos(phase) * chi.real + np.sin(phase) * chi.imag)


def centers(species, sweep) -> list[tuple[float, float]]:
    """Line positions in mT and their weights."""
    out = []
    spin = species.spins[0]
    for g in principal(spin.g):
        center = sweep.frequency / (g * MU_B_OVER_H)
        moves = [(0.0, 1.0)]
        if spin.S > 0.5:
            bias = 0.0 if sweep.temperature is None else np.tanh(1 / sweep.temperature)
            moves = [(spin.D / 56, 0.5 + 0.3 * bias), (-spin.D / 56, 0.5 - 0.3 * bias)]
        for nucleus in species.nuclei[:1]:
            splitting = principal(nucleus.A)[0] / 28
            moves = [(m + s * splitting / 2, w / 2) for m, w in moves for s in (-1, 1)]
        out += [(center + m, w) for m, w in moves]
    return out


def simulate(species, sweep, sample=None, *, tolerance=1e-3, fields=None, angle=None) -> Spectrum:
    x = sweep.fields if fields is None else np.asarray(fields, float)
    parts = np.array(
        [
            sum(
                w * line(x, c, max(one.width.gaussian, 1e-6), sweep.phase, sweep.detect) for c, w in centers(one, sweep)
            )
            for one in species
        ]
    )
    signal = np.sum([one.amount * part for one, part in zip(species, parts, strict=True)], axis=0)
    return Spectrum(x, signal, parts)
