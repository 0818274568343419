"""Resonance fields against direction: closed forms along rotations and over the sphere, and their pictures."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from scipy import constants

from spinfit.cli import main
from spinfit.dependence import great_circles, over_sphere, path, rotation
from spinfit.report.dependence_plots import absorption_figure, fields_figure, path_figure, rotation_figure
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

NU = 9500.0
MU_B = constants.physical_constants["Bohr magneton in Hz/T"][0] * 1e-9  # MHz/mT
G = (2.0, 2.1, 2.3)
RHOMBIC = Species("r", (Spin(0.5, G),), width=Width(gaussian=2.0))
SWEEP = Sweep(NU, (280.0, 350.0), 701)


def field_of(directions: np.ndarray, g=G) -> np.ndarray:
    """h nu = mu_B |g n| B for S = 1/2."""
    return NU / (MU_B * np.linalg.norm(directions * np.array(g), axis=1))


def test_a_path_follows_the_closed_form():
    directions = great_circles(20)
    np.testing.assert_allclose(np.linalg.norm(directions, axis=1), 1)
    np.testing.assert_allclose(directions[[0, 20, 40, 60]], [[0, 0, 1], [1, 0, 0], [0, 1, 0], [0, 0, 1]], atol=1e-12)
    (strand,) = path((RHOMBIC,), SWEEP, Sample(), directions)
    assert (strand.lower, strand.upper, strand.species, strand.site) == (1, 2, 0, 0)
    np.testing.assert_array_equal(strand.place, np.arange(61))
    np.testing.assert_allclose(strand.field, field_of(directions), atol=1e-6)
    assert strand.weight.max() == pytest.approx(1)


def test_a_rotation_has_a_line_for_each_site_and_species():
    """4/m turns x to y: the lines are those of g and of g with x and y exchanged."""
    angles = np.deg2rad(np.arange(0.0, 181.0, 5.0))
    sample = Sample("crystal", axis=(0, 1, 0), start=(0, 0, 1), point_group="4/m")
    strands = rotation((RHOMBIC, Species("s", (Spin(0.5, (2.0,)),), amount=0.1)), SWEEP, sample, angles)
    turned = np.stack([np.sin(angles), 0 * angles, np.cos(angles)], axis=1)
    own = sorted((s.field for s in strands if s.species == 0), key=np.mean)
    assert len(own) == 4  # 4/m without inversion: 1, 4, 2 and the inverse of 4; 2 leaves such a g as it is
    for field, g in zip(own, [(2.1, 2.0, 2.3)] * 2 + [G] * 2, strict=True):
        np.testing.assert_allclose(field, field_of(turned, g), atol=1e-6)
    for flat in (s for s in strands if s.species == 1):
        np.testing.assert_allclose(flat.field, NU / (2.0 * MU_B), atol=1e-6)


def test_strands_end_where_lines_end():
    """The line of an axial S = 1/2 leaves a window in the middle of the turn, and comes back."""
    axial = Species("a", (Spin(0.5, (2.0, 2.4)),))
    sweep = Sweep(NU, (300.0, 350.0), 11)
    strands = path((axial,), sweep, Sample(), great_circles(30))
    for strand in strands:
        np.testing.assert_array_equal(np.diff(strand.place), 1)
        assert strand.field.min() >= 300
    seen = np.concatenate([strand.place for strand in strands])
    expected = np.flatnonzero(field_of(great_circles(30), (2.0, 2.0, 2.4)) >= 300)
    np.testing.assert_array_equal(np.sort(seen), expected)


def test_the_sphere_holds_the_closed_form_and_the_spectrum():
    lines = over_sphere(RHOMBIC, SWEEP, Sample(), polar=30, around=60)
    ((pair, share),) = lines.shares()
    assert pair == (1, 2)
    assert share == pytest.approx(1)
    t, p = np.meshgrid(lines.theta, lines.phi, indexing="ij")
    directions = np.stack([np.sin(t) * np.cos(p), np.sin(t) * np.sin(p), np.cos(t)], axis=-1)
    expected = field_of(directions.reshape(-1, 3)).reshape(t.shape)
    np.testing.assert_allclose(lines.fields_of(pair), expected, atol=1e-6)
    # What all directions absorb at a field is the absorption of the powder there, by another way through the engine.
    at = np.array([297.0, 305.0, 315.0, 325.0, 333.0])
    spectrum = simulate((RHOMBIC,), Sweep(NU, (280.0, 350.0), 701, detect="absorption"))
    area = np.sin(lines.theta)[:, None]
    sums = np.array([float((lines.absorption_at(field, 2.0) * area).sum()) for field in at])
    known = np.interp(at, spectrum.fields, spectrum.signal)
    np.testing.assert_allclose(sums / sums[0], known / known[0], rtol=0.02)


def test_what_absorbs_at_a_turning_point_lies_along_that_axis():
    lines = over_sphere(RHOMBIC, SWEEP, Sample())
    for axis, g in enumerate(G):
        grid = lines.absorption_at(NU / (g * MU_B), 1.0)
        if axis == 1:  # g_y is met all over the sphere
            continue
        i, k = np.unravel_index(np.argmax(grid), grid.shape)
        theta, phi = lines.theta[i], lines.phi[k]
        direction = np.abs([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)])
        assert direction[axis] > 0.97


def test_pictures_have_axes_with_quantity_and_unit():
    strands = path((RHOMBIC,), SWEEP, Sample(), great_circles(10))
    figure = path_figure(strands, ["r"], steps=10, frequency=NU, window=SWEEP.field)
    (axes,) = figure.axes
    assert axes.get_ylabel() == "magnetic field / mT"
    assert [text.get_text() for text in axes.get_xticklabels()] == ["z", "45°", "x", "45°", "y", "45°", "z"]
    angles = np.deg2rad(np.arange(0.0, 181.0, 10.0))
    none = rotation_figure([], angles, ["r"], frequency=NU, window=SWEEP.field)
    assert none.axes[0].get_xlabel() == "angle / deg"
    assert none.axes[0].get_ylim()[0] < 280 < 350 < none.axes[0].get_ylim()[1]
    lines = over_sphere(RHOMBIC, SWEEP, Sample(), polar=6, around=12)
    figure = fields_figure(lines, "r", frequency=NU)
    assert [axes.get_xlabel() for axes in figure.axes if axes.get_xlabel()] == ["magnetic field / mT"]
    figure = absorption_figure([("r", lines, 2.0), ("s", lines, 2.0)], 100.0, frequency=NU)
    assert "r: nothing at this field" in [axes.get_title() for axes in figure.axes]


MODEL = """
[sweep]
frequency = "9.5 GHz"
field = "280, 350 mT"
{sample}
[[species]]
name = "r"
S = "1/2"
g = [2.0, 2.1, 2.3]
[species.width]
gaussian = "2 mT"
"""
CRYSTAL = '[sample]\nform = "crystal"\naxis = [0, 1, 0]\nfrom = [0, 0, 1]\nangles = "0, 45, 90 deg"\n'


@pytest.fixture
def here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "m.toml").write_text(MODEL.format(sample=""), encoding="utf-8")
    (tmp_path / "c.toml").write_text(MODEL.format(sample=CRYSTAL), encoding="utf-8")
    (tmp_path / "s.toml").write_text(MODEL.format(sample='[sample]\nform = "solution"'), encoding="utf-8")
    return tmp_path


def test_the_command_draws(here: Path, capsys: pytest.CaptureFixture[str]):
    argv = ["lines", "m.toml", "-o", "l.csv", "--plot", "p.png", "--map", "m.svg", "--at", "300 mT"]
    assert main(argv) == 0
    assert main(["lines", "c.toml", "-o", "l.csv", "--plot", "c.pdf", "--map", "f.png"]) == 0
    assert capsys.readouterr().out == ""
    assert (here / "p.png").read_bytes().startswith(b"\x89PNG")
    assert (here / "f.png").read_bytes().startswith(b"\x89PNG")
    assert b"<svg" in (here / "m.svg").read_bytes()
    assert (here / "c.pdf").read_bytes().startswith(b"%PDF")


def test_a_job_of_line_positions_shows_its_start(here: Path, capsys: pytest.CaptureFixture[str]):
    (here / "t.csv").write_text("angle_deg,field_mT\n0,295\n90,339\n", encoding="utf-8")
    text = MODEL.format(sample=CRYSTAL.replace('angles = "0, 45, 90 deg"\n', "")).split("[sample]")[1]
    job = f'[[lines]]\nfile = "t.csv"\nfrequency = "9.5 GHz"\n[sample]{text}[fit]\nvary = ["r.g_x"]\n'
    (here / "job.toml").write_text(job, encoding="utf-8")
    assert main(["lines", "job.toml", "--plot", "p.png"]) == 0
    rows = list(csv.DictReader(capsys.readouterr().out.splitlines()))
    assert [float(row["theta_deg"]) for row in rows] == [0, 90]
    assert float(rows[0]["field_mT"]) == pytest.approx(NU / (2.3 * MU_B), abs=1e-6)
    assert (here / "p.png").stat().st_size > 10_000


@pytest.mark.parametrize(
    ("argv", "says"),
    [
        (["m.toml", "--plot", "p.gif"], '--plot: ".gif" is not a format of pictures'),
        (["m.toml", "--map", "p"], "--map: the name has no suffix"),
        (["m.toml", "--at", "3 mT"], "--at: says at which field to draw a map; add --map FILE.png"),
        (["m.toml", "--map", "p.png", "--at", "-3 mT"], "--at: -3 mT; write a positive field"),
        (["s.toml", "--map", "p.png"], "--map: a solution has no directions"),
    ],
)
def test_bad_pictures_are_refused(argv, says, here: Path, capsys: pytest.CaptureFixture[str]):
    assert main(["lines", *argv]) == 2
    err = capsys.readouterr().err
    assert says in err
    assert err.count("\n") == 1
    assert not (here / "p.png").exists()
