"""Results show themselves in a notebook: plain tables by themselves, pictures with the extension."""

from __future__ import annotations

import base64
import re
from pathlib import Path

import numpy as np
import pytest
from outcomes import curves, outcome
from pages import Page
from test_docs import blocks

from spinfit.diagram import diagram
from spinfit.fitting.outcome import Note, Outcome, Quality, Value
from spinfit.hamiltonian import systems
from spinfit.ion.quench import parse_measured, quench_row
from spinfit.markup import html_table
from spinfit.report.notebook import SHOWN, load_ipython_extension, unload_ipython_extension
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

ROOT = Path(__file__).resolve().parents[1]
EVIL = "<script>alert(1)</script>\"'&"
ONE = Species("r", (Spin(0.5, (2.0, 2.1)),), width=Width(gaussian=2.0))
SWEEP = Sweep(9500.0, (310.0, 350.0), 101)


def shown() -> list:
    return [
        outcome(),
        simulate((ONE, Species("s", (Spin(0.5, (2.05,)),), width=Width(gaussian=1.0))), SWEEP),
        simulate(ONE, SWEEP, Sample("crystal", angles=(0.0, 0.5))),
        diagram(systems(ONE)[0], (0, 0, 1), 9500.0, (0.0, 400.0), points=5),
        quench_row("Cu2+", measured=parse_measured("2.05, 2.06, 2.33(1)")),
    ]


@pytest.mark.parametrize("result", shown(), ids=lambda one: type(one).__name__)
def test_results_show_themselves(result):
    page = Page(result._repr_html_())
    assert page.open == []
    assert "table" in page.seen
    pictured = Page(SHOWN[type(result)](result))
    assert pictured.open == []
    (source,) = pictured.loads
    assert base64.b64decode(source.removeprefix("data:image/png;base64,")).startswith(b"\x89PNG")
    assert pictured.text == page.text


def test_tables_hold_the_numbers():
    text = Page(outcome()._repr_html_()).text
    for word in ("cu.g_perp", "2.04123", "0.00032", "MHz", "converged, reduced chi-square 1.02", "limit of 0.8 mT"):
        assert word in text
    assert "radical.g " not in text  # it was held
    spectrum = simulate(ONE, SWEEP)
    rows = re.findall(r"<tr><td>([^<]*)</td><td>([^<]*)</td>", spectrum._repr_html_())
    assert len(rows) == 10
    np.testing.assert_allclose(
        [float(b) for b, _ in rows], spectrum.fields[np.linspace(0, 100, 10).round().astype(int)]
    )
    assert float(rows[4][1]) == pytest.approx(spectrum.signal[44], rel=1e-3)
    row = Page(quench_row("Cu2+", measured=parse_measured("2.05, 2.33(1)"))._repr_html_()).text
    assert "1.2005" in row  # Landé: 1 + (g_e - 1)/5
    assert "2.33 ± 0.01" in row
    assert "2D5/2" in row


def test_texts_are_escaped():
    for text in (
        html_table([EVIL], [[EVIL], [None]], caption=EVIL),
        outcome(name=EVIL, parameters={EVIL: Value(1.0, varied=True)}, warnings=(Note("x", EVIL),))._repr_html_(),
    ):
        page = Page(text)
        assert page.open == []
        assert "script" not in page.seen


def test_an_empty_outcome_is_no_failure():
    empty = Outcome("x", {}, Quality(False, False, float("nan"), 0.0, 0, 0, 0.0, 0.0), (), np.zeros((0, 0)), (), ())
    assert "NOT converged" in SHOWN[Outcome](empty)


class Shell:
    """What the extension asks of a notebook's shell."""

    class display_formatter:
        class Formatter(dict):
            def for_type(self, kind, shown):
                self[kind] = shown

        formatters = {"text/html": Formatter()}


def test_the_extension_puts_pictures_in_and_takes_them_out():
    formatter = Shell.display_formatter.formatters["text/html"]
    load_ipython_extension(Shell)
    assert formatter == SHOWN
    assert "<img" in formatter[Outcome](outcome(curves("a")))
    unload_ipython_extension(Shell)
    unload_ipython_extension(Shell)
    assert formatter == {}


def test_the_page_on_notebooks_runs(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.chdir(ROOT)
    (code,) = blocks(ROOT / "docs" / "notebook.md", "python")
    names: dict = {}
    exec(compile(code, "notebook.md", "exec"), names)
    assert "varnish.g_z" in names["outcome"]._repr_html_()
