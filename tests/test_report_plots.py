"""Pictures: axes with quantity and unit, g ticks where they belong, colours that everybody tells apart."""

from __future__ import annotations

import re
import subprocess
import sys

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import to_rgb
from outcomes import curves, outcome
from scipy import constants

from spinfit.fitting.turning import analyse
from spinfit.report import style
from spinfit.report.page import style_sheet
from spinfit.report.plots import angles_figure, fit_figure, g_ticks, picture_bytes, spectrum_figure, trace_figure

MU_B = constants.physical_constants["Bohr magneton"][0]


def panels(figure):
    return [axes for sub in (figure.subfigs or [figure]) for axes in sub.axes]


@pytest.mark.parametrize(("species", "count"), [(1, 2), (2, 3)])
def test_a_fit_has_its_panels_and_every_axis_its_label(species, count):
    figure = fit_figure(outcome(curves(species=species)))
    axes = panels(figure)
    assert len(axes) == count
    assert axes[0].get_ylabel() == "dχ″/dB\n/ $10^{3}$ arb. units"
    assert axes[-1].get_ylabel() == "residual\n/ σ"
    assert axes[-1].get_xlabel() == "magnetic field / mT"
    assert axes[0].child_axes[0].get_xlabel() == "g at 9.4321 GHz"
    assert figure.get_size_inches()[0] == pytest.approx(86 / 25.4)  # one column of a journal: 86 mm, common practice
    labels = [line.get_label() for line in axes[0].lines]
    assert "measured" in labels
    assert "fitted" in labels


def test_what_is_drawn_is_what_was_found():
    found = curves()
    axes = panels(fit_figure(outcome(found)))
    fitted = next(line for line in axes[0].lines if line.get_label() == "fitted")
    np.testing.assert_allclose(fitted.get_ydata() * 1e3, found.fitted)
    used = next(line for line in axes[0].lines if line.get_label() == "measured").get_ydata()
    np.testing.assert_array_equal(np.isfinite(used), found.used)
    residual = axes[-1].lines[-1].get_ydata()
    np.testing.assert_allclose(residual[found.used], found.residual[found.used] / found.noise)


@pytest.mark.parametrize(("window", "frequency"), [((1204.0, 1226.0), 34079.0), ((12101.0, 12147.5), 340000.0)])
def test_no_text_overlaps_on_the_field_axis(window, frequency):
    """At high frequencies the labels are long: 1212.5, or 12112.5."""
    base = curves()
    field = np.linspace(*window, base.field.size)
    figure = fit_figure(outcome(type(base)(**{**vars(base), "field": field, "frequency": frequency})))
    figure.set_dpi(style.DOTS_PER_INCH)
    with style.styled():
        FigureCanvasAgg(figure).draw()
    for axes in (panels(figure)[-1], panels(figure)[0].child_axes[0]):
        low, high = axes.get_xlim()
        shown = [text for text in axes.get_xticklabels() if low <= text.get_position()[0] <= high]
        inside = sorted((box.x0, box.x1) for box in (text.get_window_extent() for text in shown))
        assert len(inside) >= 3
        assert all(first[1] < second[0] for first, second in zip(inside, inside[1:], strict=False))


def test_pictures_are_png_svg_pdf_and_the_same_every_time():
    for kind, head in (("png", b"\x89PNG"), ("svg", b"<?xml"), ("pdf", b"%PDF")):
        first, second = (picture_bytes(fit_figure(outcome()), kind) for _ in range(2))
        assert first.startswith(head)
        assert first == second


def test_several_traces_stand_side_by_side():
    figure = fit_figure(outcome(*[curves(f"t{k}", species=1, points=60) for k in range(5)]))
    assert len(figure.subfigs) == 6
    assert sum(len(sub.axes) for sub in figure.subfigs) == 10
    many = fit_figure(outcome(*[curves(f"t{k}", species=1, points=30) for k in range(20)]))
    assert len(many.subfigs) == 12


@settings(derandomize=True, deadline=None)
@given(st.floats(0, 1500), st.floats(1, 1500), st.floats(1000, 250000))
def test_g_ticks_are_inside_and_apart(first, width, frequency):
    last = first + width
    ticks = g_ticks(first, last, frequency)
    fields = np.array([constants.h * frequency * 1e6 / (g * MU_B) * 1e3 for g in ticks])
    assert np.all(fields >= first - 1e-6 * last)
    assert np.all(fields <= last * (1 + 1e-6))
    assert len(ticks) <= 12
    assert np.all(np.diff(fields) > 0.04 * width)


def test_g_ticks_where_everybody_looks():
    assert 2.0 in g_ticks(100, 600, 9500.0)
    assert 4.0 in g_ticks(100, 600, 9500.0)
    assert g_ticks(330, 340, 9432.0)
    assert g_ticks(-10, 0, 9500.0) == []


def test_spectrum_trace_and_angles():
    found = curves()
    figure = spectrum_figure(found.field, found.fitted, frequency=9432.1, parts=found.parts)
    assert [axes.get_xlabel() for axes in figure.axes] == ["", "magnetic field / mT"]
    figure = trace_figure(found.field, found.measured, analyse(found.field, found.measured), frequency=None)
    assert len(figure.axes[0].child_axes) == 0  # no frequency, no g
    assert figure.axes[0].get_xlabel() == "magnetic field / mT"
    figure = angles_figure(found.field, [found.fitted] * 3, [0.0, 0.5, 1.0], frequency=9432.1)
    assert [t.get_text() for t in figure.axes[0].get_yticklabels()] == ["0", "28.65", "57.3"]
    assert spectrum_figure(found.field, np.zeros_like(found.field), frequency=9432.1)


# Colour vision: simulation matrices for complete red-, green- and blue-blindness, linear RGB
# (G. M. Machado, M. M. Oliveira, L. A. F. Fernandes, IEEE Trans. Vis. Comput. Graph. 15, 1291 (2009), from
# memory: that each row sums to 1, so that grey stays grey, is checked).
SIMULATED = {
    "normal": np.eye(3),
    "red-blind": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "green-blind": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
    "blue-blind": np.array(
        [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]]
    ),
}


def lab(linear):
    """CIE L*a*b* of linear sRGB, white D65 (IEC 61966-2-1 and CIE 15)."""
    xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]) @ linear
    x, y, z = xyz / np.array([0.9505, 1.0, 1.089])
    f = [t ** (1 / 3) if t > (6 / 29) ** 3 else t / (3 * (6 / 29) ** 2) + 4 / 29 for t in (x, y, z)]
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def seen(colour, matrix):
    rgb = np.array(to_rgb(colour))
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    return lab(np.clip(matrix @ linear, 0, 1))


@pytest.mark.parametrize("eyes", SIMULATED)
def test_colours_are_told_apart(eyes):
    matrix = SIMULATED[eyes]
    np.testing.assert_allclose(matrix.sum(axis=1), 1, atol=1e-5)
    dark = style.ON_DARK
    lit = (dark["measured"], dark["fitted"], dark["unused"])
    for group in ((style.MEASURED, style.FITTED, style.UNUSED), style.PARTS, lit, style.PARTS_ON_DARK):
        points = [seen(colour, matrix) for colour in group]
        distances = [np.linalg.norm(a - b) for i, a in enumerate(points) for b in points[:i]]
        assert min(distances) > 30  # just noticeable is about 2.3


def contrast(one, other):
    """Ratio of luminances (Web Content Accessibility Guidelines 2.1, W3C 2018)."""
    light = []
    for colour in (one, other):
        rgb = np.array(to_rgb(colour))
        linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
        light.append(float(linear @ [0.2126, 0.7152, 0.0722]) + 0.05)
    return max(light) / min(light)


def variables(sheet, start):
    block = sheet[sheet.index(start) :].partition("}")[0]
    return dict(re.findall(r"--([\w-]+): (#\w+)", block))


@pytest.mark.parametrize("theme", [":root", "(prefers-color-scheme: dark)"])
def test_pages_can_be_read_light_and_dark(theme):
    """Text 4.5 to 1 (success criterion 1.4.3), curves 3 to 1 (1.4.11), against what they stand on."""
    colours = variables(style_sheet(), theme)
    for text in ("ink", "quiet", "mark"):
        for ground in ("paper", "tint"):
            assert contrast(colours[text], colours[ground]) > 4.5, (text, ground)
    for curve in ("measured", "fitted", "guide"):
        assert contrast(colours[curve], colours["paper"]) > 3, curve
    assert contrast(colours["on-strong"], colours["negative"]) > 4.5


def test_no_pyplot_is_needed():
    script = "import sys, spinfit.report.plots; sys.stdout.write(str('matplotlib.pyplot' in sys.modules))"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=60, check=True)
    assert done.stdout == "False"
