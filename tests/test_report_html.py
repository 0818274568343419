"""The page on a fit: whole, safe, and holding what a reader looks for."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import Phase, given, settings
from hypothesis import strategies as st
from outcomes import curves, outcome
from pages import BROWSER, Page, browse
from scipy import constants

from spinfit.fitting.data import Job, Trace
from spinfit.fitting.outcome import Note, PositionTable, Quality, Value
from spinfit.fitting.resample import Bootstrap, Profile
from spinfit.fitting.sampling import Posterior
from spinfit.ion.defaults import default_model
from spinfit.ion.species_field import species_field, spin_of
from spinfit.report.beside import setting_rows
from spinfit.report.html import report_text
from spinfit.report.svg import Panel, span, thinned, tick_texts, ticks
from spinfit.report.svg_figures import histogram_drawing
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.sweep import Sample

MU_B = constants.physical_constants["Bohr magneton in Hz/T"][0] * 1e-9  # MHz/mT
EVIL = "</style></script><script>alert(1)</script>\"'&<img src=x onerror=alert(1)>"
needs_browser = pytest.mark.skipif(BROWSER is None, reason="no chromium")


def job(*species: Species, form: str = "powder") -> Job:
    field = np.linspace(260.0, 360.0, 11)
    trace = Trace("kiln_07", field, field * 0.0, np.ones(11, bool), 9432.1)
    return Job(tuple(species), Sample(form=form), (trace,), ())


def iron(D=13800.0, rhombicity=0.4) -> Species:
    return Species("fe", (Spin(2.5, (2.0, 2.01, 2.02), D, rhombicity=rhombicity),), width=Width(gaussian=1.0))


def profiled() -> Profile:
    x = np.linspace(2.03, 2.05, 9)
    return Profile("cu.g_perp", "", x, ((x - 2.04) / 0.003) ** 2, ((2.037, 2.043), (2.034, None)))


def refitted() -> Bootstrap:
    draws = np.random.default_rng(3).normal([2.04, -540.0], [0.001, 2.0], (50, 2))
    return Bootstrap(("cu.g_perp", "cu.63Cu.A_par"), ("", "MHz"), draws, 1)


def sampled() -> Posterior:
    draws = np.random.default_rng(4).normal(size=(400, 2)) @ np.array([[1.0, 0.9], [0.0, 0.4]])
    draws = draws * [0.0001, 2.3] + [2.04123, -540.3]
    return Posterior(("cu.g_perp", "cu.63Cu.A_par"), ("", "MHz"), draws, 40, 20, 20, np.array([3.0, 4.0]), 0.4, 1.0)


def lines(name="turned") -> PositionTable:
    angle = np.deg2rad(np.arange(0.0, 181.0, 20.0))[:, None]
    fitted = 330 + 20 * np.cos(2 * angle[:, 0])
    drawn = np.column_stack([angle[:, 0], fitted, np.ones(10)])
    one = np.ones(10, dtype=int)
    used = np.arange(10) != 4
    return PositionTable(name, 9432.1, angle, fitted + 0.05, fitted, fitted * 0 + 0.05, fitted * 0 + 0.1, one, 2 * one,
                         used, drawn)  # fmt: skip


def everything(name="kiln-07", **changes) -> str:
    named = Species(
        "cu", (Spin(0.5, (2.05, 2.25)),), (Nucleus("63Cu", A=(-30.0, -500.0)),), width=Width(1.0), ion="Cu2+"
    )
    found = outcome(name=name, positions=(lines(),), **changes)
    return report_text(found, job=job(named), profiles=(profiled(),), resampled=refitted(), posterior=sampled())


def test_a_page_is_whole_loads_nothing_and_says_everything():
    page = Page(everything())
    page.check()
    for word in ("draws", "68 %", "kiln-07", "2.0412(3)", "-540(2)", "held fixed", "lower limit of 0.8 mT",
                 'file = "kiln-07.csv"',
                 "g at 9.4321 GHz", "magnetic field / mT", "residual", "rise of χ²", "refits", "angle / deg",
                 "cu.g_perp and cu.63Cu.A_par: -0.950", "0.909(10)", "sha256"):  # fmt: skip
        assert word in page.text, word
    assert page.seen.count("script") == 2


def test_uncertainties_are_shown_with_what_they_are_made_of():
    made = {"cu.g_perp": {"noise": 0.0001, "field axis": 0.0003, "frequency": 1e-9}}
    page = report_text(outcome(budget=made))
    row = re.search(r"<tr><td class=\"l\">cu.g_perp</td>.*?</tr>", page)[0]
    assert "<td>0.00010</td><td></td><td>0.00030</td><td></td>" in row
    # Shares of variance: 1 to 9 of 130 units.
    assert [float(width) for width in re.findall(r'width="([\d.]+)"', row)] == pytest.approx([13, 0, 117, 0], abs=0.1)
    derived = {"cu.g_z": Value(2.3, 0.005, 0.003, 0.004, derived=True)}
    assert "<td>0.0030</td><td></td><td>0.0040 (both)</td>" in report_text(outcome(parameters=derived))


def test_histograms_stand_beside_what_the_fit_expects():
    """All draws are in the histogram; the bell holds as many under it."""
    values = np.random.default_rng(1).normal(5.0, 0.5, 2000)
    picture = histogram_drawing("x / mT", values, (4.5, 5.5), (5.0, 0.5), "draws")
    (y,) = re.findall(r'data-y="([^"]*)"', picture)
    top, height = float(y.split()[1]), 128.0
    (steps,) = re.findall(r'class="part-0" d="([^"]*)"', picture)
    points = np.array([[float(v) for v in word.split(" ")] for word in re.split("[ML]", steps) if word])
    counts = (height - points[1:-1:2, 1]) / height * top
    assert counts.sum() == pytest.approx(2000, rel=1e-3)
    (bell,) = re.findall(r'class="fitted thin" d="([^"]*)"', picture)
    points = np.array([[float(v) for v in word.split(" ")] for word in re.split("[ML]", bell) if word])
    area = np.trapezoid((height - points[:, 1]) / height * top, points[:, 0])
    width = (points[-1, 0] - points[0, 0]) / 8 / 0.5  # units of the drawing to one of x: 8 deviations of 0.5 are drawn
    step = np.ptp(values) / 40
    assert area / width / step == pytest.approx(2000, rel=0.01)
    assert "fitted" not in histogram_drawing("x", values, (4.5, 5.5), (5.0, None), "draws")


def test_warnings_come_before_the_picture():
    page = everything()
    assert page.index("A warning") < page.index('<svg class="drawing"') < page.index("<h2>Parameters")
    assert "warnings" not in re.sub(r"<style>.*?</style>", "", report_text(outcome(warnings=())), flags=re.DOTALL)


def test_what_a_fit_could_not_do_is_said():
    page = report_text(outcome(quality=Quality(False, True, 7.0, 1.0, 9, 2, 1.0, 1.0), message="lost its way"))
    assert "Not converged: lost its way" in page
    page = report_text(outcome(quality=Quality(False, False, 7.0, 1.0, 9, 2, 1.0, 1.0)))
    assert "Stopped before the end" in page


def test_texts_from_users_are_escaped():
    page = Page(
        report_text(
            outcome(
                curves(EVIL),
                name=EVIL,
                parameters={EVIL: Value(1.0, 0.1, unit=EVIL, varied=True), EVIL + "2": Value(1.0, unit=EVIL)},
                fractions={EVIL: Value(0.5), "b": Value(0.5)},
                correlation_names=(EVIL, "b"),
                warnings=(Note("at_limit", EVIL), Note(EVIL, EVIL)),
                provenance={"job": EVIL, EVIL: EVIL},
                budget={EVIL: {"noise": 0.1, EVIL: 1.0}},
                positions=(lines(EVIL),),
                message=EVIL,
                quality=Quality(False, True, 1.0, 1.0, 1, 1, 1.0, 1.0),
            ),
            profiles=(replace(profiled(), name=EVIL, unit=EVIL),),
        )
    )
    page.check()
    assert page.seen.count("script") == 2
    assert "img" not in page.seen
    assert page.text.count("alert(1)") >= 10


texts = st.text(max_size=30) | st.sampled_from([EVIL, "<!--", "]]>", "&amp;", "\x00", "\u2028", "a" * 90])
floats = st.floats(-1e30, 1e30) | st.sampled_from([float("nan"), float("inf"), float("-inf"), 0.0])
numbers = st.none() | floats


@settings(derandomize=True, deadline=None, max_examples=40, phases=[Phase.explicit, Phase.generate])
@given(st.data())
def test_no_text_and_no_number_breaks_a_page(data):
    """Whatever names, units, warnings and values are, the page is whole and runs nothing of theirs."""

    def values(count):
        made = [
            Value(data.draw(floats), *(data.draw(numbers) for _ in range(3)), unit=data.draw(texts), varied=True,
                  start=data.draw(numbers))
            for _ in range(count)
        ]  # fmt: skip
        return dict(zip(data.draw(st.lists(texts, min_size=count, max_size=count, unique=True)), made, strict=True))

    parameters = values(3)
    base = curves(data.draw(texts), points=40)
    bent = data.draw(st.lists(floats, min_size=40, max_size=40))
    found = outcome(
        replace(base, measured=np.array(bent), noise=data.draw(floats), parts={data.draw(texts): np.array(bent)}),
        name=data.draw(texts),
        parameters=parameters,
        fractions=values(2),
        correlation_names=tuple(parameters)[:2],
        correlation_matrix=np.array(data.draw(st.lists(floats, min_size=4, max_size=4))).reshape(2, 2),
        warnings=tuple(Note(data.draw(texts), data.draw(texts)) for _ in range(2)),
        budget={name: {"noise": data.draw(floats)} for name in parameters},
        provenance={"job": data.draw(texts)},
    )
    page = Page(report_text(found))
    page.check()
    assert page.seen.count("script") == 2
    assert "NaN" not in page.source
    assert "inf" not in re.sub(r"[^\d ML.\-a-z]", "", "".join(v for k, v in page.attributes if k == "d"))


def test_curves_hold_what_was_found():
    """The fitted curve's path, carried back to field and signal, is the fitted curve."""
    found = curves(species=1)
    page = report_text(outcome(found))
    (path,) = re.findall(r'<path class="fitted" data-curve="fitted" d="([^"]*)"', page)
    points = np.array([[float(v) for v in word.split(" ")] for word in re.split("[ML]", path) if word])
    left, width, height = 84.0, 662.0, 280.0
    assert f'width="{width:g}" height="{height:g}"' in page
    low, high = span(found.measured / 1e3, found.fitted / 1e3)
    x = found.field[0] + points[:, 0] / width * np.ptp(found.field)
    y = high - points[:, 1] / height * (high - low)
    assert left + width < 760
    np.testing.assert_allclose(x, found.field, atol=0.01 * np.ptp(found.field) / width)
    np.testing.assert_allclose(y, found.fitted / 1e3, atol=0.01 * (high - low) / height)


def test_thinning_keeps_extremes_and_gaps():
    x = np.arange(100_000.0)
    y = np.sin(x / 7000)
    y[50_000] = 9.0
    y[70_000:70_500] = np.nan
    at, values = thinned(x, y)
    assert len(at) <= 5 * 1600
    assert np.all(np.diff(at) > 0)
    assert 50_000 in at
    assert np.isnan(values[(at > 70_000) & (at < 70_500)]).any()
    few = thinned(x[:50], y[:50])
    np.testing.assert_array_equal(few[0], x[:50])


def test_ticks_are_round_inside_and_written_alike():
    assert ticks(0.0, 1.0) == pytest.approx([0, 0.2, 0.4, 0.6, 0.8, 1.0])
    assert ticks(1.0, 1.0) == []
    assert ticks(float("nan"), 1.0) == []
    assert tick_texts([0.0, 2.5, 5.0]) == ["0", "2.5", "5.0"]
    assert tick_texts([-1e7, 1e7]) == ["-1e+07", "1e+07"]
    assert tick_texts([-0.1, 0.1]) == ["−0.1", "0.1"]
    assert span([np.nan]) == (-1.0, 1.0)
    assert span([3.0, 3.0])[0] < 3.0 < span([3.0, 3.0])[1]


def test_nothing_finite_is_no_failure():
    panel = Panel(0, 0, 10, 10, (0, 1), span([np.nan]))
    panel.line([0.0, 1.0], [np.nan, np.nan], "fitted")
    panel.dots([0.0], [np.nan], "fitted")
    assert panel.shapes == []
    bad = replace(curves(), fitted=np.full(801, np.nan), residual=np.full(801, np.nan))
    Page(report_text(outcome(bad))).check()


def test_measured_g_is_set_beside_the_free_ion():
    page = Page(everything())
    # Cu2+, 3d9, 2D5/2: g_J = 1 + (g_e - 1)/5 with g_e = 2.00232, by Landé's formula.
    assert "1.2005" in page.text
    assert "2D5/2" in page.text
    assert "Cu2+: crystal field" in page.text
    held = outcome(parameters={"cu.g_perp": Value(2.05), "cu.g_par": Value(2.25)})
    named = Species("cu", (Spin(0.5, (2.05, 2.25)),), width=Width(1.0), ion="Cu2+")
    assert "its g was not fitted freely" in Page(report_text(held, job=job(named))).text
    field = species_field(default_model("Cu2+"))
    modelled = Species("cu", (spin_of(field),), width=Width(1.0), ion="Cu2+", crystal_field=field)
    derived = outcome(parameters={"cu.g_x": Value(2.05, 0.1, 0.1, 0.0, derived=True)})
    text = Page(report_text(derived, job=job(modelled))).text
    assert "its g follows from the crystal field" in text
    assert "not fitted freely" not in text
    plain = Species("cu", (Spin(0.5, (2.05, 2.25)),), width=Width(1.0))
    assert "Free ion" not in report_text(held, job=job(plain))


def test_settings_of_a_rhombic_tensor_are_one_tensor():
    """Every row's D, E and g, in its own axes, are the same numbers: diag(-D/3 + E, -D/3 - E, 2D/3)."""
    parameters = {"fe.D": Value(13800.0, 1.0, unit="MHz", varied=True)}
    ((name, rows),) = setting_rows(job(iron()), outcome(parameters=parameters))
    assert name == "fe"
    assert len(rows) == 6
    sets = set()
    for axes, D, E, _, ratio, g, _ in rows:
        D, E = float(D), float(E)
        assert float(ratio) == pytest.approx(E / D, abs=6e-5)
        values = dict(zip(axes.split(", "), [-D / 3 + E, -D / 3 - E, 2 * D / 3], strict=True))
        gs = dict(zip(axes.split(", "), map(float, g.split(", ")), strict=True))
        sets.add(tuple(round(values[axis], -1) for axis in "xyz") + tuple(gs[axis] for axis in "xyz"))
    assert len(sets) == 1
    assert sum("usual" in row[-1] for row in rows) == 1
    (usual,) = [row for row in rows if "usual" in row[-1]]
    assert 0 <= float(usual[4]) <= 1 / 3


@pytest.mark.parametrize("other", [job(iron(rhombicity=0.0)), job(iron(), form="crystal"), job(iron(D=0.0))])
def test_settings_are_listed_only_where_they_are_equal(other):
    assert setting_rows(other, outcome(parameters={})) == ()


# In a browser


ACT = """
const figure = document.querySelector("figure.fit"), drawing = figure.querySelector("svg.drawing");
const key = [...figure.querySelectorAll(".key")].find((one) => one.dataset.curve === "fitted");
key.click();
document.body.dataset.hidden = figure.querySelectorAll("path.fitted.hidden").length;
key.click();
document.body.dataset.again = figure.querySelectorAll("path.fitted.hidden").length;
const box = drawing.querySelector("rect.frame").getBoundingClientRect();
drawing.setPointerCapture = () => {};
const point = (type, across) => drawing.dispatchEvent(new PointerEvent(type, {
  bubbles: true, pointerType: "mouse", button: 0, clientX: box.left + across * box.width, clientY: box.top + 9 }));
const texts = (axis) => [...drawing.querySelectorAll(`g.ticks[data-axis="${axis}"] text`)].map((t) => t.textContent);
const below = () => texts("x").join(" "), above = () => texts("top").join(" ");
document.body.dataset.before = below();
point("pointermove", 0.75); document.body.dataset.under = figure.querySelector(".hint").textContent;
point("pointerdown", 0.5); point("pointermove", 0.6); point("pointerup", 0.7);
document.body.dataset.after = below();
document.body.dataset.g = above();
const boxes = [...drawing.querySelectorAll("svg.curves")].map((one) => one.getAttribute("viewBox"));
document.body.dataset.views = boxes.map((box) => box.split(" ")[2]).join(" ");
figure.querySelector("button").click();
document.body.dataset.whole = below();
"""


@needs_browser
@pytest.mark.parametrize("width", [1200, 420])
def test_a_browser_finds_no_fault(width, tmp_path):
    """No complaint on the console, under the page's own policy; nothing wider than the window."""
    page = tmp_path / "report.html"
    page.write_text(everything(name=EVIL), encoding="utf-8")
    shown = browse(page, width=width)
    assert "drag over a part" in shown  # the page's script has run
    browse(page, width=width, act=" ")


@needs_browser
def test_curves_are_hidden_and_magnified(tmp_path):
    page = tmp_path / "report.html"
    page.write_text(everything(), encoding="utf-8")
    shown = browse(page, act=ACT)
    got = dict(re.findall(r'data-(\w+)="([^"]*)"', re.search(r"<body[^>]*>", shown)[0]))
    assert (got["hidden"], got["again"]) == ("1", "0")
    field, g = map(float, re.fullmatch(r"([\d.]+) mT, g ([\d.]+)", got["under"]).groups())
    assert field == pytest.approx(335.0, abs=0.2)  # three quarters of the way
    assert g == pytest.approx(9432.1 / (MU_B * field), rel=1e-3)
    assert got["before"] == got["whole"] == "260 280 300 320 340 360"
    # From the middle of 260 to 360 mT on a fifth of the sweep: 310 to 330 mT.
    after = [float(text) for text in got["after"].split()]
    assert min(after) >= 309.9
    assert max(after) <= 330.1
    assert len(after) >= 4
    # h nu / mu_B at 9.4321 GHz is 673.9 mT: g from 2.042 to 2.174.
    assert all(2.04 <= float(text) <= 2.18 for text in got["g"].split())
    assert len(got["g"].split()) >= 3
    widths = [float(text) for text in got["views"].split()]
    assert widths == pytest.approx([0.2 * 662] * len(widths), rel=0.01)


@needs_browser
def test_the_check_in_the_browser_sees_what_a_policy_refuses(tmp_path):
    """The same page with a stranger's script in it: the policy stops it, and the check says so."""
    page = tmp_path / "report.html"
    broken = everything().replace("</main>", "<script>document.title = 'taken'</script></main>")
    page.write_text(broken, encoding="utf-8")
    with pytest.raises(AssertionError, match="Content Security Policy"):
        browse(page)
