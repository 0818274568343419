"""Every number of a model by name: what a job may vary, limit, tie and report.

A name is parts joined by dots: ``cu.g_x``, ``cu.63Cu.A_z``, ``pair.1.g_x``, ``pair.J_12``,
``sample.order``, ``day_2.field_offset``.  Which names a model has depends on the form in which its
tensors were given: one number is ``g``, two are ``g_perp`` and ``g_par``, three are ``g_x``,
``g_y`` and ``g_z``.

A model is a tree of frozen dataclasses and tuples; a parameter is a path into that tree, so that
new values rebuild only the branches they stand on.  Values are in internal units (MHz, mT, rad)
throughout; `Parameter.to_job` and `Parameter.from_job` carry them to the unit of the job and back.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from spinfit.errors import InputError, nearest
from spinfit.fitting.data import Trace, groups_of
from spinfit.fitting.slots import CORRECTIONS, FREE, Path, Slot, sample_slots, species_slots, trace_slots
from spinfit.ion.species_field import spin_of
from spinfit.species import Species
from spinfit.sweep import Sample
from spinfit.units import from_unit, to_unit

DEFAULT_UNITS = {"energy": "MHz", "field": "mT", "angle": "deg", "number": ""}
"""Unit of a parameter of each kind that the job does not mention."""

WORD = re.compile(r"[A-Za-z0-9_]+")
"""What a part of a name is made of."""

# Species, samples and traces with values put in that are remembered: the columns of a Jacobian move one of many.
_BUILT = 256
_FROM_FIELD = re.compile(r"g(_x|_y|_z|_perp|_par)?|D|E|rhombicity|[gD]_tilt(_alpha|_beta|_gamma)?")


@dataclass(frozen=True)
class Parameter:
    """One number of a model.

    Attributes
    ----------
    name : str
    value : float
        Start, in the internal unit of `kind`.
    kind : str
        "energy" (MHz), "field" (mT), "angle" (rad) or "number".
    unit : str
        In which the job gave it; "" for a plain number.
    hard_limits : (float, float)
        Beyond these the model has no meaning; internal unit.
    scale : float
        A typical step, internal unit, positive.
    groups : tuple of str
        The groups by which `vary` may call it.
    sum_zero : bool
        A component of a traceless tensor, whose group is ``groups[0]``.
    refused : str
        Why it cannot be varied; "" when it can.
    """

    name: str
    value: float
    kind: str
    unit: str
    hard_limits: tuple[float, float] = FREE
    scale: float = 1.0
    groups: tuple[str, ...] = ()
    sum_zero: bool = False
    refused: str = ""

    def to_job(self, value: float) -> float:
        """Carry a value from the internal unit to the unit of the job."""
        return value if self.kind == "number" else to_unit(value, self.unit, self.kind)

    def from_job(self, value: float) -> float:
        """Carry a value from the unit of the job to the internal unit."""
        return value if self.kind == "number" else from_unit(value, self.unit, self.kind)


@dataclass(frozen=True)
class _Model:
    """The root of the tree that paths lead into."""

    species: tuple[Species, ...]
    sample: Sample
    traces: tuple[Any, ...]


def _get(node: Any, path: Path) -> float:
    for step in path:
        node = node[step] if isinstance(step, int) else getattr(node, step)
    return float(node)


def _put(tree: dict[str | int, Any], path: Path, value: float) -> None:
    for step in path[:-1]:
        tree = tree.setdefault(step, {})
    tree[path[-1]] = value


def _rebuild(node: Any, tree: Mapping[str | int, Any]) -> Any:
    """Return the node with the values of a tree of changes put in."""
    if isinstance(node, tuple):
        return tuple(_changed(child, tree[k]) if k in tree else child for k, child in enumerate(node))
    return replace(node, **{str(key): _changed(getattr(node, str(key)), change) for key, change in tree.items()})


def _changed(child: Any, change: Any) -> Any:
    return _rebuild(child, change) if isinstance(change, dict) else change


def _check_names(model: _Model) -> None:
    """Refuse things of the same name, and names that could not stand in a parameter's."""
    kinds = [(s.name, "a species") for s in model.species] + [(t.name, "a trace") for t in model.traces]
    groups = dict.fromkeys(group for trace in model.traces for group in groups_of(trace))
    known = {"sample": "the sample"}
    for name, what in kinds + [(group, "a group of traces") for group in groups]:
        if not WORD.fullmatch(name):
            raise InputError(f'"{name}" as the name of {what}', "use letters, digits and _ only", place="name")
        if name in known:
            first = "two of these" if known[name] == what else f"{known[name]} and {what}"
            raise InputError(f'"{name}" is the name of {first}', 'give one another name, e.g. name = "..."')
        known[name] = what


class Binding:
    """The parameters of a model, and how to put values into it.

    Parameters
    ----------
    species, sample, traces
        The model and the traces it is compared with; a table of line positions counts as a trace.
    units : mapping of name -> unit, optional
        In which the job gave its parameters.

    Attributes
    ----------
    parameters : dict of name -> Parameter
        In file order.

    Raises
    ------
    InputError
        When two things have the same name.
    """

    def __init__(
        self,
        species: Sequence[Species],
        sample: Sample,
        traces: Sequence[Any] = (),
        *,
        units: Mapping[str, str] | None = None,
    ) -> None:
        self._model = _Model(tuple(species), sample, tuple(traces))
        _check_names(self._model)
        slots = [slot for n, one in enumerate(self._model.species) for slot in species_slots(n, one)]
        slots += [*sample_slots(sample), *trace_slots(self._model.traces)]
        self._paths: dict[str, Path] = {}
        self.parameters: dict[str, Parameter] = {}
        for slot in slots:
            if slot.name in self.parameters:
                raise InputError(f'two parameters are called "{slot.name}"', "give one of the two another name")
            self._paths[slot.name] = slot.path
            self.parameters[slot.name] = self._parameter(slot, units or {})
        self._built: dict[Any, Any] = {}

    def _parameter(self, slot: Slot, units: Mapping[str, str]) -> Parameter:
        if slot.path[0] in ("turn", "group"):
            value = CORRECTIONS[str(slot.path[-1])]
        else:
            value = _get(self._model, slot.path)
        unit = next((units[name] for name in (slot.name, *slot.like) if name in units), DEFAULT_UNITS[slot.kind])
        return Parameter(
            slot.name,
            value,
            slot.kind,
            unit,
            slot.limits,
            max(slot.step, slot.relative * abs(value)),
            slot.groups,
            slot.sum_zero,
            slot.refused,
        )

    def path(self, name: str) -> Path:
        """Return where a parameter stands in the tree of species, sample and traces (see `slots`)."""
        return self._paths[name]

    def named(self, given: Mapping[Path, str]) -> dict[str, str]:
        """Return the unit of each parameter that a file gives, from the units by path in the model.

        A path leads to a parameter or to the tensor it belongs to.
        """
        units = {}
        for name, path in self._paths.items():
            unit = next((given[path[:n]] for n in range(len(path), 1, -1) if path[:n] in given), None)
            if unit is not None:
                units[name] = unit
        return units

    def apply(self, values: Mapping[str, float]) -> tuple[tuple[Species, ...], Sample, tuple[Any, ...]]:
        """Return the model with new values, in internal units; names not mentioned keep theirs.

        Raises
        ------
        InputError
            For an unknown name, or a value without meaning (a negative width).
        """
        tree: dict[str | int, Any] = {}
        corrections: list[tuple[Path, float]] = []
        for name, value in values.items():
            path = self._paths.get(name)
            if path is None:
                raise unknown(name, self.parameters)
            if path[0] in ("turn", "group"):
                corrections.append((path, float(value)))
            else:
                _put(tree, path, float(value))
        changes = {str(branch): below for branch, below in tree.items()}
        species = tuple(
            self._part(one, ("species", n), changes.get("species", {})) for n, one in enumerate(self._model.species)
        )
        sample = self._part(self._model.sample, ("sample", 0), {0: changes["sample"]} if "sample" in changes else {})
        traces = [self._part(one, ("traces", n), changes.get("traces", {})) for n, one in enumerate(self._model.traces)]
        for (how, which, key), value in corrections:
            for n, trace in enumerate(traces):
                if n == which if how == "turn" else which in groups_of(trace):
                    traces[n] = _correct(trace, str(key), value)
        return species, sample, tuple(traces)

    def _part(self, node: Any, place: tuple[str, int], changes: Mapping[str | int, Any]) -> Any:
        """Return one species, the sample or one trace with its changes put in, the same object for the same changes."""
        change = changes.get(place[1])
        if change is None:
            return _resolved(node) if isinstance(node, Species) else node
        key = place, repr(change)
        if key not in self._built:
            if len(self._built) >= _BUILT:
                self._built.clear()
            built = _rebuild(node, change)
            self._built[key] = _resolved(built) if isinstance(node, Species) else built
        return self._built[key]


def _resolved(species: Species) -> Species:
    """Return a species with the spin that its crystal field leads to, if it has one."""
    if species.crystal_field is None:
        return species
    try:
        spin = spin_of(species.crystal_field, species.spins[0].S)
    except InputError as error:
        raise InputError(error.found, error.right, place=f"{species.name}.crystal_field") from None
    return replace(species, spins=(spin,))


def _correct(trace: Any, key: str, value: float) -> Any:
    """Return a trace with a correction on top of its own."""
    if value == CORRECTIONS[key]:
        return trace
    if key == "angle_zero":
        return replace(trace, angle=trace.angle - value)
    if key == "field_scale":
        return replace(trace, field_scale=trace.field_scale * value)
    return replace(trace, **{key: getattr(trace, key) + value})


def parameters_of(
    species: Sequence[Species],
    sample: Sample,
    traces: Sequence[Trace] = (),
    *,
    units: Mapping[str, str] | None = None,
) -> dict[str, Parameter]:
    """Return every parameter of a model by name, in file order (see `Binding`)."""
    return Binding(species, sample, traces, units=units).parameters


def apply(
    values: Mapping[str, float], species: Sequence[Species], sample: Sample, traces: Sequence[Trace] = ()
) -> tuple[tuple[Species, ...], Sample, tuple[Trace, ...]]:
    """Return species, sample and traces with new values (internal units) put in.

    A fit that does this often keeps a `Binding` and calls its `apply`.
    """
    return Binding(species, sample, traces).apply(values)


def unknown(name: str, parameters: Mapping[str, Parameter], *, place: str | None = None) -> InputError:
    """Return the error for a name that the model does not have, with the nearest that it has."""
    groups = {group for parameter in parameters.values() for group in parameter.groups}
    right = nearest(name, [*parameters, *groups])
    tensor = re.sub(r"_(x|y|z|perp|par)$", "", name)
    head, _, last = name.rpartition(".")
    twin = {"E": f"{head}.rhombicity", "rhombicity": f"{head}.E"}.get(last, "")
    if tensor in groups:
        parts = ", ".join(p.name for p in parameters.values() if tensor in p.groups)
        right = f"this tensor was given as {parts}"
    elif twin in parameters:
        right = f"the model was given {twin}"
    elif _FROM_FIELD.fullmatch(last) and f"{head}.crystal_field" in groups:
        right = f'it follows from the crystal field: vary "{head}.crystal_field", or single parameters of it'
    return InputError(f'"{name:.60}" is no parameter of this model', right, place=place)


def members(name: str, parameters: Mapping[str, Parameter], *, place: str | None = None) -> tuple[str, ...]:
    """Return the parameters that a name or a group means, in file order.

    ``cu.g`` means the components of g and not its tilt; ``cu.width`` and ``cu.spread`` mean those
    of their entries that are not 0 at the start.

    Raises
    ------
    InputError
        For an unknown name, or a group of which everything is 0.
    """
    if name in parameters:
        return (name,)
    found = [p for p in parameters.values() if name in p.groups]
    if not found:
        raise unknown(name, parameters, place=place)
    if name.endswith((".width", ".spread")):
        found = [p for p in found if p.value != 0]
        if not found:
            raise InputError(f'everything in "{name}" is 0', "name the entries to vary", place=place)
    return tuple(p.name for p in found)


def expand_vary(vary: Iterable[str], parameters: Mapping[str, Parameter]) -> tuple[str, ...]:
    """Return the single parameters that `vary` means, each once, in the order of the job.

    Of a traceless tensor called by its group all components but one are varied: the last follows
    from the others (`spinfit.fitting.ties.compile_ties` makes it so).

    Raises
    ------
    InputError
        For names the model does not have, parameters that cannot be varied, all components of a
        traceless tensor named one by one, and D with B2_0 or E with B2_2 at once.
    """
    names: dict[str, None] = {}
    for entry in vary:
        found = members(entry, parameters, place="fit.vary")
        if entry not in parameters and parameters[found[0]].sum_zero:
            found = found[:-1]
        names.update(dict.fromkeys(found))
    for name in names:
        if parameters[name].refused:
            raise InputError(f'"{name}" cannot be varied', parameters[name].refused, place="fit.vary")
    _refuse_traceless(names, parameters)
    _refuse_twice(names)
    return tuple(names)


def _refuse_traceless(names: Iterable[str], parameters: Mapping[str, Parameter]) -> None:
    named = Counter(parameters[name].groups[0] for name in names if parameters[name].sum_zero)
    for group, count in named.items():
        if count == len(members(group, parameters)):
            few = "one" if count == 2 else "two"
            right = f'vary {few} of them, or "{group}"'
            raise InputError(f'the components of "{group}" add up to 0 and cannot all vary', right, place="fit.vary")


def _refuse_twice(names: Iterable[str]) -> None:
    """D = 3 B2_0 and E = B2_2: two names for the same thing have no separate values."""
    names = set(names)
    for name in sorted(names):
        head, _, last = name.rpartition(".")
        for twin in {"B2_0": ("D",), "B2_2": ("E", "rhombicity")}.get(last, ()):
            if f"{head}.{twin}" in names:
                law = "D = 3 B2_0" if twin == "D" else "E = B2_2"
                found = f'"{head}.{twin}" and "{name}" act alike ({law}) and cannot both vary'
                raise InputError(found, "vary one of them", place="fit.vary")
