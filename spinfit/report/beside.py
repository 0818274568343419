"""What a fit is set beside in its report: the ion's own g, and the same tensors with their axes renamed."""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import asdict

import numpy as np

from spinfit.errors import InputError
from spinfit.fitting.data import Job
from spinfit.fitting.equivalent import AXES, conventional, permuted
from spinfit.fitting.outcome import Outcome, Value
from spinfit.fitting.parameters import Binding
from spinfit.ion.quench import QuenchRow, measured_from_parameters, quench_row
from spinfit.report.numbers import short
from spinfit.species import Species, principal
from spinfit.units import to_unit

# The axial limit: a rhombicity below this gives settings that nobody would write down.
_AXIAL = 1e-3


def final_species(job: Job, outcome: Outcome) -> tuple[Species, ...]:
    """Return the job's species with the outcome's values in them."""
    binding = Binding(job.species, job.sample, (*job.traces, *job.lines), units=job.units)
    values = {
        name: binding.parameters[name].from_job(found.value)
        for name, found in outcome.parameters.items()
        if (found.varied or found.tied) and name in binding.parameters and np.isfinite(found.value)
    }
    return binding.apply(values)[0]


def g_was_measured(parameters: Mapping[str, Value], species: str) -> bool:
    """Say whether any component of a species' g was varied, tied or derived rather than held."""
    names = (f"{species}.g", *(f"{species}.g_{axis}" for axis in ("x", "y", "z", "perp", "par")))
    found = [parameters[name] for name in names if name in parameters]
    return any(one.varied or one.tied or one.derived for one in found)


def ion_rows(job: Job, outcome: Outcome) -> tuple[tuple[str, QuenchRow], ...]:
    """Return (species, comparison) for every species that names its ion.

    A g that the job held is no measurement and is left out.  A species given by its crystal field is
    compared with that field at its end values, any other with the typical field of the tables.
    """
    rows = []
    records = {name: asdict(value) for name, value in outcome.parameters.items()}
    for one in final_species(job, outcome):
        if one.ion is None or len(one.spins) != 1:
            continue
        own = {name: record for name, record in records.items() if name.startswith(f"{one.name}.g")}
        measured = None
        if one.crystal_field is None and g_was_measured(outcome.parameters, one.name):
            measured = measured_from_parameters(own, one.name)
        model = None if one.crystal_field is None else one.crystal_field.model()
        try:
            rows.append((one.name, quench_row(one.ion, model=model, measured=measured)))
        except InputError:  # an ion that the tables do not know has nothing to be compared with
            continue
    return tuple(rows)


SETTING_HEADINGS = ("x, y, z are now", "D", "E", "unit", "E/D", "g", "")


def setting_rows(job: Job, outcome: Outcome) -> tuple[tuple[str, tuple[tuple[str, ...], ...]], ...]:
    """Return (species, rows) of the equivalent settings of zero-field tensors.

    A powder or a solution does not know which axis is called z: six ways of naming them describe one
    trace.  Only for species of one spin that is not axial, without tilts and Stevens operators.
    """
    if job.sample.form not in ("powder", "solution"):
        return ()
    found = []
    for one in final_species(job, outcome):
        spin = one.spins[0]
        if len(one.spins) != 1 or spin.D == 0 or abs(spin.zfs_E / spin.D) < _AXIAL:
            continue
        unit = outcome.parameters[f"{one.name}.D"].unit if f"{one.name}.D" in outcome.parameters else "MHz"
        usual = conventional(spin.D, spin.zfs_E)[2]
        rows = []
        for axes in itertools.permutations(range(3)):
            other = permuted(one, axes)
            if other is None:
                break
            new = other.spins[0]
            g = principal(new.g)
            remark = "as fitted" if axes == (0, 1, 2) else ""
            if axes == usual:
                remark = ", ".join([*([remark] if remark else []), "the usual one: 0 ≤ E/D ≤ 1/3"])
            rows.append(
                (
                    ", ".join(AXES[k] for k in axes),
                    short(to_unit(new.D, unit, "energy"), 6),
                    short(to_unit(new.zfs_E, unit, "energy"), 6),
                    unit,
                    f"{new.zfs_E / new.D:.4f}",
                    short(g[0], 6) if np.ptp(g) == 0 else ", ".join(short(value, 6) for value in g),
                    remark,
                )
            )
        if rows:
            found.append((one.name, tuple(rows)))
    return tuple(found)
