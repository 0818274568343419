"""Model and job files, read in full and checked before anything is computed.

A model (`read_model`) is what a spectrum is simulated from; a job (`read_job`) adds measured
traces and what to vary.  Nothing wrong passes silently: every key is known, every quantity has a
unit, every name means something, and an error says file, key, what was found and what would be
right.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from spinfit.errors import InputError, on_one_line
from spinfit.files.keys import JOB, MODEL
from spinfit.files.store import Folder, Kept, Store
from spinfit.files.toml_fit import read_fit, start_of
from spinfit.files.toml_sample import DEFAULT_TOLERANCE, read_sample, read_sweep, read_tolerance
from spinfit.files.toml_species import read_species
from spinfit.files.toml_table import Given, Table, load_toml, parse_toml
from spinfit.files.toml_trace import read_lines, read_trace
from spinfit.fitting.data import Job, Lines, Trace, groups_of
from spinfit.fitting.parameters import Binding, expand_vary
from spinfit.species import Species
from spinfit.sweep import Sample, Sweep

_ONLY_IN_JOBS = "it makes this a job file: fit it, or take it out to simulate"
_NOT_IN_MODELS = {key: _ONLY_IN_JOBS for key in ("trace", "lines", "fit")}
_NOT_IN_JOBS = {"sweep": "it makes this a model file: in a job the conditions stand in [[trace]]"}
MOST_TRACES = 10_000


@dataclass(frozen=True)
class Model:
    """What a spectrum is simulated from.

    Attributes
    ----------
    species, sweep, sample
        In internal units.
    tolerance : float
        Largest error of the spectrum relative to its largest value.
    units : mapping of name -> unit
        Of each parameter that the file gives ("" for a plain number).
    name, path, text : str
        Stem, path and content of the file.
    """

    species: tuple[Species, ...]
    sweep: Sweep
    sample: Sample = field(default_factory=Sample)
    tolerance: float = DEFAULT_TOLERANCE
    units: Mapping[str, str] = field(default_factory=dict)
    name: str = "model"
    path: str = ""
    text: str = ""


def read_model(path: str | Path) -> Model:
    """Read a model file.

    Parameters
    ----------
    path : str or Path
        TOML, with the tables ``[sweep]``, ``[sample]``, ``[accuracy]`` and ``[[species]]``.

    Raises
    ------
    InputError
        With the file, and the line or key.
    """
    data, text = load_toml(path)
    try:
        return model_from(data, name=Path(path).stem, path=str(path), text=text)
    except InputError as error:
        raise error.at(file=path) from None


def model_from(data: Mapping[str, Any], *, name: str = "model", path: str = "", text: str = "") -> Model:
    """Make a model of parsed TOML (see `read_model`)."""
    root = Table(data, "", MODEL, elsewhere=_NOT_IN_MODELS)
    given: Given = {}
    root.require("sweep", 'a table: [sweep] with frequency = "9.5 GHz" and field = "260, 360 mT"')
    sweep = read_sweep(root.data["sweep"], given)
    sample = read_sample(root.data.get("sample"), given, job=False)
    species = read_species(root.tables("species"), given, form=sample.form, auto=False)
    tolerance = read_tolerance(root.data.get("accuracy"), given)
    units = Binding(species, sample).named(given)
    return Model(species, sweep, sample, tolerance, units, name, path, text)


def read_job(
    path: str | Path, *, tables: Mapping[str, Any] | None = None, text: str = "", store: Store | None = None
) -> Job:
    """Read a job file with all its data files.

    Parameters
    ----------
    path : str or Path
        The job file; its folder is where data files are looked for.
    tables : mapping, optional
        Parsed TOML to use in place of the file's content (a template with its traces put in).
    text : str, optional
        What `tables` were parsed from.
    store : Store, optional
        Where data files come from, when it is not the job file's folder.

    Raises
    ------
    InputError
        With the file, and the line or key.
    """
    if tables is None:
        tables, text = load_toml(path)
    try:
        return _job_from(tables, Path(path), text, store or Folder(Path(path).parent))
    except InputError as error:
        raise error.at(file=path) from None


def job_of(text: str, name: str, contents: Mapping[str, bytes]) -> Job:
    """Read a job from its text, with data files that are in memory already (an archive's).

    Parameters
    ----------
    text : str
        TOML.
    name : str
        What the job is called: the stem of its file.
    contents : mapping of name -> bytes
        Data files by the names that the job writes; nothing else is opened.

    Raises
    ------
    InputError
        With the line or key.
    """
    job = _job_from(parse_toml(text), Path("job.toml"), text, Kept(contents))
    return replace(job, name=name, path="")


def _job_from(data: Mapping[str, Any], path: Path, text: str, store: Store) -> Job:
    root = Table(data, "", JOB, elsewhere=_NOT_IN_JOBS)
    given: Given = {}
    start = start_of(root.data.get("fit"))
    sample = read_sample(root.data.get("sample"), given, job=True)
    species = read_species(
        root.tables("species"), given, form=sample.form, auto=start == "auto", width="trace" in root.data
    )
    tolerance = read_tolerance(root.data.get("accuracy"), given)
    traces, lines = _data(root, store, sample, species, given)
    binding = Binding(species, sample, (*traces, *lines))
    units = binding.named(given)
    binding = Binding(species, sample, (*traces, *lines), units=units)
    fit = read_fit(root.data["fit"], binding.parameters)
    _check_points(traces, lines, len(expand_vary(fit.vary, binding.parameters)))
    return Job(
        species=species,
        sample=sample,
        traces=traces,
        vary=fit.vary,
        limits=fit.limits,
        ties=fit.ties,
        start=fit.start,
        tolerance=tolerance,
        units=units,
        name=on_one_line(path.stem) or "job",
        path=str(path),
        text=text,
        lines=lines,
        loss=fit.loss,
        loss_scale=fit.loss_scale,
        files=store.taken,
    )


def _data(
    root: Table, store: Store, sample: Sample, species: tuple[Species, ...], given: Given
) -> tuple[tuple[Trace, ...], tuple[Lines, ...]]:
    """Read traces and tables of lines, in this order, and see that nothing is called alike."""
    entries: list[tuple[str, Any, Callable[..., Trace | Lines]]] = []
    entries += [(place, entry, read_trace) for place, entry in root.tables("trace")]
    entries += [(place, entry, read_lines) for place, entry in root.tables("lines")]
    if not entries:
        raise InputError("is missing", 'write [[trace]] with file = "..."', place="trace")
    if len(entries) > MOST_TRACES:
        raise InputError(f"{len(entries)} traces", f"a job holds at most {MOST_TRACES}: use several", place="trace")
    names = {"sample": "the sample"} | {one.name: "a species" for one in species}
    found: list[Trace | Lines] = []
    for n, (place, entry, reader) in enumerate(entries):
        one = reader(place, entry, n, store=store, sample=sample, given=given)
        if one.name in names:
            text = f'"{one.name}" is the name of {names[one.name]} already'
            raise InputError(text, 'write another name = "..." here', place=f"{place}.name")
        names[one.name] = "a trace"
        found.append(one)
    for kept, (place, _, _) in zip(found, entries, strict=True):
        taken = next((group for group in groups_of(kept) if group in names), None)
        if taken is not None:
            text = f'"{taken}" is the name of {names[taken]} already'
            raise InputError(text, "choose another name for the group", place=f"{place}.group")
    traces = tuple(one for one in found if isinstance(one, Trace))
    return traces, tuple(one for one in found if isinstance(one, Lines))


def _check_points(traces: tuple[Trace, ...], lines: tuple[Lines, ...], varied: int) -> None:
    """Refuse a fit of more unknowns than points: each trace has a scale and a baseline of its own."""
    for n, trace in enumerate(traces):
        points, own = int(trace.used.sum()), 1 + (0 if trace.baseline is None else trace.baseline + 1)
        if points <= own:
            text = f"{points} points are left for a scale and a baseline of {own} free numbers"
            raise InputError(text, "use more of the trace, or a lower baseline order", place=f"trace.{n + 1}")
    points = sum(int(trace.used.sum()) for trace in traces) + sum(len(table.field) for table in lines)
    free = varied + sum(1 + (0 if trace.baseline is None else trace.baseline + 1) for trace in traces)
    if points <= free:
        text = f"{points} points for {free} free parameters, scales and baselines included"
        raise InputError(text, "vary fewer, or use more of the traces", place="fit.vary")
