"""What a fit works on: measured traces with their conditions, and the job that binds them.

Internal units: frequency in MHz, fields in mT, angles in rad, temperature in K.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spinfit.species import Species
from spinfit.sweep import Sample

LOSSES = ("linear", "soft_l1", "huber", "cauchy")
"""What a job may ask for (`spinfit.fitting.robust`); here, so that reading a job loads nothing that fits."""


@dataclass(frozen=True, eq=False)
class Trace:
    """One measured field sweep, read, ordered and cut to what is to be fitted.

    Attributes
    ----------
    name : str
        How it is called in parameter names and tables.
    field : ndarray, shape (n,)
        mT, as in the file after unit and calibration, strictly increasing, *before* `field_offset`
        and `field_scale`: true field = field * field_scale + field_offset.
    signal : ndarray, shape (n,)
    used : ndarray of bool, shape (n,)
        Points inside `fit_range`, outside `exclude`, and not glitches.
    frequency, temperature, microwave, modulation, detect, phase
        Conditions, as in `spinfit.sweep.Sweep`.
    angle : float or None
        rad; crystal and aligned samples.
    axis, start : vectors or None
        This trace's own rotation plane, where it differs from the sample's.
    background : ndarray, shape (n,), or None
        Empty-tube signal at `field`.
    baseline : int or None
        Polynomial order; None for no baseline, or for a smooth one.
    smoothness : float or None
        Of a smooth baseline, mT: of waves of that period it takes half.
    asymmetry : float or None
        Of a smooth baseline under an absorption: weight of points above it, 1 - asymmetry of those below.
    group : str, tuple of str, or None
        Names of what this trace shares corrections with: of a day, a direction of sweep, an angle read
        once.  Traces of one first group share a field axis and its uncertainty.
    field_offset, field_scale : float
        mT and 1.
    field_uncertainty, frequency_uncertainty : float
        Standard uncertainties, mT and MHz.
    angle_uncertainty : float
        Of the angle's reading, rad; see `sharing_angle`.
    file, sha256 : str
        Path and digest of the input file.
    notes : tuple of (code, text)
        What the reader wants to warn of.
    """

    name: str
    field: NDArray[np.float64]
    signal: NDArray[np.float64]
    used: NDArray[np.bool_]
    frequency: float
    temperature: float | None = None
    microwave: str = "perpendicular"
    modulation: float = 0.0
    detect: str = "derivative"
    phase: float = 0.0
    angle: float | None = None
    axis: tuple[float, float, float] | None = None
    start: tuple[float, float, float] | None = None
    background: NDArray[np.float64] | None = None
    baseline: int | None = 1
    smoothness: float | None = None
    asymmetry: float | None = None
    group: str | tuple[str, ...] | None = None
    field_offset: float = 0.0
    field_scale: float = 1.0
    field_uncertainty: float = 0.0
    frequency_uncertainty: float = 0.0
    file: str = ""
    sha256: str = ""
    notes: tuple[tuple[str, str], ...] = ()
    angle_uncertainty: float = 0.0


@dataclass(frozen=True, eq=False)
class Lines:
    """A table of resonance fields of one crystal.

    Attributes
    ----------
    name : str
        How it is called in parameter names and tables.
    field : ndarray, shape (n,)
        mT, as in the file, before `field_offset` and `field_scale` (see `Trace`).
    angle : ndarray, shape (n,), or None
        Of rotation, rad; None when `direction` is given.
    direction : ndarray, shape (n, 2), or None
        Polar angles theta, phi of the field in the crystal frame, rad.
    uncertainty : ndarray, shape (n,), or None
        Standard uncertainties of the fields, mT.
    levels : ndarray of int, shape (n, 2), or None
        Lower and upper level, counted from 1 by energy; 0 where the file does not say.
    frequency, temperature, microwave, axis, start, group, field_offset, field_scale
        As in `Trace`.
    field_uncertainty, frequency_uncertainty, file, sha256, notes
        As in `Trace`.
    angle_uncertainty : float
        Of the reading of each angle, rad; 0 when `direction` is given.
    """

    name: str
    field: NDArray[np.float64]
    frequency: float
    angle: NDArray[np.float64] | None = None
    direction: NDArray[np.float64] | None = None
    uncertainty: NDArray[np.float64] | None = None
    levels: NDArray[np.int64] | None = None
    temperature: float | None = None
    microwave: str = "perpendicular"
    axis: tuple[float, float, float] | None = None
    start: tuple[float, float, float] | None = None
    group: str | tuple[str, ...] | None = None
    field_offset: float = 0.0
    field_scale: float = 1.0
    field_uncertainty: float = 0.0
    frequency_uncertainty: float = 0.0
    file: str = ""
    sha256: str = ""
    notes: tuple[tuple[str, str], ...] = ()
    angle_uncertainty: float = 0.0


def groups_of(one: Trace | Lines) -> tuple[str, ...]:
    """Every group that a trace or a table of lines belongs to; the first is that of its field axis."""
    if one.group is None:
        return ()
    return (one.group,) if isinstance(one.group, str) else one.group


def axis_group(one: Trace | Lines) -> str | None:
    """The group with which a trace or a table of lines shares its field axis."""
    return next(iter(groups_of(one)), None)


def sharing_axis(several: Sequence[Trace | Lines]) -> list[list[int]]:
    """Which of several share a field axis, and with it the uncertainty of its shift: those of one first group."""
    groups = [axis_group(one) for one in several]
    return [[n for n, other in enumerate(groups) if other == group] for group in dict.fromkeys(groups)]


def sharing_frequency(several: Sequence[Trace | Lines]) -> list[list[int]]:
    """Which of several share the uncertainty of their frequency.

    A counter is not read anew for every group: traces of one frequency share it, whatever their field axis, as
    do those of one field axis.
    """
    found: list[list[int]] = []
    for own in sharing_axis(several):
        same = {several[n].frequency for n in own}
        touched = [one for one in found if same & {several[n].frequency for n in one}]
        found = [one for one in found if one not in touched]
        found.append(sorted(own + [n for one in touched for n in one]))
    return sorted(found)


def sharing_angle(traces: Sequence[Trace]) -> list[list[int]]:
    """Which traces share one reading of their angle: those of one angle and one file or group, such as up and down."""
    found: list[list[int]] = []
    for n, trace in enumerate(traces):
        for one in found:
            first = traces[one[0]]
            together = (first.file != "" and first.file == trace.file) or set(groups_of(first)) & set(groups_of(trace))
            if first.angle == trace.angle and together:
                one.append(n)
                break
        else:
            found.append([n])
    return found


@dataclass(frozen=True, eq=False)
class Job:
    """A model, the traces, and what to vary.

    Attributes
    ----------
    species : tuple of Species
        With their start values.
    sample : Sample
        How they are oriented; the angles are those of the traces.
    traces : tuple of Trace
        Empty where only line positions are fitted.
    vary : tuple of str
        Names or groups, as the user wrote them, checked.
    limits : mapping of name -> (low, high)
        In internal units.
    ties : mapping of name -> expression
        Arithmetic on parameter names, text; numbers in the unit of the job.
    start : str
        "given", "near" (straight down from the start, nothing else is tried) or "auto".
    units : mapping of name -> unit
        The unit in which the job gave each parameter ("" for a plain number); outcomes use it.
    tolerance : float
        Largest error of a spectrum relative to its largest value; fits compute finer where the noise asks for it.
    name, path, text : str
        Stem and path of the job file, and the file as it was read.
    loss : str
        "linear" for least squares, "soft_l1", "huber" or "cauchy".
    loss_scale : float or None
        Standard deviations of the noise at which the loss bends; None is the loss's own.
    lines : tuple of Lines
        Tables of line positions, fitted together with the traces.
    files : mapping of name -> bytes
        Every data file as it was read, by the name that the job writes.
    """

    species: tuple[Species, ...]
    sample: Sample
    traces: tuple[Trace, ...]
    vary: tuple[str, ...]
    limits: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    ties: Mapping[str, str] = field(default_factory=dict)
    start: str = "given"
    tolerance: float = 1e-3
    units: Mapping[str, str] = field(default_factory=dict)
    name: str = "job"
    path: str = ""
    text: str = ""
    lines: tuple[Lines, ...] = ()
    loss: str = "linear"
    loss_scale: float | None = None
    files: Mapping[str, bytes] = field(default_factory=dict)
