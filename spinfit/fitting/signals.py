"""Simulated signals of traces, each computed once.

A fit asks for the same signal many times: a column of the Jacobian changes one species, a shift of
the field axis changes none.  `Signals` simulates species by species and remembers the result under
everything it depends on, the dataclasses' own values; nothing is rounded, so that an answer from
memory is the answer.
"""

from __future__ import annotations

import inspect
import math
from collections import OrderedDict
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spinfit.derivatives import field_slope, phase_slope, signal_changes
from spinfit.fitting.data import Lines, Trace
from spinfit.species import Species
from spinfit.spectrum import Kept
from spinfit.sweep import Sample, Sweep

Array = NDArray[np.float64]
Simulate = Callable[..., Any]

# A trace of 4000 points takes 32 kB: about 16 MB at most.
_REMEMBERED = 512
# Of the numbers from which derivatives start, at most.
_KEPT_BYTES = 300_000_000


@dataclass(frozen=True)
class Stage:
    """How a signal is wanted.

    Attributes
    ----------
    broadening : float
        Peak-to-peak width of a further Gaussian on every resonance, mT; 0 for the real thing.
    tolerance : float
        Asked of the engine.
    """

    broadening: float = 0.0
    tolerance: float = 1e-4


def true_field(trace: Trace | Lines, field: Array) -> Array:
    """Carry fields as in the file to true fields with the trace's correction."""
    return field * trace.field_scale + trace.field_offset


def conditions(trace: Trace) -> tuple[Any, ...]:
    """Everything but the field axis that a trace's signal depends on."""
    return (
        trace.frequency,
        trace.temperature,
        trace.microwave,
        trace.modulation,
        trace.detect,
        trace.phase,
        trace.angle,
        trace.axis,
        trace.start,
    )


def sample_of(sample: Sample, trace: Trace | Lines) -> Sample:
    """Return the sample with the trace's own rotation plane, where it has one."""
    if trace.axis is not None:
        sample = replace(sample, axis=trace.axis)
    if trace.start is not None:
        sample = replace(sample, start=trace.start)
    return sample


def sweep_of(trace: Trace, fields: Array) -> Sweep:
    """Return the measuring conditions of a trace over the given true fields."""
    return Sweep(
        frequency=trace.frequency,
        field=(float(fields[0]), float(fields[-1])),
        points=int(fields.size),
        temperature=trace.temperature,
        microwave=trace.microwave,
        modulation=trace.modulation,
        detect=trace.detect,
        phase=trace.phase,
    )


def broadened(species: Species, broadening: float) -> Species:
    """Return a species whose every resonance is wider by a Gaussian (peak to peak, mT)."""
    if broadening == 0:
        return species
    width = species.width
    return replace(species, width=replace(width, gaussian=math.hypot(width.gaussian, broadening)))


class Followed:
    """First-order changes of one species' signal at unit amount.

    Attributes
    ----------
    by_model : list of ndarray, shape (n,), or None
        For each small move of the model; None where only a difference of simulations can tell.
    """

    def __init__(self, kept: Kept, moved: Sequence[tuple[Species, Sample]]) -> None:
        self._kept = kept
        self.by_model: list[Array | None] = [None if one is None else one[0] for one in signal_changes(kept, moved)]

    @cached_property
    def by_field(self) -> Array:
        """Derivative with respect to the true field, shape (n,), 1/mT."""
        return field_slope(self._kept)[0]

    @cached_property
    def by_phase(self) -> Array:
        """Derivative with respect to the microwave phase, shape (n,), 1/rad."""
        return phase_slope(self._kept)[0]


class Signals:
    """Simulated signals, remembered.

    Parameters
    ----------
    simulate : callable
        As `spinfit.spectrum.simulate`.

    Attributes
    ----------
    simulations : int
        How many times the engine was called.
    reports : dict of (trace name, species name) -> mapping
        The engine's last report of each.
    warnings : tuple
        What the engine warned of the last time it was asked about each trace and species, each once.
    """

    def __init__(self, simulate: Simulate) -> None:
        self._simulate = simulate
        self._keeps = "keep" in inspect.signature(simulate).parameters
        self._kept: OrderedDict[Any, tuple[Kept, int]] = OrderedDict()
        self._held = 0
        self._memory: OrderedDict[Any, Array] = OrderedDict()
        self.simulations = 0
        self.reports: dict[tuple[str, str], Any] = {}
        self._warnings: dict[tuple[str, str], tuple[Any, ...]] = {}

    @property
    def simulate(self) -> Simulate:
        """The engine."""
        return self._simulate

    @property
    def warnings(self) -> tuple[Any, ...]:
        """Those of earlier values of the parameters are of no interest at the end."""
        return tuple(dict.fromkeys(one for several in self._warnings.values() for one in several))

    def part(self, species: Species, trace: Trace, sample: Sample, field: Array, stage: Stage) -> Array:
        """Signal of one species at unit amount, shape (n,).

        Parameters
        ----------
        field : ndarray, shape (n,)
            mT, as in the file: the trace's correction is applied here.
        """
        key = self._key(species, trace, sample, field, stage)
        known = self._memory.get(key)
        if known is not None:
            self._memory.move_to_end(key)
            return known
        return self._simulated(key, species, trace, sample, field, stage)

    def changes(
        self,
        species: Species,
        trace: Trace,
        sample: Sample,
        field: Array,
        stage: Stage,
        moved: Sequence[tuple[Species, Sample]],
    ) -> Followed | None:
        """First-order changes of one species' signal at unit amount; None where the engine cannot follow any.

        Parameters
        ----------
        moved : sequence of (Species, Sample)
            Models a little different.
        """
        if not self._keeps:
            return None
        key = self._key(species, trace, sample, field, stage)
        if key not in self._kept:
            self._simulated(key, species, trace, sample, field, stage)
        kept, _ = self._kept.get(key, (None, 0))
        if kept is None or not kept.totals:
            return None
        there = [
            (broadened(replace(one, amount=1.0, crystal_field=None), stage.broadening), sample_of(where, trace))
            for one, where in moved
        ]
        return Followed(kept, there)

    def _key(self, species: Species, trace: Trace, sample: Sample, field: Array, stage: Stage) -> Any:
        # The engine sees spins only; fields that lead to the same spins have the same signal.
        plain = replace(species, amount=1.0, crystal_field=None)
        return plain, conditions(trace), trace.field_offset, trace.field_scale, sample, field.tobytes(), stage

    def _simulated(self, key: Any, species: Species, trace: Trace, sample: Sample, field: Array, stage: Stage) -> Array:
        """Simulate, and remember the signal and what its derivatives start from."""
        plain, fields = key[0], true_field(trace, field)
        spectrum = self._simulate(
            (broadened(plain, stage.broadening),),
            sweep_of(trace, fields),
            sample_of(sample, trace),
            tolerance=stage.tolerance,
            fields=fields,
            angle=trace.angle,
            **({"keep": True} if self._keeps else {}),
        )
        self.simulations += 1
        if self._keeps:
            self._keep(key, spectrum.kept)
        signal = np.asarray(spectrum.parts[0], dtype=float)
        signal.setflags(write=False)
        if stage.broadening == 0:
            self.reports[trace.name, species.name] = getattr(spectrum, "report", {})
            self._warnings[trace.name, species.name] = tuple(getattr(spectrum, "warnings", ()))
        self._memory[key] = signal
        while len(self._memory) > _REMEMBERED:
            self._memory.popitem(last=False)
        return signal

    def _keep(self, key: Any, kept: Sequence[Kept]) -> None:
        """Remember what derivatives start from, the last few, within bounds of memory."""
        size = kept[0].nbytes if kept else _KEPT_BYTES + 1
        if size <= _KEPT_BYTES:
            _, before = self._kept.pop(key, (None, 0))
            self._kept[key] = kept[0], size
            self._held += size - before
        while self._held > _KEPT_BYTES:
            self._held -= self._kept.popitem(last=False)[1][1]

    def total(self, species: tuple[Species, ...], trace: Trace, sample: Sample, field: Array, stage: Stage) -> Array:
        """Sum of amount times part over the species, shape (n,)."""
        out = np.zeros(field.size)
        for one in species:
            out += one.amount * self.part(one, trace, sample, field, stage)
        return out

    def slope(
        self, species: tuple[Species, ...], trace: Trace, sample: Sample, field: Array, stage: Stage, step: float
    ) -> Array:
        """Derivative of the sum with respect to the true field, shape (n,).

        The engine's own where it has one, else by central differences, both sides of which come from one
        simulation, so that a choice the engine makes is the same for both.

        Parameters
        ----------
        step : float
            mT; half the distance of the two sides.
        """
        out = np.zeros(field.size)
        for one in species:
            followed = self.changes(one, trace, sample, field, stage, ())
            if followed is not None:
                out += one.amount * followed.by_field
                continue
            shift = step / trace.field_scale
            both, place = np.unique(np.concatenate((field - shift, field + shift)), return_inverse=True)
            part = self.part(one, trace, sample, both, stage)[place]
            out += one.amount * (part[field.size :] - part[: field.size]) / (2 * step)
        return out


def narrowest_width(species: tuple[Species, ...]) -> float:
    """Smallest peak-to-peak width of the species' resonances, mT; 0 when none has any.

    A Voigt line's width is taken as l/2 + sqrt(l^2/4 + g^2), within 2 % of the exact one for peak to
    peak components g and l; widths from hidden hyperfine structure and spreads only add to it.
    """
    widths = []
    for one in species:
        gaussian, lorentzian = one.width.gaussian, one.width.lorentzian
        if one.width.a:
            gaussian = math.hypot(gaussian, one.width.a)
        widths.append(lorentzian / 2 + math.sqrt(lorentzian**2 / 4 + gaussian**2))
    return min(widths)
