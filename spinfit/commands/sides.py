"""The two sides of a comparison of spins: a data file, a job that is fitted, or an outcome."""

from __future__ import annotations

import argparse
import json
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

from spinfit.commands.measured import read_measured
from spinfit.commands.screen import Screen, number, quantity
from spinfit.errors import InputError, on_one_line

QUANTITIES = {
    "frequency": "frequency",
    "temperature": "temperature",
    "modulation": "field",
    "power": "power",
}
NUMBERS = ("gain", "scans")
_UNKNOWN = (
    "no_fit_uncertainty",
    "An outcome does not tell the uncertainty of its area: it is left out (name the job in place of the outcome).",
)
KEYS = (*QUANTITIES, *NUMBERS, "g", "S", "relative_uncertainty")


def stated(args: argparse.Namespace, side: str) -> dict[str, Any]:
    """Return what the command line and the conditions file say of "trace" or "reference", in internal units.

    The command line wins over the file.
    """
    prefix = "" if side == "trace" else "reference_"
    option = "--" if side == "trace" else "--reference-"
    found = _from_file(args.conditions, side) if args.conditions else {}
    for key, kind in QUANTITIES.items():
        value = quantity(getattr(args, prefix + key), kind, option + key)
        if value is not None:
            found[key] = _positive(value, option + key)
    for key in NUMBERS:
        value = number(getattr(args, prefix + key), option + key, positive=True)
        if value is not None:
            found[key] = value
    g, S = getattr(args, prefix + "g"), getattr(args, prefix + "spin")
    if g is not None:
        found["g"] = _g(g, option + "g")
    if S is not None:
        found["S"] = _spin(S, option + "spin")
    return found


def _positive(value: float, place: str) -> float:
    if value <= 0:
        raise InputError(f"{value:g}", "write a positive value", place=place)
    return value


def _g(text: str, place: str) -> tuple[float, ...]:
    words = text.split(",")
    if len(words) > 3:
        raise InputError(f'"{text}"', "write one, two (perpendicular, parallel) or three values", place=place)
    return tuple(_positive(float(number(word.strip(), place) or 0.0), place) for word in words)


def _spin(text: str, place: str) -> float:
    try:
        value = Fraction(text)
    except (ValueError, ZeroDivisionError):
        value = Fraction(0)
    if value <= 0 or (2 * value).denominator != 1 or value > 50:
        raise InputError(f'"{text}"', 'write a multiple of 1/2, such as "5/2"', place=place)
    return float(value)


def _from_file(path: str, side: str) -> dict[str, Any]:
    """Read ``[trace]`` or ``[reference]`` of a conditions file."""
    from spinfit.files.toml_table import Table, load_toml

    data, _ = load_toml(path)
    try:
        root = Table(data, "", ("trace", "reference"))
        table = Table(root.data.get(side, {}), side, KEYS)
        found: dict[str, Any] = {key: table.positive(key, kind) for key, kind in QUANTITIES.items()}
        for key in (*NUMBERS, "relative_uncertainty"):
            value = table.number(key)
            if value is not None and (value < 0 or (value == 0 and key in NUMBERS)):
                raise table.error(key, f"{value:g}", "write a positive number")
            found[key] = value
        g = table.numbers("g", (1, 2, 3), "g = 2.0036, or [2.05, 2.05, 2.26]")
        if g is not None and min(g) <= 0:
            raise table.error("g", f"{min(g):g}", "write positive values")
        found["g"] = g
        spin = table.text("S")
        found["S"] = None if spin is None else _spin(spin, table.at("S"))
    except InputError as error:
        raise error.at(file=path) from None
    return {key: value for key, value in found.items() if value is not None}


def side_of(path: str, which: str, args: argparse.Namespace, screen: Screen, window: Any, baseline: Any) -> Any:
    """Read, fit or look up one side.

    Parameters
    ----------
    path : str
        A data file, a job (.toml), or an outcome (its folder, or outcome.json).
    which : str
        "trace" or "reference".
    window : (low, high) or None
        Field range to integrate over, mT.
    """
    said = stated(args, which)
    place = Path(path)
    if place.is_dir() or place.name == "outcome.json":
        return _from_outcome(place / "outcome.json" if place.is_dir() else place, said)
    if place.suffix.lower() == ".toml":
        return _from_job(path, said, screen, window, baseline)
    return _from_data(path, which, args, said, window, baseline)


def _windowed(field: Any, window: tuple[float, float] | None, name: str) -> Any:
    """Return which points are inside the window, which must lie inside the sweep."""
    import numpy as np

    if window is None:
        return np.ones(len(field), dtype=bool)
    step = (field[-1] - field[0]) / (len(field) - 1)
    if window[0] < field[0] - step or window[1] > field[-1] + step:
        raise InputError(
            f"{window[0]:g} to {window[1]:g} mT is not all in {name}",
            f"the sweep covers {field[0]:g} to {field[-1]:g} mT",
            place="range",
        )
    return (field >= window[0]) & (field <= window[1])


def _from_data(
    path: str, which: str, args: argparse.Namespace, said: dict[str, Any], window: Any, baseline: Any
) -> Any:
    from spinfit.fitting.integral import double_integral
    from spinfit.fitting.quantify import Conditions, Side

    reading = argparse.Namespace(**vars(args))
    if which == "reference":  # what is said without "reference" is the trace's alone
        reading.frequency = reading.modulation = None
    trace = read_measured(path, reading)
    name = on_one_line(Path(path).name)
    header = {"frequency": trace.frequency, "modulation": trace.modulation, "temperature": trace.temperature}
    known = {key: value for key, value in header.items() if value is not None} | said
    used = trace.used & _windowed(trace.field, window, name)
    integral = double_integral(trace.field[used], trace.signal[used], detect=trace.detect, baseline=baseline, name=name)
    integral = replace(integral, notes=(*((c, f"{name}: {t}") for c, t in trace.notes), *integral.notes))
    return Side(name, trace.detect, Conditions(**known), integral)


def _from_job(path: str, said: dict[str, Any], screen: Screen, window: Any, baseline: Any) -> Any:
    from spinfit.commands.fit import shown_progress
    from spinfit.files.job import read_job
    from spinfit.fitting.areas import fitted_area
    from spinfit.fitting.driver import fit
    from spinfit.fitting.integral import double_integral
    from spinfit.fitting.quantify import Conditions, Side
    from spinfit.fitting.signals import true_field

    job = read_job(path)
    if len(job.traces) != 1 or job.lines:
        raise InputError(f"{len(job.traces)} traces", "name a job with one trace", place="trace", file=path)
    if any(one.populations is not None for one in job.species):
        raise InputError("polarised species have no equilibrium to count by", "take populations out", file=path)
    trace = job.traces[0]
    with shown_progress(screen, int(trace.used.sum())) as progress:
        outcome = fit(job, progress=progress)
    if not outcome.quality.finished:
        raise KeyboardInterrupt
    area = fitted_area(job, outcome)
    names = on_one_line(Path(path).name)
    values = {name: value.value for name, value in outcome.parameters.items()}
    fractions = {name: value.value for name, value in outcome.fractions.items()}
    known = {"frequency": trace.frequency, "temperature": trace.temperature, "modulation": trace.modulation or None}
    known = {key: value for key, value in known.items() if value is not None} | said
    if all(len(one.spins) == 1 for one in job.species):
        known["kinds"] = tuple(
            (fractions.get(one.name, 1.0), _values_of_g(values, one.name) or tuple(one.spins[0].g), one.spins[0].S)
            for one in job.species
        )
    field = true_field(trace, trace.field)
    used = trace.used & _windowed(field, window, names)
    integral = double_integral(field[used], trace.signal[used], detect=trace.detect, baseline=baseline, name=names)
    notes = [*integral.notes]
    if not outcome.quality.converged:
        notes.append(("not_converged", f"{names}: the fit has not converged: {outcome.message}."))
    if any(spin.S > 0.5 for one in job.species for spin in one.spins):
        text = "an integral counts what lies inside the sweep only: with S > 1/2 the model's area is the better one"
        notes.append(("high_spin", f"{names}: {text}"))
    return Side(names, trace.detect, Conditions(**known), replace(integral, notes=tuple(notes)), area)


def _values_of_g(values: dict[str, float], name: str) -> tuple[float, ...]:
    """Return the one, two or three values of a species' g among an outcome's parameters."""
    for endings in (("g",), ("g_perp", "g_par"), ("g_x", "g_y", "g_z")):
        if all(f"{name}.{e}" in values for e in endings):
            return tuple(abs(values[f"{name}.{e}"]) for e in endings)
    return ()


def _from_outcome(path: Path, said: dict[str, Any]) -> Any:
    """Look up a finished fit: its scale, its amounts and its conditions."""
    from spinfit.fitting.quantify import Conditions, FittedArea, Side

    try:
        record = json.loads(path.read_text(encoding="utf-8"))
        (trace,) = record["provenance"]["traces"]
        own = record["provenance"]["input"][trace["name"]]
        fractions = {name: (one["value"], one["uncertainty"]) for name, one in record["fractions"].items()}
        amounts = sum(record["parameters"][f"{name}.amount"]["value"] for name in fractions)
        area = float(trace["scale"]) * amounts
        known = {
            "frequency": float(trace["frequency_MHz"]),
            "temperature": own["temperature_K"],
            "modulation": own["modulation_mT"] or None,
        }
        detect = str(own["detect"])
    except FileNotFoundError:
        raise InputError("there is no such file", "name a folder that spinfit fit wrote", file=path) from None
    except (KeyError, TypeError, ValueError) as error:
        raise InputError(
            "is no outcome of a job with one trace", "name one that spinfit fit wrote", file=path
        ) from error
    fitted = FittedArea(area, 0.0, fractions, thermal=known["temperature"] is not None, notes=(_UNKNOWN,))
    return Side(str(path), detect, Conditions(**(known | said)), None, fitted)
