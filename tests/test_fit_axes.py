"""Axes of tensors from rotations, against the method of the textbooks done here by linear algebra.

In one plane g^2 = a + b cos 2 theta + c sin 2 theta; three planes give all of G = g gT, whose eigenvectors are the
axes and whose eigenvalues are the squares of the principal values (D. S. Schonland, Proc. Phys. Soc. 73, 788
(1959); J. A. Weil, J. R. Bolton, Electron Paramagnetic Resonance, 2nd ed. (2007), chapter 4; from memory).
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from scipy import constants
from scipy.spatial.transform import Rotation

from spinfit.cli import main
from spinfit.files.job import read_job
from spinfit.fitting.lines_outcome import fit_lines
from spinfit.spectrum import simulate

MU_B = constants.value("Bohr magneton in Hz/T") * 1e-9  # MHz/mT
FREQUENCY = 9400.0
G = (2.05, 2.09, 2.31)
TILT = (25.0, 50.0, 70.0)
NOISE = 0.03
PLANES = {"yz": ((1, 0, 0), (0, 1, 0)), "zx": ((0, 1, 0), (0, 0, 1)), "xy": ((0, 0, 1), (1, 0, 0))}
ANGLES = np.arange(0, 180, 20)


def axes_of(tilt) -> np.ndarray:
    """Tensor's axes as columns, by the definition of the conventions page."""
    return Rotation.from_euler("ZYZ", tilt, degrees=True).as_matrix()


def field_directions(plane: str) -> np.ndarray:
    axis, start = (np.array(v, float) for v in PLANES[plane])
    turn = np.radians(ANGLES)[:, None]
    return np.cos(turn) * start + np.sin(turn) * np.cross(axis, start)


def measured_g(plane: str, rng) -> np.ndarray:
    axes = axes_of(TILT)
    tensor = (axes * np.square(G)) @ axes.T
    n = field_directions(plane)
    fields = FREQUENCY / (MU_B * np.sqrt(np.einsum("ai,ij,aj->a", n, tensor, n)))
    return FREQUENCY / (MU_B * (fields + NOISE * rng.normal(size=fields.size)))


def write(folder: Path, planes, seed=3) -> dict[str, np.ndarray]:
    """Write one table a plane and the job; return the measured g."""
    rng = np.random.default_rng(seed)
    found, text = {}, '[sample]\nform = "crystal"\n'
    for plane in planes:
        found[plane] = measured_g(plane, rng)
        rows = "".join(f"{a},{FREQUENCY / MU_B / g:.6f}\n" for a, g in zip(ANGLES, found[plane], strict=True))
        (folder / f"{plane}.csv").write_text("angle_deg,field_mT\n" + rows)
        axis, start = PLANES[plane]
        text += f'[[lines]]\nfile = "{plane}.csv"\nfrequency = "9.4 GHz"\naxis = {list(axis)}\nfrom = {list(start)}\n'
    text += '[[species]]\nname = "cu"\nS = "1/2"\ng = [2.04, 2.10, 2.30]\ng_tilt = "20, 55, 60 deg"\n'
    text += '[fit]\nvary = ["cu.g", "cu.g_tilt"]\n'
    (folder / "job.toml").write_text(text)
    return found


def textbook(measured: dict[str, np.ndarray]) -> np.ndarray:
    """G from linear fits in each plane; diagonal elements that two planes give are averaged."""
    entries: dict[tuple[int, int], list[float]] = {}
    design = np.stack([np.ones(ANGLES.size), np.cos(2 * np.radians(ANGLES)), np.sin(2 * np.radians(ANGLES))], axis=1)
    for plane, g in measured.items():
        a, b, c = np.linalg.lstsq(design, g**2, rcond=None)[0]
        i, j = ("xyz".index(letter) for letter in plane)
        for key, value in (((i, i), a + b), ((j, j), a - b), ((min(i, j), max(i, j)), c)):
            entries.setdefault(key, []).append(value)
    tensor = np.zeros((3, 3))
    for (i, j), values in entries.items():
        tensor[i, j] = tensor[j, i] = np.mean(values)
    return tensor


def test_three_planes_give_the_tensor_of_the_textbook(tmp_path):
    measured = write(tmp_path, PLANES)
    outcome = fit_lines(read_job(tmp_path / "job.toml"), progress=None, simulate=simulate, wide=False)
    squares, vectors = np.linalg.eigh(textbook(measured))
    found = {axis.label: axis for axis in outcome.axes}
    assert [axis.label for axis in outcome.axes] == ["x", "y", "z"]
    true = axes_of(TILT)
    pulls = []
    for k, label in enumerate("xyz"):
        value, axis = outcome.parameters[f"cu.g_{label}"], found[label]
        # The textbook weighs points a little differently: it agrees within the uncertainty.
        assert value.value == pytest.approx(np.sqrt(squares[k]), abs=value.uncertainty)
        assert np.linalg.norm(axis.cosines) == pytest.approx(1, abs=1e-12)
        assert axis.cosines[int(np.argmax(np.abs(axis.cosines)))] > 0
        for vector, reach in ((vectors[:, k], 1.5), (true[:, k], 3.5)):
            vector = vector * np.sign(vector @ axis.cosines)
            assert np.all(np.abs(vector - axis.cosines) < reach * np.array(axis.uncertainty))
        pulls += [(value.value - G[k]) / value.uncertainty_noise]
    assert np.max(np.abs(pulls)) < 3.5
    assert "open_components" not in {note.code for note in outcome.warnings}


def test_uncertainties_of_cosines_are_those_of_repeated_rotations(tmp_path):
    """Three independent turns in 8 repeats: their scatter, of 21 degrees of freedom, is known to 1 part in sqrt(42)."""
    cosines, stated = [], []
    for seed in range(8):
        write(tmp_path, PLANES, seed=100 + seed)
        outcome = fit_lines(read_job(tmp_path / "job.toml"), progress=None, simulate=simulate, wide=False)
        cosines.append([axis.cosines for axis in outcome.axes])
        stated.append([axis.uncertainty for axis in outcome.axes])
    ratio = np.std(cosines, axis=0, ddof=1) / np.mean(stated, axis=0)
    assert np.sqrt(np.mean(ratio**2)) == pytest.approx(1, abs=3 / np.sqrt(42))


def test_one_plane_names_what_it_cannot_know(tmp_path):
    measured = write(tmp_path, ["zx"])
    outcome = fit_lines(read_job(tmp_path / "job.toml"), progress=None, simulate=simulate, wide=False)
    note = next(note for note in outcome.warnings if note.code == "open_components")
    before, after = note.text.split("Known are")
    assert all(f"T_{name}" in before for name in ("yy", "xy", "yz"))
    assert not any(f"T_{name}" in before for name in ("xx", "zz", "xz"))
    tensor = textbook(measured)
    for name, value in (("xx", tensor[0, 0]), ("zz", tensor[2, 2]), ("xz", tensor[0, 2])):
        shown = after.split(f"T_{name} = ")[1].replace(",", " ").split()
        assert float(shown[0]) == pytest.approx(value, abs=1.5 * float(shown[2].rstrip(".")))
    assert all(None in axis.uncertainty for axis in outcome.axes)


def test_the_command_shows_the_cosines(tmp_path, capsys):
    write(tmp_path, PLANES)
    assert main(["fit", str(tmp_path / "job.toml"), "--out", str(tmp_path / "out")]) == 0
    shown = capsys.readouterr().out
    assert "axis, cosines to crystal" in shown
    record = json.loads((tmp_path / "out" / "outcome.json").read_text())
    assert [axis["label"] for axis in record["axes"]] == ["x", "y", "z"]
    assert "cu.width.gaussian = " not in shown


def test_axes_of_a_zero_field_splitting(tmp_path):
    """S = 1 at high field: line pairs stand at +-3/2 n D n / (g muB), to a correction far below the widths here."""
    axes = axes_of((40.0, 35.0, -20.0))
    D, E = 30.0, 6.0  # MHz: second order is D^2 / (h nu) = 0.1 MHz
    tensor = (axes * [-D / 3 + E, -D / 3 - E, 2 * D / 3]) @ axes.T
    rng = np.random.default_rng(5)
    text = '[sample]\nform = "crystal"\n'
    for plane, (axis, start) in PLANES.items():
        n = field_directions(plane)
        half = 1.5 * np.einsum("ai,ij,aj->a", n, tensor, n)
        fields = (FREQUENCY + np.array([[1.0], [-1.0]]) * half) / (MU_B * 2.0)
        fields = fields + 0.002 * rng.normal(size=fields.shape)
        rows = "".join(f"{a},{b:.6f}\n" for row in fields for a, b in zip(ANGLES, row, strict=True))
        (tmp_path / f"{plane}.csv").write_text("angle_deg,field_mT\n" + rows)
        text += f'[[lines]]\nfile = "{plane}.csv"\nfrequency = "9.4 GHz"\naxis = {list(axis)}\nfrom = {list(start)}\n'
    text += '[[species]]\nname = "t"\nS = "1"\ng = 2.0\nD = "28 MHz"\nE = "5 MHz"\nD_tilt = "35, 40, -10 deg"\n'
    text += '[fit]\nvary = ["t.g", "t.D", "t.E", "t.D_tilt"]\n'
    (tmp_path / "job.toml").write_text(text)
    outcome = fit_lines(read_job(tmp_path / "job.toml"), progress=None, simulate=simulate, wide=False)
    assert [(axis.tensor, axis.label) for axis in outcome.axes] == [("t.D", label) for label in "xyz"]
    for k, axis in enumerate(outcome.axes):
        true = axes[:, k] * np.sign(axes[:, k] @ axis.cosines)
        assert np.all(np.abs(true - axis.cosines) < 4 * np.array(axis.uncertainty) + 1e-2)
    assert outcome.parameters["t.D"].value == pytest.approx(D, abs=0.2)
