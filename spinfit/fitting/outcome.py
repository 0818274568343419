"""Everything a fit found, as plain frozen data.

Values are in the unit in which the job gave each parameter ("" for a plain number); fields of
curves in mT.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spinfit.markup import html_table


@dataclass(frozen=True)
class Value:
    """One parameter after the fit.

    Attributes
    ----------
    value : float
        In `unit`.
    uncertainty : float or None
        One standard deviation, the quadrature sum of the next two.  All three are None when the parameter was
        not varied or when no covariance could be had.
    uncertainty_noise : float or None
        From the covariance at the trace's noise.
    uncertainty_field : float or None
        From the stated uncertainties of the field axis and of the frequency.
    unit : str
        That of the job; "" for a plain number.
    varied, tied : bool
        Whether the fit moved it, or an expression of the job did.
    at_limit : bool
        Whether it ended at one of its limits.
    start : float or None
        Where it began, where it was varied.
    derived : bool
        Whether it follows from varied ones through a model and cannot be varied itself (g of a species that
        is given by its crystal field); its uncertainty is then propagated.
    """

    value: float
    uncertainty: float | None = None
    uncertainty_noise: float | None = None
    uncertainty_field: float | None = None
    unit: str = ""
    varied: bool = False
    at_limit: bool = False
    tied: bool = False
    start: float | None = None
    derived: bool = False


@dataclass(frozen=True)
class Quality:
    """How good the fit is.

    Attributes
    ----------
    converged : bool
        Whether the fit came to a minimum.
    finished : bool
        False when it was interrupted.
    chi2_reduced : float
        Near 1 where what is left is noise.
    noise : float
        Estimated standard deviation of the first trace's points, in its signal's unit.
    points, free_parameters : int
        Fitted points; parameters with the scales and baselines that were solved along.
    aicc, bic : float
        Smaller is better, between models of the same data.
    """

    converged: bool
    finished: bool
    chi2_reduced: float
    noise: float
    points: int
    free_parameters: int
    aicc: float
    bic: float


@dataclass(frozen=True)
class Note:
    """A warning.

    Attributes
    ----------
    code : str
        For scripts, and stable: "at_limit".
    text : str
        A sentence for people.
    """

    code: str
    text: str


@dataclass(frozen=True, eq=False)
class Curves:
    """One trace with its fit; every array has shape (n,).

    Attributes
    ----------
    trace : str
        Its name.
    frequency : float
        MHz.
    field : ndarray
        True field (offset and scale applied), mT.
    measured, fitted, residual : ndarray
        In the signal's unit; `fitted` includes `baseline`, and `residual` is the difference.
    baseline : ndarray
        Polynomial, spline or background that was solved along.
    used : ndarray of bool
        Which points were fitted.
    parts : mapping of species name -> ndarray
        Its scaled signal without the baseline.
    noise : float
        Standard deviation of the points.
    scale : float
        Signal of the trace over that of the model.
    detect : str
        "derivative", "absorption" or "second derivative".
    weight : ndarray or None
        After a robust fit only: what each point counted, 0 where not used.
    """

    trace: str
    frequency: float
    field: NDArray[np.float64]
    measured: NDArray[np.float64]
    fitted: NDArray[np.float64]
    residual: NDArray[np.float64]
    baseline: NDArray[np.float64]
    used: NDArray[np.bool_]
    parts: Mapping[str, NDArray[np.float64]]
    noise: float
    scale: float
    detect: str = "derivative"
    weight: NDArray[np.float64] | None = None


@dataclass(frozen=True, eq=False)
class PositionTable:
    """One table of line positions with its fit; arrays of shape (n,) unless said otherwise.

    Attributes
    ----------
    name : str
        That of the table.
    frequency : float
        MHz.
    setting : ndarray, shape (n, 1) or (n, 2)
        Angle of rotation as in the file, or theta and phi; rad.
    measured, fitted, residual, uncertainty : ndarray
        mT, true field (offset and scale applied).
    lower, upper : ndarray of int
        Levels of the assigned transition from 1 by energy; 0 where the line has none.
    used : ndarray of bool
        False for outliers.
    drawn : ndarray, shape (m, 3)
        Angle (rad), field (mT) and relative weight of calculated lines for a picture; empty without angles.
    """

    name: str
    frequency: float
    setting: NDArray[np.float64]
    measured: NDArray[np.float64]
    fitted: NDArray[np.float64]
    residual: NDArray[np.float64]
    uncertainty: NDArray[np.float64]
    lower: NDArray[np.int64]
    upper: NDArray[np.int64]
    used: NDArray[np.bool_]
    drawn: NDArray[np.float64]


@dataclass(frozen=True)
class Axis:
    """Where a principal axis of a tensor points.

    Attributes
    ----------
    tensor : str
        "cu.g", "cr.D".
    label : str
        "x", "y", "z" as in the parameters' names, or "par".
    cosines : (float, float, float)
        Along x, y, z of `frame`; the largest component is positive.
    uncertainty : tuple of float or None
        Standard uncertainty of each component; None where the data do not determine it.
    frame : str
        "crystal" (of the first site) or "molecular".
    """

    tensor: str
    label: str
    cosines: tuple[float, float, float]
    uncertainty: tuple[float | None, ...]
    frame: str = "crystal"


@dataclass(frozen=True, eq=False)
class Outcome:
    """The result of one fit.

    Attributes
    ----------
    parameters : mapping of name -> Value
        All parameters of the model, in file order, varied or not; g, D and E that follow from a crystal
        field stand after its parameters.
    quality : Quality
        How good the fit is, in numbers.
    warnings : tuple of Note
        What to know before believing the values.
    curves : tuple of Curves
        One for each trace.
    correlation_names, correlation_matrix
        Of the varied parameters; shape (n, n); empty when there is no covariance.
    fractions : mapping of species name -> Value
        Relative numbers of spins, summing to 1.
    budget : mapping of parameter -> {source: standard uncertainty}
        What each uncertainty is made of: "noise", "correlation and misfit", "field axis",
        "frequency"; in the unit of the job, summing in quadrature to the uncertainty.
    engine : mapping
        What accuracy was used: orientations, diagonalisations, estimated error, per trace.
    positions : tuple of PositionTable
        Of a fit of line positions, which has no curves.
    axes : tuple of Axis
        Directions of the principal axes of tensors that were turned.
    provenance : mapping
        Digests of the input, versions, the text of the job.
    message : str
        How the search ended, in words.
    seconds : float
        Wall time; kept out of files that must be bit-identical.
    """

    name: str
    parameters: Mapping[str, Value]
    quality: Quality
    correlation_names: tuple[str, ...]
    correlation_matrix: NDArray[np.float64]
    warnings: tuple[Note, ...]
    curves: tuple[Curves, ...]
    fractions: Mapping[str, Value] = field(default_factory=dict)
    provenance: Mapping[str, object] = field(default_factory=dict)
    engine: Mapping[str, object] = field(default_factory=dict)
    budget: Mapping[str, Mapping[str, float]] = field(default_factory=dict)
    positions: tuple[PositionTable, ...] = ()
    axes: tuple[Axis, ...] = ()
    message: str = ""
    seconds: float = 0.0

    def _repr_html_(self) -> str:
        """Show what was varied, tied or derived, and the warnings, for a notebook."""
        shown = {name: v for name, v in self.parameters.items() if v.varied or v.tied or v.derived}
        rows = [
            [name, f"{v.value:.8g}", "" if v.uncertainty is None else f"{v.uncertainty:.2g}", v.unit]
            for name, v in shown.items()
        ]
        state = "converged" if self.quality.converged and self.quality.finished else "NOT converged"
        caption = f"{self.name}: {state}, reduced chi-square {self.quality.chi2_reduced:.4g}"
        said = html_table(["warnings"], [[note.text] for note in self.warnings]) if self.warnings else ""
        return html_table(["parameter", "value", "standard uncertainty", "unit"], rows, caption=caption) + said
