"""Spin-orbit constants from the table `data/spin_orbit.csv`, each with its source."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

from spinfit.ion.names import Shell


@dataclass(frozen=True)
class SpinOrbit:
    """One-electron spin-orbit constant of an ion's open shell.

    Attributes
    ----------
    ion, configuration : str
    zeta_cm1 : float
        cm^-1, positive: H = zeta sum l.s.
    source : str
        Where it stands; "from memory" when it was recalled.
    """

    ion: str
    configuration: str
    zeta_cm1: float
    source: str

    @property
    def lambda_cm1(self) -> float | None:
        """Constant of lambda L.S in the ground term, cm^-1; None for a half-filled shell."""
        shell = _shell_of(self.configuration)
        return lambda_from_zeta(self.zeta_cm1, shell.l, shell.count)


def lambda_from_zeta(zeta: float, l: int, count: int) -> float | None:  # noqa: E741
    """Return lambda = +-zeta/2S of Hund's ground term of l^count: + below half filling, - above, None at half."""
    half_full = 2 * l + 1
    if count == half_full or count in (0, 2 * half_full):
        return None
    unpaired = min(count, 2 * half_full - count)
    return (zeta if count < half_full else -zeta) / unpaired


def _shell_of(configuration: str) -> Shell:
    word = max(configuration.split(), key=lambda w: "spdf".index(w[1]))
    return Shell(int(word[0]), "spdf".index(word[1]), int(word[2:]))


def read_table(name: str) -> list[dict[str, str]]:
    """Read a csv of the package's data folder; lines that begin with # are its heading."""
    text = (Path(__file__).parents[1] / "data" / name).read_text(encoding="utf-8")
    return list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))


@lru_cache(maxsize=1)
def spin_orbit_table() -> dict[str, SpinOrbit]:
    """Return ion -> constant for every ion of the table."""
    return {
        row["ion"]: SpinOrbit(row["ion"], row["configuration"], float(row["zeta_cm1"]), row["source"])
        for row in read_table("spin_orbit.csv")
    }
