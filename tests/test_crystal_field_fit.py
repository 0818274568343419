"""A species given by its crystal field: read, simulated, fitted back, and what the data determine of it."""

import json
import math
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from stub_engine import Spectrum
from toml_files import changed, refusal, write

from spinfit.cli import main
from spinfit.errors import InputError
from spinfit.files.job import read_job, read_model
from spinfit.fitting.crystal_fields import field_rank, responses_of, sharpened
from spinfit.fitting.data import Job, Trace
from spinfit.fitting.driver import fit
from spinfit.fitting.parameters import Binding, parameters_of
from spinfit.fitting.residuals import Problem, full_view
from spinfit.fitting.slots import field_label
from spinfit.ion.parameters import start_parameters
from spinfit.ion.species_field import species_field, spin_of
from spinfit.report.outcome_json import outcome_record
from spinfit.report.tables import outcome_lines
from spinfit.species import Spin, tensor_matrix
from spinfit.spectrum import simulate
from spinfit.units import G_ELECTRON, MU_B_OVER_H
from spinfit.units import MHZ_PER_WAVENUMBER as CM

ENERGIES = {"x2-y2": 15000.0, "z2": 7000.0, "xy": 0.0, "xz": -500.0, "yz": -1500.0}
COVALENCY = 0.85
ZETA = 829.0

SPECIES = """
[[species]]
name = "cu"
ion = "Cu2+"
[species.crystal_field]
zeta = "829 cm^-1"
covalency = 0.85
[species.crystal_field.orbitals]
"x2-y2" = "15000 cm^-1"
z2 = "7000 cm^-1"
xy = "0 cm^-1"
xz = "-500 cm^-1"
yz = "-1500 cm^-1"
[species.width]
gaussian = "3 mT"
"""
SWEEP = '[sweep]\nfrequency = "9.5 GHz"\nfield = "270, 360 mT"\npoints = 300\n'
JOB = SPECIES + (
    '[[trace]]\nname = "t"\nfile = "t.csv"\nfrequency = "9.5 GHz"\nfield_uncertainty = "0.02 mT"\n'
    '[fit]\nvary = ["cu.crystal_field.xy", "cu.crystal_field.yz", "cu.width.gaussian"]\n'
)


def copper_g(energies=ENERGIES, zeta=COVALENCY * ZETA, k=COVALENCY):
    """g of a d9 ion along x, y, z from the ten states of its hole, in code of its own.

    The hole sees every orbital energy and zeta with the other sign; g is the splitting of the lowest doublet in
    a small field.  Real orbitals carry L by their cyclic relations (C. J. Ballhausen, Introduction to Ligand
    Field Theory (1962)): L_z couples x2-y2 with xy by 2i and xz with yz by i, and so on.
    """
    names = ["x2-y2", "z2", "xy", "xz", "yz"]
    at = {name: n for n, name in enumerate(names)}
    L = np.zeros((3, 5, 5), dtype=complex)
    root = math.sqrt(3)
    for axis, one, other, value in [
        (0, "x2-y2", "yz", -1), (0, "z2", "yz", -root), (0, "xy", "xz", 1),
        (1, "x2-y2", "xz", -1), (1, "z2", "xz", root), (1, "xy", "yz", -1),
        (2, "x2-y2", "xy", -2), (2, "xz", "yz", -1),
    ]:  # fmt: skip
        L[axis, at[one], at[other]] = 1j * value
        L[axis, at[other], at[one]] = -1j * value
    for i, j, m in ((0, 1, 2), (1, 2, 0)):  # the matrices are those of an angular momentum
        np.testing.assert_allclose(L[i] @ L[j] - L[j] @ L[i], 1j * L[m], atol=1e-12)
    pauli = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]]) / 2
    zero = -np.kron(np.diag([energies[name] for name in names]), np.eye(2)) * CM
    zero = zero - zeta * CM * sum(np.kron(a, b) for a, b in zip(L, pauli, strict=True))
    g = []
    for axis in range(3):
        moment = MU_B_OVER_H * (k * np.kron(L[axis], np.eye(2)) + G_ELECTRON * np.kron(np.eye(5), pauli[axis]))
        levels = np.linalg.eigvalsh(zero + 100.0 * moment)  # 100 mT: 3 GHz against 10^5 GHz
        g.append((levels[1] - levels[0]) / (100.0 * MU_B_OVER_H))
    return tuple(g)


def job_file(tmp_path, text=JOB, *, signal_to_noise=150.0):
    """Write a job and its trace, simulated from plain g values that the test worked out itself."""
    model = read_model(write(tmp_path, SPECIES + SWEEP))
    plain = replace(model.species[0], spins=(Spin(0.5, copper_g()),), crystal_field=None)
    spectrum = simulate((plain,), model.sweep, model.sample, tolerance=1e-4)
    noise = np.ptp(spectrum.signal) / signal_to_noise * np.random.default_rng(3).normal(size=spectrum.signal.size)
    rows = np.column_stack((spectrum.fields, (spectrum.signal + noise) / np.ptp(spectrum.signal)))
    np.savetxt(tmp_path / "t.csv", rows, delimiter=",", header="field_mT,signal", comments="", fmt="%.9g")
    return write(tmp_path, text, "job.toml")


def test_g_follows_from_the_field(tmp_path):
    model = read_model(write(tmp_path, SPECIES + SWEEP))
    spin = model.species[0].spins[0]
    assert spin.S == 0.5
    assert spin.g_tilt == (0.0, 0.0, 0.0)
    np.testing.assert_allclose(spin.g, copper_g(), atol=1e-6)
    assert model.units["cu.crystal_field.x2_y2"] == "cm^-1"
    assert model.units["cu.crystal_field.covalency"] == ""


def test_the_command_simulates_it(tmp_path, capsys):
    by_field = write(tmp_path, SPECIES + SWEEP)
    head, _, tail = SPECIES.partition("[species.crystal_field]")
    g = ", ".join(f"{v:.12f}" for v in read_model(by_field).species[0].spins[0].g)
    plain = f'{head}S = "1/2"\ng = [{g}]\n[species.width]{tail.partition("[species.width]")[2]}'
    signals = []
    for path in (by_field, write(tmp_path, plain + SWEEP, "plain.toml")):
        assert main(["simulate", str(path)]) == 0
        signals.append([float(line.split(",")[1]) for line in capsys.readouterr().out.splitlines()[1:]])
    np.testing.assert_allclose(signals[0], signals[1], atol=1e-6 * max(signals[0]))


def test_orbital_energies_are_fitted_back(tmp_path):
    text = changed(changed(JOB, 'xy = "0 cm^-1"', 'xy = "1500 cm^-1"'), '"-1500 cm^-1"', '"-0.37 eV"')
    outcome = fit(read_job(job_file(tmp_path, text)))
    assert outcome.quality.converged
    assert outcome.quality.chi2_reduced < 1.3
    found = outcome.parameters
    assert abs(found["cu.crystal_field.xy"].value - 0.0) < 4 * found["cu.crystal_field.xy"].uncertainty < 400
    yz = found["cu.crystal_field.yz"]
    assert yz.unit == "eV"
    # 1 eV is 8065.54 cm^-1 (CODATA)
    assert abs(yz.value * 8065.544 + 1500) < 4 * yz.uncertainty * 8065.544 < 400
    for name, true in zip("xyz", copper_g(), strict=True):
        g = found[f"cu.g_{name}"]
        assert g.derived
        assert not g.varied
        assert abs(g.value - true) < 4 * g.uncertainty < 4e-3
    # xy alone moves g_z: 0.02 mT of the axis is g x 0.02/B = g^2 x 0.02 muB/(h nu).
    z = found["cu.g_z"]
    assert z.uncertainty_field == pytest.approx(z.value**2 * 0.02 * MU_B_OVER_H / 9500, rel=0.05)
    assert not any(note.code in ("crystal_field_rank", "undetermined") for note in outcome.warnings)
    assert outcome_record(outcome)["parameters"]["cu.g_z"]["derived"] is True
    lines = [line for line in outcome_lines(outcome).splitlines() if line.startswith("cu.g_z")]
    assert lines[0].endswith("derived")


def test_rank_check_names_what_the_data_leave_open(tmp_path):
    """All five energies: their common shift is nothing, z2 does not mix with x2-y2, and g has three values."""
    text = changed(JOB, '"cu.crystal_field.xy", "cu.crystal_field.yz"', '"cu.crystal_field"')
    outcome = fit(read_job(job_file(tmp_path, text)))
    notes = [note.text for note in outcome.warnings if note.code == "crystal_field_rank"]
    assert len(notes) == 1
    assert "determine none by itself (3 combinations in all)" in notes[0]
    assert all(name in notes[0] for name in ("z2", "x2_y2", "xy", "xz", "yz"))
    assert not any(note.code == "undetermined" for note in outcome.warnings)  # said once is enough
    for name in ENERGIES:
        assert outcome.parameters[f"cu.crystal_field.{field_label(name)}"].uncertainty is None
    assert outcome.parameters["cu.width.gaussian"].uncertainty > 0
    # g is known for all that.
    for name, true in zip("xyz", copper_g(), strict=True):
        g = outcome.parameters[f"cu.g_{name}"]
        assert abs(g.value - true) < 4 * g.uncertainty < 0.04


def test_rank_check_tells_the_one_that_is_determined(tmp_path):
    """xy decides g_z in first order; z2, which L does not couple to x2-y2, only counts in second order.

    At a signal as weak as this the second order is below the noise.  The check is made at the true values.
    """
    text = changed(JOB, '"cu.crystal_field.yz"', '"cu.crystal_field.z2"')
    job = read_job(job_file(tmp_path, text, signal_to_noise=3.0))
    problem = Problem(job, simulate)
    view = full_view(job.traces, problem.noises, 1e-4)
    point = problem.evaluate(problem.start, view)
    responses = responses_of(problem, point)
    jacobian, pure = sharpened(problem, view, point, problem.jacobian(point, view, central=True), responses)
    assert list(pure) == [True, True, False]
    free = np.zeros(3, dtype=bool)
    left_open, (note,) = field_rank(problem, jacobian, pure, free, responses, 1.0)
    assert list(left_open) == [False, True, False]
    assert note.code == "crystal_field_rank"
    assert "the data determine xy (1 combination in all) and leave open z2" in note.text


def test_jacobian_by_way_of_g_is_the_plain_one(tmp_path):
    """The chain rule through g and the engine's own finite differences agree to the latter's accuracy."""
    job = read_job(job_file(tmp_path))
    problem = Problem(job, simulate)
    view = full_view(job.traces, problem.noises, 1e-5)
    point = problem.evaluate(problem.start, view)
    plain = problem.jacobian(point, view, central=True)
    chained, pure = sharpened(problem, view, point, plain, responses_of(problem, point))
    for k in np.flatnonzero(pure):
        assert np.linalg.norm(chained[:, k] - plain[:, k]) < 0.02 * np.linalg.norm(plain[:, k])


NICKEL = """
[[species]]
name = "ni"
ion = "Ni2+"
[species.crystal_field]
racah = {B = "900 cm^-1", C = "3800 cm^-1"}
[species.crystal_field.octahedral]
ten_Dq = "9000 cm^-1"
Ds = "10 cm^-1"
Dt = "0 cm^-1"
[species.width]
gaussian = "8 mT"
"""


def test_spin_one_has_derived_D(tmp_path):
    """One varied parameter: the uncertainty of D is that of Ds times the model's own derivative."""
    model = read_model(
        write(tmp_path, NICKEL + '[sweep]\nfrequency = "95 GHz"\nfield = "2400, 3600 mT"\npoints = 300\n')
    )
    (ni,) = model.species
    assert ni.spins[0].S == 1
    spectrum = simulate(model.species, model.sweep, model.sample, tolerance=1e-3)
    noise = np.ptp(spectrum.signal) / 100 * np.random.default_rng(1).normal(size=300)
    rows = np.column_stack((spectrum.fields, (spectrum.signal + noise) / np.ptp(spectrum.signal)))
    np.savetxt(tmp_path / "ni.csv", rows, delimiter=",", header="field_mT,signal", comments="", fmt="%.9g")
    trace = '[[trace]]\nname = "t"\nfile = "ni.csv"\nfrequency = "95 GHz"\n[fit]\nvary = ["ni.crystal_field.Ds"]\n'
    job = read_job(write(tmp_path, NICKEL + trace, "job.toml"))
    assert {f"ni.crystal_field.{n}" for n in ("zeta", "B", "C", "ten_Dq", "Ds", "Dt", "reduction")} == {
        name for name in parameters_of(job.species, job.sample) if ".crystal_field." in name
    }
    outcome = fit(job)
    D, Ds = outcome.parameters["ni.D"], outcome.parameters["ni.crystal_field.Ds"]
    assert abs(Ds.value - 10) < 4 * Ds.uncertainty < 4
    binding = Binding(job.species, job.sample)
    low, high = (binding.apply({"ni.crystal_field.Ds": (Ds.value + s) * CM})[0][0].spins[0].D / CM for s in (-0.5, 0.5))
    assert D.unit == "cm^-1"
    assert D.value == pytest.approx((low + high) / 2, rel=1e-3)
    assert D.uncertainty == pytest.approx(abs(high - low) * Ds.uncertainty, rel=0.02)
    assert outcome.parameters["ni.E"].value == pytest.approx(0, abs=1e-9)


def test_repulsion_and_covalency_act_in_the_model(tmp_path):
    model = read_model(write(tmp_path, NICKEL + SWEEP))
    binding = Binding(model.species, model.sample)
    parameters = binding.parameters
    assert parameters["ni.crystal_field.B"].value == pytest.approx(900 * CM)
    assert parameters["ni.crystal_field.C"].value == pytest.approx(3800 * CM)
    moved, _, _ = binding.apply({"ni.crystal_field.B": 700 * CM, "ni.crystal_field.reduction": 0.5})
    inside = moved[0].crystal_field.model()
    # F2 = 49B + 7C, F4 = 63C/5 (Condon and Shortley)
    assert inside.slater[2] / CM == pytest.approx(49 * 700 + 7 * 3800)
    assert inside.slater[4] / CM == pytest.approx(63 * 3800 / 5)
    assert inside.reduction == 0.5
    # k L in the Zeeman operator: g - g_e is linear in k, zero where k is.
    spin = model.species[0].spins[0]
    half, _, _ = binding.apply({"ni.crystal_field.reduction": 0.5})
    none, _, _ = binding.apply({"ni.crystal_field.reduction": 0.0})
    assert half[0].spins[0].g[2] == pytest.approx((spin.g[2] + none[0].spins[0].g[2]) / 2, rel=1e-9)


def test_a_common_shift_of_energies_is_the_same_spin(tmp_path):
    (cu,) = read_model(write(tmp_path, SPECIES + SWEEP)).species
    names = [f"cu.crystal_field.{n}" for n in ("x2_y2", "z2", "xy", "xz", "yz")]
    binding = Binding([cu], read_model(write(tmp_path, SPECIES + SWEEP)).sample)
    shifted, _, _ = binding.apply({n: binding.parameters[n].value + 3000 * CM for n in names})
    np.testing.assert_allclose(shifted[0].spins[0].g, cu.spins[0].g, atol=1e-9)
    again, _, _ = binding.apply({})
    assert again[0] == cu
    assert hash(again[0]) == hash(cu)


def test_limits_and_ties_know_the_names(tmp_path):
    text = JOB + (
        '[fit.limits]\n"cu.crystal_field.xy" = "-2000, 2000 cm^-1"\n'
        '[fit.tie]\n"cu.crystal_field.xz" = "cu.crystal_field.yz + 1000"\n'
    )
    job = read_job(job_file(tmp_path, text))
    assert job.limits["cu.crystal_field.xy"] == pytest.approx((-2000 * CM, 2000 * CM))
    outcome = fit(job)
    found = {n: outcome.parameters[f"cu.crystal_field.{n}"] for n in ("xz", "yz")}
    assert found["xz"].value == pytest.approx(found["yz"].value + 1000)
    assert found["xz"].tied
    assert found["xz"].uncertainty == pytest.approx(found["yz"].uncertainty)


def test_tilted_ligands_tilt_the_tensor(tmp_path):
    """A square of ligands turned out of the axes: the same g, turned along."""
    ligands = "".join(
        f'[[species.crystal_field.ligand]]\nangles = "{a}, {b} deg"\ne_sigma = "5000 cm^-1"\n'
        for a, b in ((90, 90), (90, 270), (120, 0), (60, 180))
    )
    head = '[[species]]\nname = "cu"\nion = "Cu2+"\n[species.crystal_field]\n'
    text = f'{head}{ligands}[species.width]\ngaussian = "3 mT"\n'
    spin = read_model(write(tmp_path, text + SWEEP)).species[0].spins[0]
    tensor = tensor_matrix(spin.g, spin.g_tilt)
    normal = np.array([math.sin(math.radians(30)), 0, math.cos(math.radians(30))])
    assert np.linalg.eigvalsh(tensor)[2] == pytest.approx(normal @ tensor @ normal, abs=1e-9)


def test_auto_starts_from_the_ion(tmp_path):
    text = '[[species]]\nname = "cu"\nion = "Cu2+"\nS = "1/2"\n' + (
        '[[trace]]\nname = "t"\nfile = "t.csv"\nfrequency = "9.5 GHz"\n'
        '[fit]\nstart = "auto"\nvary = ["cu.g", "cu.width.gaussian"]\n'
    )
    job = read_job(job_file(tmp_path, text))
    expected = start_parameters("Cu2+", 0.5)
    # x and y are parted a little: where they coincide, chi-squared has no slope that would part them.
    start = job.species[0].spins[0].g
    assert start[0] < start[1]
    np.testing.assert_allclose(start, np.diag(expected.g), atol=0.011)
    assert start[2] == pytest.approx(expected.g[2, 2])
    other = read_job(write(tmp_path, changed(text, 'S = "1/2"', 'S = "3/2"'), "job.toml"))
    assert other.species[0].spins[0].g == pytest.approx((G_ELECTRON,))
    outcome = fit(job)
    for name, true in zip("xyz", copper_g(), strict=True):
        g = outcome.parameters[f"cu.g_{name}"]
        assert abs(g.value - true) < 4 * g.uncertainty < 0.04


def test_a_field_that_changes_the_spin_is_refused(tmp_path):
    """Square-planar Ni2+ with a gap below x2-y2 far above 8B + 2C has no spin: one line, no traceback."""
    model = read_model(write(tmp_path, NICKEL + SWEEP))
    with pytest.raises(InputError, match=r"ni\.crystal_field: .*S = 0") as caught:
        Binding(model.species, model.sample).apply(
            {"ni.crystal_field.Ds": 8000 * CM, "ni.crystal_field.ten_Dq": 25000 * CM}
        )
    assert "\n" not in str(caught.value)


def test_derivatives_next_to_a_crossing_come_from_one_side(tmp_path):
    """The last Ds, to 0.1 cm^-1, at which square-planar Ni2+ still is a spin 1."""
    text = changed(NICKEL, "9000 cm^-1", "25000 cm^-1")
    model = read_model(write(tmp_path, text + SWEEP))
    binding = Binding(model.species, model.sample)
    low, high = 10.0, 8000.0
    while high - low > 0.1:
        middle = (low + high) / 2
        try:
            binding.apply({"ni.crystal_field.Ds": middle * CM})
            low = middle
        except InputError:
            high = middle
    species, _, _ = binding.apply({"ni.crystal_field.Ds": low * CM})
    fields = np.linspace(270.0, 360.0, 100)
    trace = Trace("t", fields, np.sin(fields), np.ones(100, dtype=bool), frequency=9500.0)

    def by_g(kinds, sweep, sample, *, tolerance, fields, angle):
        """A signal that simply shows g_z and D."""
        spin = kinds[0].spins[0]
        return Spectrum(fields, None, [np.sin(fields * spin.g[2]) + 1e-9 * spin.D])

    problem = Problem(Job(species, model.sample, (trace,), ("ni.crystal_field.Ds",)), by_g)
    view = full_view(problem.job.traces, problem.noises, 1e-4)
    for central in (False, True):
        column = problem.jacobian(problem.evaluate(problem.start, view), view, central=central)
        assert np.isfinite(column).all()
        assert np.abs(column).max() > 0


@pytest.mark.parametrize(
    ("old", "new", "place", "found"),
    [
        ('xy = "0 cm^-1"', "xy = 0.0", "species.1.crystal_field.orbitals.xy", "unit"),
        ('xy = "0 cm^-1"', 'xyy = "0 cm^-1"', "species.1.crystal_field.orbitals", 'did you mean "xy"'),
        ("covalency = 0.85", "covalence = 0.85", "species.1.crystal_field", 'did you mean "covalency"'),
        ("covalency = 0.85", "covalency = 0.85\nreduction = 0.9", "species.1.crystal_field.covalency", "beside"),
        ('ion = "Cu2+"', 'ion = "Cu2+"\ng = 2.1', "species.1.g", "stands beside crystal_field"),
        ('ion = "Cu2+"', 'ion = "Cu2+"\nD = "1 GHz"', "species.1.D", "stands beside crystal_field"),
        ('ion = "Cu2+"', "", "species.1.ion", "is missing"),
        ('ion = "Cu2+"', 'ion = "Zn2+"', "species.1.crystal_field", "closed shells"),
        ('ion = "Cu2+"', 'ion = "Cu2+"\nS = "3/2"', "species.1.S", "S = 0.5"),
        ("[species.crystal_field.orbitals]", "[[species.crystal_field.orbitals]]", "crystal_field.orbitals", "single"),
    ],
)
def test_mistakes_in_one_line(tmp_path, old, new, place, found):
    text = refusal(read_model, write(tmp_path, changed(SPECIES + SWEEP, old, new)))
    assert place in text
    assert found in text


@pytest.mark.parametrize(
    ("name", "right"),
    [
        ("cu.crystal_field.x2-y2", "cu.crystal_field.x2_y2"),
        ("cu.g_z", 'vary "cu.crystal_field"'),
        ("cu.crystal_field.e_sigma", "no parameter"),
    ],
)
def test_names_that_cannot_be_varied(tmp_path, name, right):
    path = job_file(tmp_path, changed(JOB, "cu.crystal_field.xy", name))
    assert right in refusal(read_job, path)


def test_the_command_refuses_with_exit_2(tmp_path, capsys):
    path = write(tmp_path, changed(SPECIES + SWEEP, 'xy = "0 cm^-1"', "xy = 0.0"))
    assert main(["simulate", str(path), "--json"]) == 2
    assert len(capsys.readouterr().err.splitlines()) == 1


def test_the_fit_command_reports_it(tmp_path, capsys):
    path = job_file(tmp_path)
    assert main(["fit", str(path), "--out", str(tmp_path / "out"), "--json"]) == 0
    capsys.readouterr()
    record = json.loads((tmp_path / "out" / "outcome.json").read_text(encoding="utf-8"))
    assert record["parameters"]["cu.g_z"]["uncertainty"] > 0
    assert record["parameters"]["cu.g_z"]["varied"] is False


def test_the_job_of_the_documentation_runs(tmp_path):
    """docs/ion.md, word for word, with the trace of the tests."""
    page = (Path(__file__).resolve().parents[1] / "docs" / "ion.md").read_text(encoding="utf-8")
    blocks = re.findall(r"```toml\n(.*?)```", page, flags=re.DOTALL)
    (text,) = [block for block in blocks if "species.crystal_field" in block]
    path = job_file(tmp_path, text)
    (tmp_path / "t.csv").rename(tmp_path / "glass.csv")
    outcome = fit(read_job(path))
    for name in ("xy", "yz"):
        found = outcome.parameters[f"cu.crystal_field.{name}"]
        assert abs(found.value - ENERGIES[name]) < 4 * found.uncertainty


def test_a_field_of_a_species_is_plain_data():
    """Equal values compare equal and hash alike, so that a fit may remember them."""
    from spinfit.ion.defaults import default_model

    base = default_model("Cu2+")
    one, other = species_field(base), species_field(base)
    assert one == other
    assert spin_of(one) == spin_of(other)
