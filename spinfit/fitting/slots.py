"""Where every number of a model stands: names, and paths into the tree of frozen dataclasses.

One generator for each part of a model yields `Slot` after `Slot` in the order of the file; the
parameters themselves are made of them in `spinfit.fitting.parameters`.
"""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

from spinfit.errors import InputError
from spinfit.fitting.data import groups_of
from spinfit.ion.species_field import FACTORS, LARGEST_FACTOR, SpeciesField
from spinfit.species import Exchange, Nucleus, Species, Spin
from spinfit.sweep import Sample

FREE = (-math.inf, math.inf)
NOT_NEGATIVE = (0.0, math.inf)
TENSOR_ENDINGS = {1: ("",), 2: ("_perp", "_par"), 3: ("_x", "_y", "_z")}
CORRECTIONS = {"field_offset": 0.0, "field_scale": 1.0, "phase": 0.0, "angle_zero": 0.0}
"""What a trace, or a group of traces, may have corrected, with the value that changes nothing."""

# Parts that mean something else after a species' name.
_RESERVED_FOR_NUCLEI = ("width", "spread", "stevens", "crystal_field")

Path = tuple[str | int, ...]


@dataclass(frozen=True)
class Slot:
    """A parameter's place in the model, before its value and unit are looked up.

    `step` is a typical change in internal units, at least `relative` times the value; `like` names
    parameters whose unit it takes when the job gives it none; the rest is as in `Parameter`.
    """

    name: str
    path: Path
    kind: str
    step: float
    relative: float = 0.0
    limits: tuple[float, float] = FREE
    groups: tuple[str, ...] = ()
    sum_zero: bool = False
    like: tuple[str, ...] = ()
    refused: str = ""


def _tensor(name: str, path: Path, tensor: Sequence[float], kind: str, step: float, **more: Any) -> Iterator[Slot]:
    """Yield the components of a tensor of 1, 2 or 3 numbers, in the group `name`."""
    groups = (name, *more.pop("groups", ()))
    for k, ending in enumerate(TENSOR_ENDINGS[len(tensor)]):
        yield Slot(name + ending, (*path, k), kind, step, groups=groups, **more)


def _tilt(name: str, path: Path) -> Iterator[Slot]:
    """Yield the three Euler angles of a tilt, in the group `name`."""
    for k, ending in enumerate(("_alpha", "_beta", "_gamma")):
        yield Slot(name + ending, (*path, k), "angle", math.radians(3), groups=(name,))


def _spin_slots(prefix: str, path: Path, spin: Spin) -> Iterator[Slot]:
    # A sign given to a g component is kept, since only the other sign would be a jump through 0.
    limits = NOT_NEGATIVE if min(spin.g) >= 0 else FREE
    yield from _tensor(f"{prefix}.g", (*path, "g"), spin.g, "number", 0.005, limits=limits)
    if len(spin.g) > 1:
        yield from _tilt(f"{prefix}.g_tilt", (*path, "g_tilt"))
    if spin.S > 0.5:
        names = (f"{prefix}.D", f"{prefix}.E")
        yield Slot(names[0], (*path, "D"), "energy", 30.0, relative=0.05, like=names[1:])
        if spin.rhombicity is None:
            yield Slot(names[1], (*path, "E"), "energy", 10.0, relative=0.05, like=names[:1])
        else:
            yield Slot(f"{prefix}.rhombicity", (*path, "rhombicity"), "number", 0.02)
        yield from _tilt(f"{prefix}.D_tilt", (*path, "D_tilt"))
    for n, ((k, q), _) in enumerate(spin.stevens):
        name = f"{prefix}.B{k}_{'m' if q < 0 else ''}{abs(q)}"
        where = (*path, "stevens", n, 1)
        yield Slot(name, where, "energy", 10.0 ** (1 - k / 2), relative=0.05, groups=(f"{prefix}.stevens",))


def field_label(name: str) -> str:
    """Return a crystal-field parameter's name as a part of a parameter's: "x2-y2" is "x2_y2", as - is a minus."""
    return re.sub(r"\W+", "_", name).strip("_")


def _field_slots(prefix: str, path: Path, field: SpeciesField) -> Iterator[Slot]:
    """Yield the numbers of a crystal field; the group `prefix` is the field itself without zeta and the like."""
    for k, name in enumerate(field.names):
        where, label = (*path, "values", k), f"{prefix}.{field_label(name)}"
        if name in FACTORS:
            yield Slot(label, where, "number", 0.02, limits=(0.0, LARGEST_FACTOR))
        else:
            limits = NOT_NEGATIVE if name == "zeta" else FREE
            groups = (prefix,) if name in field.own else ()
            yield Slot(label, where, "energy", 0.05 * field.scale(name), limits=limits, groups=groups)


def nucleus_labels(nuclei: Sequence[Nucleus]) -> tuple[str, ...]:
    """Return what each nucleus is called after its species' name.

    Its own name, else its isotope or element, numbered ``_1``, ``_2``, ... in file order when
    several nuclei without a name have the same.
    """
    plain = [nucleus.name or nucleus.isotope or nucleus.element or "" for nucleus in nuclei]
    shared = Counter(label for label, nucleus in zip(plain, nuclei, strict=True) if not nucleus.name)
    seen: Counter[str] = Counter()
    labels = []
    for label, nucleus in zip(plain, nuclei, strict=True):
        if not nucleus.name and shared[label] > 1:
            seen[label] += 1
            label = f"{label}_{seen[label]}"
        labels.append(label)
    return tuple(labels)


def _nucleus_slots(prefix: str, path: Path, nucleus: Nucleus) -> Iterator[Slot]:
    yield from _tensor(f"{prefix}.A", (*path, "A"), nucleus.A, "energy", 5.0, relative=0.05)
    if len(nucleus.A) > 1:
        yield from _tilt(f"{prefix}.A_tilt", (*path, "A_tilt"))
    if len(nucleus.P) > 1:  # a traceless tensor of one number is nothing
        yield from _tensor(f"{prefix}.P", (*path, "P"), nucleus.P, "energy", 1.0, relative=0.05, sum_zero=True)
        yield from _tilt(f"{prefix}.P_tilt", (*path, "P_tilt"))


def _exchange_slots(name: str, path: Path, exchange: Exchange) -> Iterator[Slot]:
    pair = f"{exchange.between[0]}{exchange.between[1]}"
    if max(exchange.between) > 9:
        pair = f"{exchange.between[0]}_{exchange.between[1]}"
    yield Slot(f"{name}.J_{pair}", (*path, "J"), "energy", 100.0, relative=0.05)
    if len(exchange.dipolar) > 1:
        dipolar = f"{name}.dipolar_{pair}"
        where = (*path, "dipolar")
        yield from _tensor(dipolar, where, exchange.dipolar, "energy", 10.0, relative=0.05, sum_zero=True)
        yield from _tilt(f"{dipolar}_tilt", (*path, "tilt"))
    where = (*path, "antisymmetric")
    yield from _tensor(f"{name}.antisymmetric_{pair}", where, exchange.antisymmetric, "energy", 10.0, relative=0.05)


def _width_slots(name: str, path: Path, species: Species) -> Iterator[Slot]:
    width, group = species.width, (f"{name}.width",)
    more: dict[str, Any] = {"limits": NOT_NEGATIVE, "groups": group, "relative": 0.1}
    for key in ("gaussian", "lorentzian"):
        yield Slot(f"{name}.width.{key}", (*path, "width", key), "field", 0.05, **more)
    where = (*path, "width", "hidden_hyperfine")
    yield from _tensor(f"{name}.width.hidden_hyperfine", where, width.hidden_hyperfine, "energy", 3.0, **more)
    for key in ("a", "b", "c"):
        if getattr(width, key) is not None:
            limits = NOT_NEGATIVE if key == "a" else FREE
            slot = Slot(f"{name}.width.{key}", (*path, "width", key), "field", 0.01, relative=0.1, groups=group)
            yield replace(slot, limits=limits)


def _spread_slots(name: str, path: Path, species: Species) -> Iterator[Slot]:
    spread, where = species.spread, (*path, "spread")
    more: dict[str, Any] = {"limits": NOT_NEGATIVE, "groups": (f"{name}.spread",), "relative": 0.1}
    yield from _tensor(f"{name}.spread.g", (*where, "g"), spread.g, "number", 0.002, **more)
    if spread.tilt > 0:
        yield Slot(f"{name}.spread.tilt", (*where, "tilt"), "angle", math.radians(0.2), **more)
    if any(spin.S > 0.5 for spin in species.spins):
        d, e = f"{name}.spread.D", f"{name}.spread.E"
        yield Slot(d, (*where, "D"), "energy", 30.0, like=(e, f"{name}.D"), **more)
        yield Slot(e, (*where, "E"), "energy", 10.0, like=(d, f"{name}.D"), **more)
        yield Slot(f"{name}.spread.correlation_D_E", (*where, "correlation_D_E"), "number", 0.1, limits=(-1.0, 1.0))
    if species.nuclei:
        yield from _tensor(f"{name}.spread.A", (*where, "A"), spread.A, "energy", 3.0, **more)
        yield Slot(f"{name}.spread.correlation_g_A", (*where, "correlation_g_A"), "number", 0.1, limits=(-1.0, 1.0))


def species_slots(index: int, species: Species) -> Iterator[Slot]:
    name, path = species.name, ("species", index)
    field = species.crystal_field
    if field is not None:
        yield from _field_slots(f"{name}.crystal_field", (*path, "crystal_field"), field)
    for n, spin in enumerate(() if field is not None else species.spins):
        prefix = name if len(species.spins) == 1 else f"{name}.{n + 1}"
        yield from _spin_slots(prefix, (*path, "spins", n), spin)
    for n, (label, nucleus) in enumerate(zip(nucleus_labels(species.nuclei), species.nuclei, strict=True)):
        if label in _RESERVED_FOR_NUCLEI or label.isdigit():
            raise InputError(f'a nucleus called "{label}"', "choose another name", place=f"{name}.{label}")
        yield from _nucleus_slots(f"{name}.{label}", (*path, "nuclei", n), nucleus)
    for n, exchange in enumerate(species.exchange):
        yield from _exchange_slots(name, (*path, "exchange", n), exchange)
    yield from _width_slots(name, path, species)
    yield from _spread_slots(name, path, species)
    refused = "" if index else "the scale is free, so that the first species' amount is fixed: vary those of the others"
    limits = NOT_NEGATIVE if species.amount >= 0 else FREE
    slot = Slot(f"{name}.amount", (*path, "amount"), "number", 0.05, relative=0.1, limits=limits)
    yield replace(slot, refused=refused)


def sample_slots(sample: Sample) -> Iterator[Slot]:
    if sample.form == "crystal":
        yield from _tilt("sample.tilt", ("sample", "tilt"))
        yield Slot("sample.angle_zero", ("sample", "angle_zero"), "angle", math.radians(1))
        for k, ending in enumerate("xyz" if sample.microwave_axis is not None else ""):
            name = f"sample.microwave_axis_{ending}"
            yield Slot(name, ("sample", "microwave_axis", k), "number", 0.05, refused=_only_direction(sample, k))
    if sample.form == "aligned":
        yield Slot("sample.order", ("sample", "order"), "number", 0.05, limits=(-0.5, 1.0))
        yield Slot("sample.angle", ("sample", "angle"), "angle", math.radians(3))


def _only_direction(sample: Sample, component: int) -> str:
    """Say why the largest component of a vector whose length means nothing cannot vary."""
    if component != max(range(3), key=lambda k: abs(sample.microwave_axis[k])):
        return ""
    return "only the direction of microwave_axis counts: vary its two smaller components"


def _correction_slots(name: str, path: Path, keys: Iterable[str]) -> Iterator[Slot]:
    """Yield the corrections of one trace or group; the path of a trace's is the key it has them in."""
    kinds = {"field_offset": "field", "field_scale": "number", "phase": "angle", "angle_zero": "angle"}
    steps = {"field_offset": 0.1, "field_scale": 1e-3, "phase": 0.05, "angle_zero": math.radians(1)}
    for key in keys:
        limits = NOT_NEGATIVE if key == "field_scale" else FREE
        yield Slot(f"{name}.{key}", (*path, key), kinds[key], steps[key], limits=limits)


def trace_slots(traces: Sequence[Any]) -> Iterator[Slot]:
    """Yield the corrections of traces, then of groups in the order of their first trace.

    `angle_zero` is no attribute of a trace but taken off its angle: its path starts with "turn".
    A group's corrections come on top of the traces' own; their paths start with "group".
    """
    for n, trace in enumerate(traces):
        own = [key for key in CORRECTIONS if hasattr(trace, key)]
        yield from _correction_slots(trace.name, ("traces", n), own)
        if trace.angle is not None:
            yield from _correction_slots(trace.name, ("turn", n), ["angle_zero"])
    for group in dict.fromkeys(group for trace in traces for group in groups_of(trace)):
        members = [trace for trace in traces if group in groups_of(trace)]
        keys = [key for key in CORRECTIONS if all(hasattr(t, key) for t in members)]
        keys += ["angle_zero"] if all(t.angle is not None for t in members) else []
        yield from _correction_slots(group, ("group", group), keys)
