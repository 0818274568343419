"""How a spectrum is taken: the measuring conditions (Sweep) and the orientations (Sample).

Internal units: frequency in MHz, fields in mT, angles in rad, temperature in K.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spinfit.errors import InputError
from spinfit.species import NO_TILT, Angles

DETECT = ("derivative", "absorption", "second derivative")
MICROWAVE = ("perpendicular", "parallel")
FORMS = ("powder", "crystal", "aligned", "solution")
Vector = tuple[float, float, float]


@dataclass(frozen=True)
class Sweep:
    """Measuring conditions of one field sweep.

    Attributes
    ----------
    frequency : float
        Microwave frequency, MHz.
    field : (float, float)
        First and last field, mT, first < last.
    points : int
        Number of evenly spaced points.
    temperature : float or None
        K; None gives every level pair the same population difference.
    microwave : str
        Direction of the microwave field to the static one, "perpendicular" or "parallel".
    modulation : float
        Peak-to-peak field modulation, mT; 0 gives the plain derivative.
    detect : str
        "derivative", "absorption" or "second derivative".
    phase : float
        Microwave phase, rad: signal = cos(phase) chi'' + sin(phase) chi'.
    """

    frequency: float
    field: tuple[float, float]
    points: int = 1024
    temperature: float | None = None
    microwave: str = "perpendicular"
    modulation: float = 0.0
    detect: str = "derivative"
    phase: float = 0.0

    def __post_init__(self) -> None:
        if not (math.isfinite(self.frequency) and self.frequency > 0):
            raise InputError(f"{self.frequency:g} MHz", "a frequency is positive", place="frequency")
        first, last = self.field
        if not (math.isfinite(first) and math.isfinite(last) and first < last):
            raise InputError(
                f"{first:g} to {last:g} mT", "write first and last field, the first one smaller", place="field"
            )
        if not 2 <= self.points <= 10_000_000:
            raise InputError(f"{self.points} points", "write between 2 and 10000000", place="points")
        if self.temperature is not None and not (math.isfinite(self.temperature) and self.temperature > 0):
            raise InputError(f"{self.temperature:g} K", "a temperature is positive", place="temperature")
        if not (math.isfinite(self.modulation) and self.modulation >= 0):
            raise InputError(f"{self.modulation:g} mT", "a modulation is not negative", place="modulation")
        for key, value, known in (("microwave", self.microwave, MICROWAVE), ("detect", self.detect, DETECT)):
            if value not in known:
                raise InputError(f'"{value}" is not known', "write " + " or ".join(f'"{k}"' for k in known), place=key)

    @property
    def fields(self) -> NDArray[np.float64]:
        """The sweep's fields, shape (points,), mT."""
        return np.linspace(self.field[0], self.field[1], self.points)


@dataclass(frozen=True)
class Sample:
    """How the species are oriented.

    Attributes
    ----------
    form : str
        "powder", "crystal", "aligned" or "solution".
    axis, start : vectors in the crystal frame
        Crystal: the field is `start` turned about `axis` by (angle - angle_zero).  `start` is the
        file's key ``from``; only its part normal to `axis` is not required to be all of it.
    angles : tuple of float
        rad.  One spectrum is simulated for each.
    angle_zero : float
        rad.
    microwave_axis : vector or None
        Crystal frame; None is the rotation axis.
    tilt : (alpha, beta, gamma)
        Carries crystal axes into molecular axes.
    point_group : str
        Hermann-Mauguin symbol; each operation gives a site.
    director : vector
        Aligned: the molecular axis that orders.
    order : float
        Aligned: <P2>, -1/2 to 1.
    angle : float
        Aligned: director to field, rad.
    """

    form: str = "powder"
    axis: Vector = (0.0, 0.0, 1.0)
    start: Vector = (1.0, 0.0, 0.0)
    angles: tuple[float, ...] = (0.0,)
    angle_zero: float = 0.0
    microwave_axis: Vector | None = None
    tilt: Angles = NO_TILT
    point_group: str = "1"
    director: Vector = (0.0, 0.0, 1.0)
    order: float = 0.0
    angle: float = 0.0

    def __post_init__(self) -> None:
        if self.form not in FORMS:
            raise InputError(f'"{self.form}" is not known', "write " + ", ".join(f'"{f}"' for f in FORMS), place="form")
        for key in ("axis", "start", "director"):
            vector = getattr(self, key)
            if not (all(math.isfinite(v) for v in vector) and any(vector)):
                raise InputError(f"{vector} has no direction", "write three numbers, not all 0", place=key)
        if not -0.5 <= self.order <= 1:
            raise InputError(f"{self.order:g}", "an order parameter <P2> lies between -0.5 and 1", place="order")
