"""Results that show themselves in a notebook with their pictures: ``%load_ext spinfit.report.notebook``.

Without it they show plain tables.  Nothing here needs a notebook to be installed: the shell that loads
the extension hands itself over.
"""

from __future__ import annotations

import base64
from collections.abc import Callable
from typing import Any

import numpy as np
from matplotlib.figure import Figure

from spinfit.diagram import Diagram
from spinfit.fitting.outcome import Outcome
from spinfit.ion.quench import QuenchRow
from spinfit.report.diagram_plots import diagram_figure
from spinfit.report.ion_plots import comparison_figure
from spinfit.report.plots import fit_figure, picture_bytes, spectrum_figure
from spinfit.report.positions import positions_figure
from spinfit.spectrum import Spectrum


def _with_picture(figure: Figure, table: str) -> str:
    """Return the picture above the table, the picture at twice a journal column's width."""
    encoded = base64.b64encode(picture_bytes(figure)).decode()
    width = round(2 * 96 * figure.get_size_inches()[0])
    return f'<img alt="" width="{width}" src="data:image/png;base64,{encoded}">{table}'


def outcome_html(outcome: Outcome) -> str:
    """Return measured and fitted curves, or lines against angle, above the table of parameters."""
    if not (outcome.curves or outcome.positions):
        return outcome._repr_html_()
    figure = positions_figure(outcome) if outcome.positions else fit_figure(outcome)
    return _with_picture(figure, outcome._repr_html_())


def spectrum_html(spectrum: Spectrum) -> str:
    """Return the spectrum with its species above a table of numbers; of several angles the first."""
    signal = np.atleast_2d(spectrum.signal)[0]
    parts = {name: np.atleast_2d(part)[0] for name, part in zip(spectrum.report, spectrum.parts, strict=False)}
    order = np.argsort(spectrum.fields, kind="stable")
    parts = {name: part[order] for name, part in parts.items()}
    figure = spectrum_figure(spectrum.fields[order], signal[order], frequency=None, detect="", parts=parts)
    return _with_picture(figure, spectrum._repr_html_())


def diagram_html(diagram: Diagram) -> str:
    """Return the levels with their transitions above the table of these."""
    return _with_picture(diagram_figure(diagram, frequency=None), diagram._repr_html_())


def quench_html(row: QuenchRow) -> str:
    """Return the comparison of g values as a picture above its table."""
    return _with_picture(comparison_figure([row]), row._repr_html_())


SHOWN: dict[type, Callable[[Any], str]] = {
    Outcome: outcome_html,
    Spectrum: spectrum_html,
    Diagram: diagram_html,
    QuenchRow: quench_html,
}
"""What shows itself, and how."""


def load_ipython_extension(shell: Any) -> None:
    """Take the pictures in: called by ``%load_ext``."""
    formatter = shell.display_formatter.formatters["text/html"]
    for kind, shown in SHOWN.items():
        formatter.for_type(kind, shown)


def unload_ipython_extension(shell: Any) -> None:
    """Leave the plain tables: called by ``%unload_ext``."""
    formatter = shell.display_formatter.formatters["text/html"]
    for kind in SHOWN:
        formatter.pop(kind, None)
