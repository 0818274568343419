"""Sliders for the start of a fit, driven without a screen, and values put back into the job file."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest
from fit_jobs import MODEL as RADICAL
from fit_jobs import clean_signal, job, species, trace
from matplotlib.backend_bases import MouseEvent
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from stub_engine import simulate

from spinfit.cli import main
from spinfit.commands import tune
from spinfit.errors import InputError
from spinfit.files.job import read_job
from spinfit.files.toml_values import with_values
from spinfit.fitting.data import Job
from spinfit.fitting.parameters import Binding
from spinfit.report.tuner import PAGE, Tuner
from spinfit.sweep import Sample

JOB = """\
# a job with comments
[[species]]
name = "cu"        # the green one
S = "1/2"
g = [2.05, 2.06,   # two
     2.30]
[[species.nucleus]]
isotope = "63Cu"
A = "-35, -60, -540 MHz"   # from the literature
[[species.nucleus]]
isotope = "14N"
A = "40 MHz"
[[species.nucleus]]
isotope = "14N"
A = "42 MHz"
[species.width]
gaussian = "0.8 mT"

[[species]]
name = "cr"
S = "5/2"
g = 1.98
amount = 0.5
D = "0.30 cm^-1"
rhombicity = 0.1
[species.stevens]
B4_0 = "5.1 MHz"
B4_m3 = "0 MHz"
[species.width]
gaussian = "2 mT"
[species.spread]
D = "300 MHz"

[[trace]]
file = "a.csv"
frequency = "9.4 GHz"
group = "day"

[[trace]]
file = "b.csv"
frequency = "9.4 GHz"
phase = "3 deg"    # guessed
group = "day"

[fit]
vary = ["cu.g"]
"""


@pytest.fixture
def here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    field = np.linspace(300.0, 350.0, 200)
    for name in ("a.csv", "b.csv"):
        np.savetxt(name, np.column_stack([field, np.sin(field)]), delimiter=",", header="field/mT,signal", comments="")
    (tmp_path / "job.toml").write_text(JOB, encoding="utf-8")
    return tmp_path


def bound(found: Job) -> Binding:
    return Binding(found.species, found.sample, (*found.traces, *found.lines), units=found.units)


CHANGES = {
    "cu.g_y": (2.071, "g = [2.05, 2.071,   # two"),
    "cu.g_z": (2.3123456789, "     2.312346]"),
    "cu.63Cu.A_y": (-61.5, 'A = "-35, -61.5, -540 MHz"   # from the literature'),
    "cu.14N_2.A": (43.0, 'A = "43 MHz"'),
    "cu.width.gaussian": (0.9, 'gaussian = "0.9 mT"'),
    "cu.width.lorentzian": (0.2, 'lorentzian = "0.2 mT"'),
    "cu.g_tilt_beta": (20.0, 'g_tilt = "0, 20, 0 deg"'),
    "cr.g": (1.97, "g = 1.97"),
    "cr.amount": (0.25, "amount = 0.25"),
    "cr.D": (0.31, 'D = "0.31 cm^-1"'),
    "cr.rhombicity": (0.2, "rhombicity = 0.2"),
    "cr.B4_m3": (-1.5, 'B4_m3 = "-1.5 MHz"'),
    "cr.spread.D": (250.0, 'D = "250 MHz"'),
    "cr.spread.g": (0.01, "g = 0.01"),
    "cr.spread.correlation_D_E": (0.5, "correlation = {D_E = 0.5}"),
    "b.phase": (-4.0, 'phase = "-4 deg"    # guessed'),
    "a.field_offset": (0.12, 'field_offset = "0.12 mT"'),
}


@pytest.mark.parametrize("name", CHANGES)
def test_one_value_changes_one_line_and_is_read_back(name: str, here: Path):
    value, line = CHANGES[name]
    text, left_out = with_values(JOB, {name: value}, bound(read_job("job.toml")))
    assert left_out == ()
    old, new = JOB.splitlines(), text.splitlines()
    assert line in new
    added = len(new) - len(old)
    assert added in (0, 1)
    assert [row for row in new if row != line][: len(old)] == [row for row in old if added or row in new]
    (here / "job.toml").write_text(text, encoding="utf-8")
    parameter = bound(read_job("job.toml")).parameters[name]
    assert parameter.to_job(parameter.value) == pytest.approx(value, rel=1e-6)


def test_values_that_are_so_already_leave_the_file_alone(here: Path):
    binding = bound(read_job("job.toml"))
    values = {name: one.to_job(one.value) for name, one in binding.parameters.items() if name in CHANGES}
    kept = {name: v for name, v in values.items() if "lorentzian" not in name and "tilt" not in name}
    kept = {n: v for n, v in kept.items() if "spread.g" not in n and "correlation" not in n and "offset" not in n}
    assert with_values(JOB, kept, binding) == (JOB, ())


def test_what_the_file_has_no_key_for_is_named(here: Path):
    binding = bound(read_job("job.toml"))
    text, left_out = with_values(JOB, {"day.field_offset": 0.1, "cu.g_x": 2.04}, binding)
    assert left_out == ("day.field_offset",)
    assert "g = [2.04, 2.06," in text
    with pytest.raises(InputError, match="is not TOML"):
        with_values("a = [", {"cu.g_x": 2.0}, binding)


def test_crystal_fields_are_found_by_their_names(here: Path):
    field = '[species.crystal_field]\norbitals = {"x2-y2" = "12000 cm^-1", xy = "0 cm^-1", xz = "13000 cm^-1", '
    field += 'yz = "13000 cm^-1", z2 = "9000 cm^-1"}\nreduction = 0.8  # k\n'
    text = '[[species]]\nname = "cu"\nion = "Cu2+"\n[species.width]\ngaussian = "1 mT"\n' + field
    text += '[[trace]]\nfile = "a.csv"\nfrequency = "9.4 GHz"\n[fit]\nvary = ["cu.crystal_field.xy"]\n'
    Path("f.toml").write_text(text, encoding="utf-8")
    binding = bound(read_job("f.toml"))
    values = {"cu.crystal_field.xy": 100.0, "cu.crystal_field.reduction": 0.75}
    new, left_out = with_values(text, values, binding)
    assert left_out == ()
    assert tomllib.loads(new)["species"][0]["crystal_field"]["orbitals"]["xy"] == "100 cm^-1"
    assert "reduction = 0.75  # k" in new


# The window


def window(*changes, model=RADICAL, vary=("r.g", "r.width.gaussian"), traces=None, **more) -> tuple[Tuner, list]:
    """A tuner on a canvas without a screen, and the list of what it saved."""
    found = job(*(traces or [trace(clean_signal(species()))]), model=model, vary=vary, **more)
    figure = Figure(figsize=(10, 7.5), dpi=40)
    FigureCanvasAgg(figure).draw_idle = lambda: None  # on a screen drawing waits; here it would be done at every step
    kept: list[dict[str, float]] = []

    def save(values: dict[str, float]) -> str:
        kept.append(values)
        return "saved"

    return Tuner(figure, found, save, simulate=simulate), kept


def click(tuner: Tuner, label: str) -> None:
    """Press and release the mouse on a button."""
    canvas, axes = tuner.figure.canvas, tuner.buttons[label].ax
    x, y = axes.transAxes.transform((0.5, 0.5))
    for name in ("button_press_event", "button_release_event"):
        canvas.callbacks.process(name, MouseEvent(name, canvas, x, y, 1))


def drawn(tuner: Tuner) -> np.ndarray:
    return tuner._lines[0][1].get_ydata()


def test_the_model_is_drawn_over_the_trace():
    tuner, _ = window()
    axes, _, factor = tuner._lines[0]
    measured = next(line for line in axes.lines if line.get_label() == "measured").get_ydata()
    np.testing.assert_allclose(drawn(tuner), measured, atol=1e-6 * np.abs(measured).max())
    assert [slider.label.get_text() for slider in tuner.sliders] == ["r.g_x", "r.g_y", "r.g_z", "r.width.gaussian / mT"]
    tuner.figure.canvas.draw()
    assert axes.get_xlabel() == "magnetic field / mT"
    assert axes.child_axes[0].get_xlabel() == "g at 9.4 GHz"


def test_many_moves_are_one_computation():
    tuner, _ = window()
    before, first = tuner.problem.signals.simulations, drawn(tuner).copy()
    for value in (2.001, 2.003, 2.005):
        tuner.sliders[0].set_val(value)
    assert tuner.problem.signals.simulations == before
    tuner.redraw()
    tuner.redraw()
    assert tuner.problem.signals.simulations == before + 1
    assert np.abs(drawn(tuner) - first).max() > 0.01 * np.abs(first).max()
    assert tuner.values()["r.g_x"] == pytest.approx(2.005)
    assert "chi-square per point" in tuner.status.get_text()


def test_the_other_species_is_not_computed_again():
    two = (species(), species(g=(2.1,), name="s", amount=0.2))
    tuner, _ = window(model=two, vary=("r.g", "s.amount"), traces=[trace(clean_signal(*two))])
    before = tuner.problem.signals.simulations
    tuner.sliders[-1].set_val(0.3)
    tuner.redraw()
    assert tuner.problem.signals.simulations == before


def test_buttons_save_go_back_and_change_the_length():
    tuner, kept = window()
    ends = tuner.sliders[0].valmin, tuner.sliders[0].valmax
    tuner.sliders[0].set_val(2.01)
    click(tuner, "save")
    assert kept == [tuner.values()]
    assert tuner.saved
    assert tuner.status.get_text() == "saved"
    click(tuner, "finer")
    assert tuner.sliders[0].val == pytest.approx(2.01)
    assert tuner.sliders[0].valmax - tuner.sliders[0].valmin == pytest.approx((ends[1] - ends[0]) / 4)
    click(tuner, "coarser")
    click(tuner, "start again")
    assert tuner.values()["r.g_x"] == pytest.approx(2.00)
    assert (tuner.sliders[0].valmin, tuner.sliders[0].valmax) == pytest.approx(ends)
    assert not tuner.saved


def test_sliders_keep_to_limits():
    tuner, _ = window(limits={"r.g_x": (1.999, 2.001)})
    assert (tuner.sliders[0].valmin, tuner.sliders[0].valmax) == pytest.approx((1.999, 2.001))
    assert tuner.sliders[3].valmin >= 0


def test_many_parameters_have_pages():
    model = tuple(species(name=f"s{k}", amount=0.5) for k in range(6))
    vary = tuple(f"s{k}.g" for k in range(6))
    tuner, _ = window(model=model, vary=vary)
    assert len(tuner.sliders) == PAGE
    click(tuner, "next")
    assert [slider.label.get_text() for slider in tuner.sliders] == [f"s{k}.g_{c}" for k in (4, 5) for c in "xyz"]
    tuner.sliders[0].set_val(2.01)
    assert tuner.values()["s4.g_x"] == pytest.approx(2.01)


def test_what_cannot_be_saved_is_said_in_the_window():
    found = job(trace(clean_signal(species())))
    figure = Figure()
    FigureCanvasAgg(figure)

    def save(values):
        raise InputError("was changed meanwhile", "tune the new file", file="x.toml")

    tuner = Tuner(figure, found, save, simulate=simulate)
    tuner.save()
    assert tuner.status.get_text() == "not saved: x.toml: was changed meanwhile; tune the new file"
    assert not tuner.saved


def test_jobs_without_traces_are_refused():
    with pytest.raises(InputError, match="has no trace"):
        Tuner(Figure(), Job(RADICAL, Sample(), (), ("r.g",)), lambda values: "")
    with pytest.raises(InputError, match="nothing is varied"):
        Tuner(Figure(), job(trace(clean_signal(species())), vary=()), lambda values: "", simulate=simulate)


# The command

SMALL = """\
[[species]]
name = "r"
S = "1/2"
g = [2.00, 2.02, 2.06]    # rough
[species.width]
gaussian = "1.5 mT"

[[trace]]
file = "a.csv"
frequency = "9.4 GHz"

[fit]
vary = ["r.g"]
"""


class FakePyplot:
    """A pyplot whose window is Agg, and whose reader does what the test says."""

    def __init__(self, act):
        self.act = act

    def figure(self, **settings):
        self.made = Figure(figsize=settings["figsize"], dpi=40)
        FigureCanvasAgg(self.made).draw_idle = lambda: None
        return self.made

    def show(self):
        self.act(self.made)


def press_save(figure: Figure) -> None:
    (axes,) = [axes for axes in figure.axes if axes.texts and axes.texts[0].get_text() == "save"]
    x, y = axes.transAxes.transform((0.5, 0.5))
    for name in ("button_press_event", "button_release_event"):
        figure.canvas.callbacks.process(name, MouseEvent(name, figure.canvas, x, y, 1))


def drag_first(figure: Figure) -> None:
    """Drag the first slider to three quarters of its length, as a mouse does."""
    axes = figure.axes[[axes.get_label() for axes in figure.axes].index("") + 1]
    x, y = axes.transAxes.transform((0.75, 0.5))
    figure.canvas.callbacks.process("button_press_event", MouseEvent("button_press_event", figure.canvas, x, y, 1))
    figure.canvas.callbacks.process("button_release_event", MouseEvent("button_release_event", figure.canvas, x, y, 1))


def test_the_command_writes_into_the_job(here: Path, monkeypatch, capsys):
    (here / "small.toml").write_text(SMALL, encoding="utf-8")

    def act(figure: Figure) -> None:
        drag_first(figure)
        press_save(figure)

    monkeypatch.setattr(tune, "_pyplot", lambda: FakePyplot(act))
    assert main(["tune", "small.toml"]) == 0
    assert "written to small.toml: r.g_x = 2.02" in capsys.readouterr().out
    # A slider reaches 8 typical steps of 0.005 to either side: three quarters of it is 0.02 above.
    assert (here / "small.toml").read_text(encoding="utf-8") == SMALL.replace("[2.00,", "[2.02,")
    monkeypatch.setattr(tune, "_pyplot", lambda: FakePyplot(lambda figure: None))
    assert main(["tune", "small.toml", "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert said["saved"] is False
    assert said["last"]["r.g_x"] == pytest.approx(2.02)


def test_a_file_that_changed_meanwhile_is_left_alone(here: Path):
    keeper = tune.Keeper("job.toml", read_job("job.toml"))
    (here / "job.toml").write_text(JOB + "# mine\n", encoding="utf-8")
    with pytest.raises(InputError, match="changed meanwhile"):
        keeper.save({"cu.g_x": 2.0})
    assert (here / "job.toml").read_text(encoding="utf-8") == JOB + "# mine\n"


def test_a_machine_without_a_screen_gets_one_line(here: Path):
    (here / "small.toml").write_text(SMALL, encoding="utf-8")
    hidden = {key: value for key, value in os.environ.items() if key not in ("DISPLAY", "WAYLAND_DISPLAY")}
    command = [sys.executable, "-m", "spinfit.cli", "tune", "small.toml"]
    done = subprocess.run(
        command, capture_output=True, text=True, timeout=60, env=hidden | {"MPLBACKEND": "agg"}, check=False
    )
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.count("\n") == 1
    assert "no window can be opened" in done.stderr


def test_a_job_that_guesses_its_start_is_refused(here: Path, capsys):
    (here / "auto.toml").write_text(SMALL.replace("[fit]", '[fit]\nstart = "auto"'), encoding="utf-8")
    assert main(["tune", "auto.toml"]) == 2
    assert 'fit.start: "auto"; write start = "given"' in capsys.readouterr().err
