"""What a fit says of a crystal field: which of its numbers the data determine, and g, D and E with uncertainties.

The trace knows a crystal field through the components of g and D only.  Its response to those is taken
from the engine, theirs to the crystal field from the exact model, and the product is the Jacobian: two
parameters that act nearly alike then differ by what the model says and not by the engine's error.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.outcome import Note, Value
from spinfit.fitting.residuals import Point, Problem, View
from spinfit.fitting.signals import narrowest_width
from spinfit.fitting.slots import field_label
from spinfit.fitting.uncertainty import Covariances, combined, propagated_to, tied_slopes
from spinfit.ion.parameters import RankReport, SpinParameters, rank_of
from spinfit.ion.species_field import SpeciesField, moved, tensors_of
from spinfit.species import Species, Spin, tilt_matrix
from spinfit.units import MU_B_OVER_H, to_unit

Array = NDArray[np.float64]

# Steps by which the exact model is differentiated, relative to a parameter's size.
_MODEL_STEP = 1e-4
# Part of a line width by which components of g and D are moved.
_TENSOR_STEP = 0.05
# Components that move by less than this part of the largest do not move: rounding of the differences.
_STILL = 1e-8
# Of derived quantities, which no job gives a unit.
_UNITS = {"D": ("energy", "cm^-1"), "E": ("energy", "cm^-1"), "tilt": ("angle", "deg")}
_EULER = ("alpha", "beta", "gamma")


def _unit_tensors() -> tuple[Array, Array]:
    """Return what the components are of: six symmetric tensors for g, five traceless ones for D."""
    pairs = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))
    symmetric = np.zeros((6, 3, 3))
    for k, (i, j) in enumerate(pairs):
        symmetric[k, i, j] = symmetric[k, j, i] = 1.0
    traceless = np.concatenate(([np.diag([-1.0, -1.0, 2.0]) / 3, np.diag([1.0, -1.0, 0.0])], symmetric[3:]))
    return symmetric, traceless


_G_PARTS, _D_PARTS = _unit_tensors()


def _components(found: SpinParameters) -> Array:
    """Return g_xx, g_yy, g_zz, g_xy, g_xz, g_yz, then D = 3/2 D_zz, E, D_xy, D_xz, D_yz (MHz), shape (11,)."""
    g, D = found.g, found.D
    energies = [1.5 * D[2, 2], (D[0, 0] - D[1, 1]) / 2, D[0, 1], D[0, 2], D[1, 2]]
    return np.array([g[0, 0], g[1, 1], g[2, 2], g[0, 1], g[0, 2], g[1, 2], *energies])


@dataclass(frozen=True, eq=False)
class FieldResponse:
    """A species with a crystal field at the end of a fit.

    Attributes
    ----------
    index : int
        Of the species.
    species : Species
    model : ndarray, shape (11, k)
        Derivative of the components of g and D by the varied parameters; 0 for those that do not act on them.
    """

    index: int
    species: Species
    model: Array

    @property
    def field(self) -> SpeciesField:
        return self.species.crystal_field

    @property
    def prefix(self) -> str:
        return f"{self.species.name}.crystal_field."


def responses_of(problem: Problem, point: Point) -> list[FieldResponse]:
    """Differentiate the exact model of each species with a crystal field.

    Raises
    ------
    InputError
        Where the ground state changes its kind within a step.
    """
    slopes = tied_slopes(problem, point.free)
    out = []
    for index, one in enumerate(point.species):
        field = one.crystal_field
        if field is None:
            continue
        model = np.zeros((11, len(problem.names)))
        for name in field.names:
            slope = slopes.get(f"{one.name}.crystal_field.{field_label(name)}")
            if slope is not None and slope.any():
                model += np.outer(_derivative(field, name), slope)
        out.append(FieldResponse(index, one, model))
    return out


def _derivative(field: SpeciesField, name: str) -> Array:
    step = _MODEL_STEP * field.scale(name)
    low, high = (tensors_of(moved(field, name, s * step)) for s in (-1, 1))
    if low.S != high.S:
        raise InputError(f"the ground state changes its spin at this {name}", "start away from the crossing")
    return (_components(high) - _components(low)) / (2 * step)


def purely_of_fields(problem: Problem, point: Point) -> NDArray[np.bool_]:
    """Which varied parameters act through crystal fields alone, ties included, shape (k,)."""
    fields, others = np.zeros(len(problem.names), dtype=bool), np.zeros(len(problem.names), dtype=bool)
    for name, slope in tied_slopes(problem, point.free).items():
        if ".crystal_field." in name:
            fields |= slope != 0
        else:
            others |= slope != 0
    return fields & ~others


def sharpened(
    problem: Problem, view: View, point: Point, jacobian: Array, responses: list[FieldResponse]
) -> tuple[Array, NDArray[np.bool_]]:
    """Return the Jacobian with the columns of crystal fields by way of g and D, and which columns those are.

    Without responses (at a crossing of levels) it stays as it is.
    """
    pure = purely_of_fields(problem, point) if responses else np.zeros(len(problem.names), dtype=bool)
    if not pure.any():
        return jacobian, pure
    exact = np.zeros((view.points, len(problem.names)))
    for response in responses:
        moving = _moving(response.model)
        for k in np.flatnonzero(moving):
            exact += np.outer(_component_column(problem, view, point, response, int(k)), response.model[k])
    return np.where(pure, exact, jacobian), pure


def _moving(model: Array) -> NDArray[np.bool_]:
    """Which components move at all; g and D are measured each by its own largest."""
    size = np.abs(model).max(axis=1, initial=0.0)
    largest = np.repeat([size[:6].max(), size[6:].max()], (6, 5))
    return size > _STILL * np.where(largest > 0, largest, 1.0)


def _component_column(problem: Problem, view: View, point: Point, response: FieldResponse, k: int) -> Array:
    """Derivative of the projected residual by one component of g or D, shape (points,)."""
    found = tensors_of(response.field)
    trace = point.traces[0]
    width = narrowest_width(point.species) or float(np.median(np.diff(view.seen[0].field)))
    g = float(np.trace(found.g)) / 3
    step = _TENSOR_STEP * width * g * MU_B_OVER_H  # MHz
    if k < 6:
        step *= g / trace.frequency
    sides = []
    for sign in (1, -1):
        shifted = (
            replace(found, g=found.g + sign * step * _G_PARTS[k])
            if k < 6
            else replace(found, D=found.D + sign * step * _D_PARTS[k - 6])
        )
        one = replace(response.species, spins=(shifted.as_spin(),))
        sides.append((*point.species[: response.index], one, *point.species[response.index + 1 :]))
    changes = []
    for trace, seen in zip(point.traces, view.seen, strict=True):
        above, below = (problem.signals.total(s, trace, point.sample, seen.field, view.stage) for s in sides)
        changes.append((above - below) / (2 * step))
    return problem.projected_change(point, view, changes)


def derived_values(
    problem: Problem,
    view: View,
    point: Point,
    spread: Covariances | None,
    jacobian: Array | None,
    at_limit: NDArray[np.bool_],
    responses: list[FieldResponse],
) -> Mapping[str, Value]:
    """Return g, and D and E for S >= 1, that follow from crystal fields, with propagated uncertainties.

    Where only combinations of parameters are determined, g may well be: a combination that moves no
    component of g has no part in its uncertainty.
    """
    out: dict[str, Value] = {}
    for one in point.species:
        if one.crystal_field is None:
            continue
        response = next((r for r in responses if r.species is one), None)
        rows = _derived(one.spins[0])
        slopes = [np.zeros(len(problem.names)) if response is None else row @ response.model for _, _, row in rows]
        if spread is None or jacobian is None or response is None:
            parts: list[tuple[float | None, float | None]] = [(None, None)] * len(rows)
        else:
            used = ~at_limit & (spread.known | purely_of_fields(problem, point))
            parts = propagated_to(problem, view, point, jacobian, used, slopes)
        for (name, value, _), (noise, field) in zip(rows, parts, strict=True):
            out[f"{one.name}.{name}"] = _value(name, value, noise, field)
    return out


def _derived(spin: Spin) -> list[tuple[str, float, Array]]:
    """Return (name, value, row) of what is reported; the row carries changes of the 11 components to it.

    Tilts that are not 0 are among them, to say which axes are meant; their row is 0.
    """
    axes, still = tilt_matrix(spin.g_tilt), np.zeros(11)
    rows = [
        (f"g_{letter}", spin.g[k], np.append(np.einsum("i,cij,j->c", axes[:, k], _G_PARTS, axes[:, k]), np.zeros(5)))
        for k, letter in enumerate("xyz")
    ]
    rows += [(f"g_tilt_{name}", angle, still) for name, angle in zip(_EULER, spin.g_tilt, strict=True) if angle]
    if spin.S >= 1:
        x, y, z = (np.einsum("i,cij,j->c", v, _D_PARTS, v) for v in tilt_matrix(spin.D_tilt).T)
        rows.append(("D", spin.D, np.append(np.zeros(6), 1.5 * z)))
        rows.append(("E", spin.zfs_E, np.append(np.zeros(6), (x - y) / 2)))
        rows += [(f"D_tilt_{name}", angle, still) for name, angle in zip(_EULER, spin.D_tilt, strict=True) if angle]
    return rows


def _value(name: str, value: float, noise: float | None, field: float | None) -> Value:
    kind, unit = _UNITS.get("tilt" if "_tilt_" in name else name, ("", ""))
    factor = to_unit(1.0, unit, kind) if unit else 1.0
    shown = [None if part is None else part * factor for part in (noise, field)]
    both = None if None in shown else combined(*shown)
    return Value(value * factor, both, *shown, unit=unit, derived=True)


def field_rank(
    problem: Problem,
    jacobian: Array,
    pure: NDArray[np.bool_],
    at_limit: NDArray[np.bool_],
    responses: list[FieldResponse],
    chi2_reduced: float,
) -> tuple[NDArray[np.bool_], list[Note]]:
    """Say which crystal-field parameters the data leave open, shape (k,), and a note where there are any.

    All other varied parameters count as free.  A combination counts as undetermined when changing it by its
    own size (the whole field's for its energies) moves the trace by less than one standard deviation of the
    noise.
    """
    left_open = np.zeros(pure.size, dtype=bool)
    chosen = np.flatnonzero(pure & ~at_limit)
    if not chosen.size:
        return left_open, []
    names = [problem.names[k] for k in chosen]
    scales = np.array([_scale(name, responses) for name in names])
    others = jacobian[:, ~pure & ~at_limit]
    others = others[:, np.linalg.norm(others, axis=0) > 0]
    basis = np.linalg.qr(others / np.linalg.norm(others, axis=0))[0] if others.size else others
    matrix = jacobian[:, chosen] * scales / max(chi2_reduced, 1.0) ** 0.5
    # Names are shortened where no two species can be confused.
    labels = [name.removeprefix(responses[0].prefix) for name in names] if len(responses) == 1 else names
    report = rank_of(np.linalg.qr(matrix - basis @ (basis.T @ matrix), mode="r"), labels, scales)
    left_open[chosen] = [label in report.undetermined for label in labels]
    return left_open, [Note("crystal_field_rank", _sentence(report))] if report.undetermined else []


def _scale(name: str, responses: list[FieldResponse]) -> float:
    for response in responses:
        for own in response.field.names:
            if response.prefix + field_label(own) == name:
                return response.field.scale(own)
    return 1.0  # not reached by a name that is a crystal field's


def _sentence(report: RankReport) -> str:
    known = f"determine {', '.join(report.determined)}" if report.determined else "determine none by itself"
    count = f"{report.rank} combination{'' if report.rank == 1 else 's'} in all"
    return (
        f"Of the varied crystal-field parameters the data {known} ({count}) and leave open "
        f"{', '.join(report.undetermined)}: the trace stays as it is along {'; '.join(report.loose)} (in parts of "
        "their sizes). Hold some of these at known values."
    )
