"""One column of a table against another, with error bars."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from spinfit.report import style

Array = NDArray[np.float64]


def column_figure(
    x: Array,
    y: Array,
    *,
    labels: tuple[str, str],
    x_uncertainty: Array | None = None,
    y_uncertainty: Array | None = None,
    marked: Sequence[bool] | None = None,
    mark: str = "outlier",
) -> Figure:
    """Return the picture of a column against another.

    Parameters
    ----------
    x, y : ndarray, shape (n,)
    labels : (str, str)
        Quantity and unit of the two axes.
    x_uncertainty, y_uncertainty : ndarray, shape (n,), optional
        Standard uncertainties, drawn as bars; NaN for none.
    marked : sequence of bool, length n, optional
        Points that stand out, drawn open in another colour.
    mark : str
        What these are called.
    """
    marked = np.zeros(x.shape, dtype=bool) if marked is None else np.asarray(marked, dtype=bool)
    with style.styled():
        figure = Figure(figsize=(style.COLUMN_WIDTH, 2.5), layout="constrained")
        axes = figure.subplots()
        for which, colour, face, name in (
            (~marked, style.MEASURED, style.MEASURED, None),
            (marked, style.FITTED, "white", mark),
        ):
            if not which.any():
                continue
            bars = [None if u is None else np.nan_to_num(u[which]) for u in (x_uncertainty, y_uncertainty)]
            axes.errorbar(
                *(x[which], y[which]), xerr=bars[0], yerr=bars[1], fmt="o", ms=3.2, mfc=face, mec=colour, mew=0.8,
                ecolor=colour, elinewidth=0.7, capsize=1.5, capthick=0.7, label=name,
            )  # fmt: skip
        axes.set_xlabel(labels[0])
        axes.set_ylabel(labels[1])
        for axis in (axes.xaxis, axes.yaxis):
            axis.get_major_formatter().set_useOffset(False)
        axes.margins(0.06)
        if marked.any():
            axes.legend(loc="best")
    return figure
