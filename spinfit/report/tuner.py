"""Sliders for the start of a fit: trace and model in one window, redrawn as the values move.

The window is matplotlib's; whether it stands on a screen is the caller's choice of canvas.  One
redraw is one evaluation of the model, however many sliders moved since the last one.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
from matplotlib.figure import Figure
from matplotlib.widgets import Button, Slider
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.fitting.data import Job
from spinfit.fitting.residuals import Point, Problem, full_view
from spinfit.fitting.signals import Simulate
from spinfit.report import style
from spinfit.report.plots import FIELD_LABEL, add_g_axis, power_of_unit
from spinfit.spectrum import simulate as _engine

Array = NDArray[np.float64]

COARSE = 3e-3
"""Tolerance of the redrawn spectra: finer than an eye sees."""
PAUSE = 80
"""Milliseconds that the sliders must rest before the model is computed."""
REACH = 8.0
"""Half the length of a slider at first, in typical steps of its parameter."""
PAGE = 12
"""Sliders shown at a time."""
PANELS = 4
"""Traces shown."""


class Tuner:
    """A figure with traces, the model, and a slider for each varied parameter.

    Parameters
    ----------
    figure : Figure
        Empty; its canvas takes the events.
    job : Job
        With traces, and values to start from.
    save : callable
        Called with {name: value in the job's unit}; returns what to say of it.
    simulate : callable
        As `spinfit.spectrum.simulate`.

    Attributes
    ----------
    names : tuple of str
        The varied parameters.
    free : ndarray, shape (k,)
        Their values, internal units.
    saved : bool
        Whether the present values have been saved.

    Raises
    ------
    InputError
        When the job has no trace, or varies nothing.
    """

    def __init__(
        self, figure: Figure, job: Job, save: Callable[[dict[str, float]], str], *, simulate: Simulate = _engine
    ) -> None:
        if not job.traces:
            right = "draw the start of line positions with spinfit lines JOB.toml --plot FILE.png"
            raise InputError("the job has no trace", right, file=job.path or None)
        self.problem = Problem(job, simulate)
        self.names = self.problem.names
        if not self.names:
            raise InputError("nothing is varied", 'write vary = ["..."]', place="fit.vary", file=job.path or None)
        self.figure, self.saved = figure, False
        self.view = full_view(job.traces, self.problem.noises, max(job.tolerance, COARSE))
        self.start = self.problem.start.copy()
        self.free = self.start.copy()
        self._save = save
        self._reach = REACH
        self._page = 0
        self._stale = False
        self._moving = False
        with style.styled():
            self._build()
        self._timer: Any = figure.canvas.new_timer(interval=PAUSE)
        self._timer.single_shot = True
        self._timer.add_callback(self.redraw)
        self._show_page()
        self._stale = True
        self.redraw()

    def values(self) -> dict[str, float]:
        """Return the varied parameters in the units of the job."""
        pairs = zip(self.names, self.free, strict=True)
        return {name: self.problem.parameters[name].to_job(float(value)) for name, value in pairs}

    # ------------------------------------------------------------ the window

    def _build(self) -> None:
        """Lay out curves above, sliders below, buttons at the bottom."""
        count = min(len(self.names), PAGE)
        columns = 1 if count <= PAGE // 2 else 2
        rows = -(-count // columns)
        bottom = 0.11 + 0.042 * rows
        self._lines: list[tuple[Any, Any, float]] = []
        self._draw_traces(bottom + 0.02)
        width = 0.52 if columns == 1 else 0.24
        lefts = (0.26,) if columns == 1 else (0.17, 0.66)
        self._slots = [
            self.figure.add_axes((lefts[k // rows], bottom - 0.045 - 0.042 * (k % rows), width, 0.028))
            for k in range(count)
        ]
        self.sliders: list[Slider] = []
        self.status = self.figure.text(0.02, 0.015, "", fontsize=7.5, color=style.MEASURED)
        pages = -(-len(self.names) // PAGE)
        wanted = [("save", self.save), ("start again", self.reset), ("finer", self.finer), ("coarser", self.coarser)]
        wanted += [("next", self.next_page)] if pages > 1 else []
        self.buttons: dict[str, Button] = {}
        for k, (label, action) in enumerate(wanted):
            button = Button(self.figure.add_axes((0.40 + 0.118 * k, 0.01, 0.11, 0.04)), label)
            button.label.set_fontsize(7.5)
            button.on_clicked(lambda _event, action=action: action())
            self.buttons[label] = button

    def _draw_traces(self, bottom: float) -> None:
        """Put one panel a trace between `bottom` and the top, in two columns where there are several."""
        shown = self.problem.job.traces[:PANELS]
        columns = 1 if len(shown) == 1 else 2
        rows = -(-len(shown) // columns)
        height, width = (0.97 - bottom) / rows, 0.90 / columns
        for n, (trace, seen) in enumerate(zip(shown, self.view.seen, strict=False)):
            row, column = divmod(n, columns)
            place = (0.09 + column * (width + 0.01), bottom + 0.045 + (rows - 1 - row) * height)
            axes = self.figure.add_axes((*place, width - (0.02 if columns == 1 else 0.07), height - 0.115))
            factor, unit = power_of_unit(trace.signal[trace.used])
            axes.plot(seen.field, seen.signal * seen.noise / factor, color=style.MEASURED, lw=0.7, label="measured")
            (line,) = axes.plot(seen.field, np.full(seen.field.size, np.nan), color=style.FITTED, lw=1.0, label="model")
            axes.set_xlim(seen.field[0], seen.field[-1])
            axes.set_ylabel(f"signal / {unit}")
            axes.xaxis.get_major_formatter().set_useOffset(False)
            if row == rows - 1:
                axes.set_xlabel(FIELD_LABEL, labelpad=1)
            if len(shown) > 1:
                axes.text(0.01, 0.98, trace.name[-30:], transform=axes.transAxes, ha="left", va="top", fontsize=7.5)
            add_g_axis(axes, trace.frequency, label=row == 0, most=6 if columns == 1 else 4)
            if n == 0:
                axes.legend(loc="upper right")
            self._lines.append((axes, line, factor))

    def _ends(self, k: int) -> tuple[float, float]:
        """Return the ends of a slider around the present value, internal units, inside the limits."""
        parameter = self.problem.parameters[self.names[k]]
        reach = self._reach * parameter.scale
        if parameter.hard_limits[0] == 0 and self.free[k] > 0:  # an amount of 0.01 has no use for steps of 0.05
            reach = min(reach, 0.5 * self._reach * self.free[k])
        low = max(self.free[k] - reach, float(self.problem.lower[k]))
        high = min(self.free[k] + reach, float(self.problem.upper[k]))
        return (low, high) if low < high else (low, low + reach)

    def _show_page(self) -> None:
        """Put sliders for the parameters of the present page into their places."""
        first = self._page * PAGE
        for slider in self.sliders:
            slider.disconnect_events()
        self.sliders = []
        for k, axes in enumerate(self._slots):
            axes.clear()
            axes.set_visible(first + k < len(self.names))
            if first + k < len(self.names):
                self.sliders.append(self._slider(axes, first + k))
        self.figure.canvas.draw_idle()

    def _slider(self, axes: Any, k: int) -> Slider:
        parameter = self.problem.parameters[self.names[k]]
        low, high = (parameter.to_job(end) for end in self._ends(k))
        decimals = max(0, 4 - math.floor(math.log10(max(abs(high - low), 1e-300))) - 1)
        unit = f" / {parameter.unit}" if parameter.unit else ""
        slider = Slider(
            axes, f"{parameter.name}{unit}", low, high, valinit=parameter.to_job(float(self.free[k])),
            valfmt=f"%.{min(decimals, 12)}f", color=style.GUIDE, initcolor=style.FITTED,
        )  # fmt: skip
        slider.label.set_fontsize(7.5)
        slider.valtext.set_fontsize(7.5)
        slider.on_changed(lambda value, k=k: self._moved(k, value))
        return slider

    # ------------------------------------------------------------ what the reader does

    def _moved(self, k: int, value: float) -> None:
        if self._moving:
            return
        self.free[k] = self.problem.parameters[self.names[k]].from_job(float(value))
        self.saved = False
        self._later()

    def _later(self) -> None:
        """Redraw once the sliders have rested."""
        self._stale = True
        self._timer.stop()
        self._timer.start()

    def _again(self) -> None:
        """Put the sliders where the values are."""
        self._moving = True
        try:
            self._show_page()
        finally:
            self._moving = False
        self._later()

    def reset(self) -> None:
        """Go back to the job's values."""
        self.free, self._reach, self.saved = self.start.copy(), REACH, False
        self._again()

    def finer(self) -> None:
        """Make every slider a quarter as long, around the present value."""
        self._reach /= 4
        self._again()

    def coarser(self) -> None:
        """Make every slider four times as long, around the present value."""
        self._reach *= 4
        self._again()

    def next_page(self) -> None:
        """Show the next sliders."""
        self._page = (self._page + 1) % -(-len(self.names) // PAGE)
        self._again()

    def save(self) -> None:
        """Hand the present values to whoever keeps them."""
        try:
            said = self._save(self.values())
            self.saved = True
        except (InputError, OSError) as error:
            said = f"not saved: {' '.join(str(error).split())}"
        self._say(said)

    # ------------------------------------------------------------ drawing

    def redraw(self) -> None:
        """Compute the model at the present values and draw it; nothing when nothing moved since."""
        if not self._stale:
            return
        self._stale = False
        try:
            point = self.problem.evaluate(self.free, self.view)
        except InputError as error:
            self._say(" ".join(str(error).split()))
            return
        self._draw(point)
        free = len(self.names) + self.view.linear
        self._say(f"chi-square per point {point.chi2 / max(self.view.points - free, 1):.4g}")

    def _draw(self, point: Point) -> None:
        at = 0
        for seen, (axes, line, factor) in zip(self.view.seen, self._lines, strict=False):
            residual = point.residual[at : at + seen.field.size]
            at += seen.field.size
            model = (seen.signal - residual) * seen.noise / factor
            line.set_ydata(model)
            both = np.concatenate((seen.signal * seen.noise / factor, model))
            low, high = float(np.nanmin(both)), float(np.nanmax(both))
            room = 0.06 * (high - low) or 1.0
            axes.set_ylim(low - room, high + room)

    def _say(self, text: str) -> None:
        self.status.set_text(text if len(text) < 78 else text[:75] + "...")
        self.figure.canvas.draw_idle()
