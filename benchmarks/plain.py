"""The plain way to a powder spectrum, and the dense reference that errors are measured against.

The plain way diagonalises on a grid of fields at each orientation, interpolates the crossings and
sums over more and more orientations until the spectrum has converged.  The reference solves every
resonance exactly (`spinfit.resonance.find`, itself tested against the eigenfield equation) on so
many orientations that neighbours lie closer in field than the line is wide.
"""

from __future__ import annotations

import time

import numpy as np

from spinfit.hamiltonian import System, systems
from spinfit.levels import population_difference, solve
from spinfit.lineshape import FieldGrid, Shape
from spinfit.orientations import Mesh
from spinfit.resonance import ZERO_FIELD, find, level_pairs
from spinfit.species import Species
from spinfit.sweep import Sweep
from spinfit.symmetry import symmetry_of

Array = np.ndarray
FIELDS = 200
"""Fields at which the plain way diagonalises."""


def directions(system: System, mesh_size: tuple[int, int]) -> tuple[Array, Array]:
    """Return unit vectors in molecular axes, shape (n, 3), and their weights, of a product mesh."""
    symmetry = symmetry_of(system)
    mesh = Mesh(symmetry.kind, *mesh_size)
    theta, phi = np.meshgrid(np.linspace(0, np.pi / 2, mesh.thetas + 1), mesh.phi(), indexing="ij")
    unit = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], -1)
    return unit.reshape(-1, 3) @ symmetry.axes.T, mesh.weights().ravel()


def _shape(species: Species, sweep: Sweep) -> Shape:
    return Shape.from_widths(species.width.gaussian, species.width.lorentzian, detect=sweep.detect)


def _drawn(species: Species, sweep: Sweep, deposit, tolerance: float) -> Array:
    shape = _shape(species, sweep)
    grid = FieldGrid.covering(*sweep.field, shape.scale, shape.reach(tolerance), tolerance)
    low = max(sweep.field[0] - shape.reach(tolerance), ZERO_FIELD)
    total = np.zeros(grid.count)
    for system in systems(species):
        total += system.weight * deposit(system, grid, low, sweep.field[1] + shape.reach(tolerance))
    return grid.sample(grid.coefficients({0: total}, shape), sweep.fields)


def reference(species: Species, sweep: Sweep, mesh_size: tuple[int, int]) -> Array:
    """Return the spectrum from exact resonances on a dense product mesh, shape (points,)."""

    def deposit(system: System, grid: FieldGrid, low: float, high: float) -> Array:
        unit, weights = directions(system, mesh_size)
        total = np.zeros(grid.count)
        for start in range(0, len(unit), 4000):
            part = slice(start, start + 4000)
            got = find(system, unit[part], sweep.frequency, (low, high), temperature=sweep.temperature)
            total += grid.deposit(got.field, got.weight * weights[part][got.direction])
            if grid.start < 0:
                total += grid.deposit(-got.field, got.weight * weights[part][got.direction])
        return total

    return _drawn(species, sweep, deposit, 3e-5)


def plain_spectrum(species: Species, sweep: Sweep, mesh_size: tuple[int, int]) -> Array:
    """Return the spectrum by the plain way on one mesh of orientations, shape (points,)."""

    def deposit(system: System, grid: FieldGrid, low: float, high: float) -> Array:
        unit, weights = directions(system, mesh_size)
        fields = np.linspace(low, high, FIELDS)
        lower, upper = level_pairs(len(system.h0))
        total = np.zeros(grid.count)
        block = max(1, 20_000 // FIELDS)
        for start in range(0, len(unit), block):
            here = unit[start : start + block]
            got = solve(system, np.repeat(here, FIELDS, axis=0), np.tile(fields, len(here)))
            shape = (len(here), FIELDS, -1)
            gap = (got.energy[:, upper] - got.energy[:, lower] - sweep.frequency).reshape(shape)
            strength = got.intensity[:, lower, upper] * population_difference(
                got.energy, lower, upper, sweep.temperature
            )
            strength = strength.reshape(shape)
            d, k, p = np.nonzero((gap[:, 1:] >= 0) != (gap[:, :-1] >= 0))
            a, b = gap[d, k, p], gap[d, k + 1, p]
            x = a / (a - b)
            step = fields[1] - fields[0]
            weight = (strength[d, k, p] * (1 - x) + strength[d, k + 1, p] * x) * step / np.abs(b - a)
            total += grid.deposit(fields[k] + x * step, weight * weights[start + d])
        return total

    return _drawn(species, sweep, deposit, 1e-4)


def plain_way(species: Species, sweep: Sweep, truth: Array, error: float, longest: float) -> tuple[float, float]:
    """Double the mesh until the plain way is as good as `error`; return its last seconds and its error.

    It stops once the next mesh would take longer than `longest` seconds.
    """
    axial = symmetry_of(systems(species)[0]).kind == "axial"
    size = 16
    while True:
        begun = time.perf_counter()
        signal = plain_spectrum(species, sweep, (size, 1 if axial else size))
        seconds = time.perf_counter() - begun
        reached = float(np.abs(signal - truth).max() / np.abs(truth).max())
        if reached <= error or seconds * (2 if axial else 4) > longest:
            return seconds, reached
        size *= 2
