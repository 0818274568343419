"""The field axis from g standards: where the line of a known g stands against where it should.

One line, Gaussian, Lorentzian or Voigt, with its phase and a straight baseline, is fitted to each
trace; known minus indicated field is the offset, to be added to every field.  Standards far apart in
field also give the scale: true field = indicated field x scale + offset.
"""

from __future__ import annotations

import csv
from collections.abc import Sequence
from dataclasses import dataclass
from importlib import resources

import lmfit
import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError, nearest
from spinfit.fitting.turning import analyse
from spinfit.lineshape import voigt_absorption
from spinfit.units import field_of

Array = NDArray[np.float64]

# The line is fitted over this many peak-to-peak widths on either side.
REACH = 8.0
# Fields of two standards that differ by less than this part give no scale worth the name.
SMALLEST_LEVER = 0.05
# A Voigt line whose one width is not there creeps along its limit; pure shapes are tried besides.
MOST_EVALUATIONS = 200
SHAPES = ("gaussian", "lorentzian", "voigt")


@dataclass(frozen=True)
class Standard:
    """A substance of known g, with the standard uncertainty of that g."""

    name: str
    g: float
    uncertainty: float
    description: str = ""
    source: str = ""


@dataclass(frozen=True)
class Line:
    """One fitted line.

    `centre` and its `uncertainty` (noise only) in mT, indicated; `gaussian` and `lorentzian` are
    peak-to-peak widths in mT, `width` that of the whole derivative; `phase` in rad.
    """

    centre: float
    uncertainty: float
    shape: str
    gaussian: float
    lorentzian: float
    width: float
    phase: float
    misfit: float


@dataclass(frozen=True)
class Reading:
    """A standard's line against its known field, mT.

    `known_uncertainty` holds those of g and of the frequency.
    """

    trace: str
    standard: Standard
    frequency: float
    line: Line
    known: float
    g_part: float
    frequency_part: float

    @property
    def offset(self) -> float:
        """Known minus indicated field, mT."""
        return self.known - self.line.centre

    @property
    def uncertainty(self) -> float:
        """Standard uncertainty of the offset: fit, g and frequency in quadrature (JCGM 100), mT."""
        return float(np.sqrt(self.line.uncertainty**2 + self.g_part**2 + self.frequency_part**2))


@dataclass(frozen=True)
class Calibration:
    """True field = indicated field x scale + offset.

    Attributes
    ----------
    offset : float
        mT.
    field_uncertainty : float
        Standard uncertainty of the corrected axis in the middle of the standards, mT: what a job
        states as `field_uncertainty`.
    scale, scale_uncertainty : float
        1 and None when the standards do not tell.
    readings : tuple of Reading
    chi2 : float or None
        Of the standards against the correction; None when nothing is left over to judge by.
    """

    offset: float
    field_uncertainty: float
    scale: float
    scale_uncertainty: float | None
    readings: tuple[Reading, ...]
    chi2: float | None


def standards() -> dict[str, Standard]:
    """Return the known g standards by name in lower case."""
    with resources.files("spinfit").joinpath("data/standards.csv").open(encoding="utf-8", newline="") as lines:
        rows = csv.DictReader(line for line in lines if not line.startswith("#"))
        return {
            row["name"].lower(): Standard(
                row["name"], float(row["g"]), float(row["uncertainty"]), row["description"], row["source"]
            )
            for row in rows
        }


def standard(name: str) -> Standard:
    """Return a g standard by name, whatever its case.

    Raises
    ------
    InputError
        When it is not in the table.
    """
    table = standards()
    key = " ".join(name.lower().split())
    if key not in table:
        raise InputError(
            f'"{name}" is not a known standard',
            f"{nearest(name, [known.name for known in table.values()])} or give its g",
        )
    return table[key]


def profile(field: Array, centre: float, gaussian: float, lorentzian: float, detect: str) -> Array:
    """Return absorption and dispersion of a Voigt line (or their derivatives), shape (n, 2).

    With z = (B - B0 + i Gamma) / (sqrt(2) sigma) they are the real and imaginary part of the Faddeeva
    function w(z), whose derivative is -2 z w + 2i/sqrt(pi) (NIST Handbook of Mathematical Functions,
    7.10); widths are peak to peak, sigma = gaussian/2 and Gamma = sqrt(3)/2 lorentzian.  Scaled to a
    largest value of 1.
    """
    sigma, gamma = 0.5 * gaussian, 0.5 * np.sqrt(3.0) * lorentzian
    if sigma <= 1e-6 * gamma:
        sigma = 0.0
    x = field - centre
    line = voigt_absorption(x, sigma, gamma)
    if detect != "absorption" and sigma == 0:
        line = -line / (x + 1j * gamma)
    elif detect != "absorption":
        z = (x + 1j * gamma) / (np.sqrt(2.0) * sigma)
        line = (-2 * z * line + 1j * np.sqrt(2.0) / (np.pi * sigma)) / (np.sqrt(2.0) * sigma)
    parts = np.stack([line.real, line.imag], axis=1)
    return parts / np.abs(parts).max()


def fit_line(field: Array, signal: Array, *, detect: str = "derivative") -> Line:
    """Fit the strongest line of a trace.

    Parameters
    ----------
    field, signal : ndarray, shape (n,)
        Indicated field in mT, strictly increasing.
    detect : str
        "derivative" or "absorption".

    Raises
    ------
    InputError
        When no line stands out of the noise, or the best shape leaves its centre undetermined.
    """
    centre, width = _strongest(field, signal, detect)
    part = np.abs(field - centre) <= REACH * width
    field, signal = field[part], signal[part]
    fits = {shape: _fit_shape(field, signal, centre, width, shape, detect) for shape in SHAPES}
    shape, result = min(fits.items(), key=lambda item: item[1].bic)
    best = result.params
    sigma = best["centre"].stderr
    if sigma is None and np.ptp(result.residual) < 1e-6 * np.ptp(signal):
        sigma = 0.0  # a line without noise leaves no residual to estimate an uncertainty from
    if sigma is None or not np.isfinite(sigma):
        raise InputError("the line could not be fitted", "check that the trace shows one line on a smooth baseline")
    gaussian, lorentzian = best["gaussian"].value, best["lorentzian"].value
    cosine, sine = _solve(field, signal, best.valuesdict(), detect)[1][:2]
    if cosine < 0:  # a sign of the detector, not of the phase
        cosine, sine = -cosine, -sine
    return Line(
        centre=best["centre"].value,
        uncertainty=float(sigma),
        shape=shape,
        gaussian=gaussian,
        lorentzian=lorentzian,
        width=_peak_to_peak(gaussian, lorentzian),
        phase=float(np.arctan2(sine, cosine)),
        misfit=float(np.abs(result.residual).max() / np.ptp(signal)),
    )


def _strongest(field: Array, signal: Array, detect: str) -> tuple[float, float]:
    """Return a first centre and peak-to-peak width of the strongest line."""
    found = analyse(field, signal, detect=detect).turning_points
    if detect == "absorption":
        if not found:
            raise InputError("no line stands out of the noise", "measure the standard again")
        top = max(found, key=lambda point: abs(point.height))
        high = np.abs(signal - np.median(signal)) > 0.5 * abs(top.height)
        return top.field, max(float(np.ptp(field[high])) / 1.5, float(np.diff(field).min()))
    lines = [(a, b, c) for a, b, c in zip(found, found[1:], found[2:], strict=False) if b.kind == "crossing"]
    if not lines:
        raise InputError("no line stands out of the noise", "measure the standard again, or check the columns")
    left, middle, right = max(lines, key=lambda line: abs(line[0].height - line[2].height))
    return middle.field, right.field - left.field


def _solve(field: Array, signal: Array, values: dict[str, float], detect: str) -> tuple[Array, Array]:
    """Return residual and coefficients (absorption, dispersion, constant, slope) of the linear part."""
    x = (field - field.mean()) / np.ptp(field)
    line = profile(field, values["centre"], values["gaussian"], values["lorentzian"], detect)
    design = np.column_stack([line, np.ones_like(x), x])
    coefficients = np.linalg.lstsq(design, signal, rcond=None)[0]
    return signal - design @ coefficients, coefficients


def _fit_shape(
    field: Array, signal: Array, centre: float, width: float, shape: str, detect: str
) -> lmfit.minimizer.MinimizerResult:
    """Fit one shape; scale, phase and baseline are solved inside (variable projection)."""
    step = float(np.diff(field).min())
    largest = float(np.ptp(field))
    part = {"gaussian": (1.0, 0.0), "lorentzian": (0.0, 1.0), "voigt": (0.6, 0.6)}[shape]
    params = lmfit.Parameters()
    params.add("centre", value=centre, min=field[0], max=field[-1])
    for name, start in zip(("gaussian", "lorentzian"), part, strict=True):
        params.add(name, value=start * width, vary=start > 0, min=0.02 * step if start else 0.0, max=largest)
    # Four linear coefficients are solved for inside: they take their share of the degrees of freedom.
    result = lmfit.minimize(
        lambda p: _solve(field, signal, p.valuesdict(), detect)[0], params, method="leastsq", max_nfev=MOST_EVALUATIONS
    )
    freedom = field.size - result.nvarys
    if result.errorbars and freedom > 4:
        for parameter in result.params.values():
            if parameter.stderr:
                parameter.stderr *= np.sqrt(freedom / (freedom - 4))
    return result


def _peak_to_peak(gaussian: float, lorentzian: float) -> float:
    """Return the peak-to-peak width of a Voigt derivative, mT, numerically."""
    reach = gaussian + lorentzian
    x = np.linspace(0, 1.5 * reach, 3001)
    derivative = np.abs(profile(x, 0.0, gaussian, lorentzian, "derivative")[:, 0])
    return 2 * float(x[np.argmax(derivative)])


def read_standard(
    name: str,
    field: Array,
    signal: Array,
    standard: Standard,
    *,
    frequency: float,
    frequency_uncertainty: float = 0.0,
    detect: str = "derivative",
) -> Reading:
    """Fit a standard's line and compare with where it should stand; MHz and mT."""
    line = fit_line(field, signal, detect=detect)
    known = field_of(standard.g, frequency)
    return Reading(
        trace=name,
        standard=standard,
        frequency=frequency,
        line=line,
        known=known,
        g_part=known * standard.uncertainty / standard.g,
        frequency_part=known * frequency_uncertainty / frequency,
    )


def calibrate(readings: Sequence[Reading]) -> Calibration:
    """Combine readings of one or more standards.

    Readings of the same standard share the error of its g, which more readings do not reduce; all
    other parts are independent.  The scale is solved for when the standards' fields differ by more
    than a twentieth.  Generalised least squares (JCGM 100, 5.2).
    """
    indicated = np.array([reading.line.centre for reading in readings])
    known = np.array([reading.known for reading in readings])
    covariance = np.diag([reading.line.uncertainty**2 + reading.frequency_part**2 for reading in readings])
    for i, one in enumerate(readings):
        for j, two in enumerate(readings):
            if one.standard == two.standard:
                covariance[i, j] += one.g_part * two.g_part
    middle = indicated.mean()
    with_scale = np.ptp(known) > SMALLEST_LEVER * known.mean()
    columns = [np.ones_like(indicated)] + ([indicated - middle] if with_scale else [])
    design = np.column_stack(columns)
    root = np.linalg.cholesky(covariance + 1e-24 * np.eye(len(readings)))
    whitened = np.linalg.solve(root, np.column_stack([design, known - indicated]))
    inverse = np.linalg.inv(whitened[:, :-1].T @ whitened[:, :-1])
    solution = inverse @ whitened[:, :-1].T @ whitened[:, -1]
    left = whitened[:, -1] - whitened[:, :-1] @ solution
    extra = float(solution[1]) if with_scale else 0.0
    return Calibration(
        offset=float(solution[0]) - extra * float(middle),
        field_uncertainty=float(np.sqrt(inverse[0, 0])),
        scale=1.0 + extra,
        scale_uncertainty=float(np.sqrt(inverse[1, 1])) if with_scale else None,
        readings=tuple(readings),
        chi2=float(left @ left) if len(readings) > design.shape[1] else None,
    )
