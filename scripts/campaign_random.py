"""The engine on random and on awkward systems: bounded time, the promise kept or a warning.

Run as ``scripts/campaign random [--count N] [--seed N] [--seconds N]``.  Every system is computed at
tolerances 1e-3 and 2e-4; what the first errs by against the second must keep the first's promise,
unless either warns that it may not.  Random systems have one or two spins to 7/2, fields to sixth
order and up to three nuclei, nothing collinear; the awkward ones are degenerate or extreme on purpose.
`awkward` and `random_species` also serve the tests.
"""

from __future__ import annotations

import argparse
import signal
import sys
import time
import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT))

from spinfit.species import Exchange, Nucleus, Species, Spin, Width  # noqa: E402
from spinfit.spectrum import Spectrum, simulate  # noqa: E402
from spinfit.sweep import Sweep  # noqa: E402

PER_CM = 29979.2458
LOOSE, TIGHT = 1e-3, 2e-4
NUCLEI = {"1H": 2, "14N": 3, "13C": 2, "19F": 2, "63Cu": 4, "55Mn": 6, "51V": 8}
"""Numbers of nuclear states."""


@dataclass(frozen=True)
class Trial:
    """A species and its conditions."""

    name: str
    species: Species
    sweep: Sweep


@dataclass(frozen=True)
class Outcome:
    """How a trial went: error at `LOOSE` relative to the top, seconds of the processor, warnings, what broke."""

    name: str
    error: float
    seconds: float
    warned: tuple[str, ...]
    broken: str = ""

    @property
    def good(self) -> bool:
        """Whether it finished, and kept its promise or said that it might not."""
        return not self.broken and (self.error <= LOOSE + TIGHT or bool(self.warned))


class TooLongError(Exception):
    """A trial took longer than allowed."""


def _angles(rng: np.random.Generator) -> tuple[float, float, float]:
    return tuple(float(v) for v in rng.uniform(-3.1, 3.1, 3))


def _three(rng: np.random.Generator, low: float, high: float) -> tuple[float, float, float]:
    return tuple(float(v) for v in rng.uniform(low, high, 3))


def _spin(rng: np.random.Generator, most: int, zero_field: float) -> Spin:
    s = int(rng.integers(1, most + 1)) / 2
    if s == 0.5:
        return Spin(s, _three(rng, 1.9, 2.3), g_tilt=_angles(rng))
    stevens = {}
    for k in (2, 4, 6):
        if k <= 2 * s and rng.random() < 0.3:
            stevens[k, int(rng.integers(-k, k + 1))] = float({2: 0.03, 4: 1e-3, 6: 3e-5}[k] * zero_field * rng.normal())
    return Spin(
        s,
        _three(rng, 1.95, 2.05),
        float(zero_field * rng.normal()),
        float(0.2 * zero_field * rng.normal()),
        g_tilt=_angles(rng),
        D_tilt=_angles(rng),
        stevens=tuple(stevens.items()),
    )


def random_species(rng: np.random.Generator, states: int = 40) -> Trial:
    """Return one random system of up to `states` levels with fields around its resonances."""
    frequency = float(rng.choice([9500.0, 34000.0]))
    zero_field = float(10 ** rng.uniform(2, 4.3))
    while True:
        spins = tuple(_spin(rng, 7, zero_field) for _ in range(1 + (rng.random() < 0.25)))
        nuclei = []
        for _ in range(int(rng.integers(0, 4))):
            size = float(10 ** rng.uniform(0.5, 2.5))
            nuclei.append(
                Nucleus(
                    isotope=str(rng.choice(list(NUCLEI))),
                    A=_three(rng, -size, size),
                    A_tilt=_angles(rng),
                    couples_to=int(rng.integers(1, len(spins) + 1)),
                )
            )
        exchange = ()
        if len(spins) == 2:
            size = float(10 ** rng.uniform(1, 3))
            x, y = rng.uniform(-size, size, 2)
            exchange = (Exchange(J=float(10 ** rng.uniform(1, 5)), dipolar=(x, y, -x - y), tilt=_angles(rng)),)
        species = Species("s", spins, tuple(nuclei), exchange, Width(gaussian=float(rng.uniform(0.5, 5.0))))
        size = int(np.prod([2 * s.S + 1 for s in spins]))
        strong = [n for n in nuclei if max(map(abs, n.A)) > 50]
        size *= int(np.prod([NUCLEI[n.isotope] for n in strong]))
        if size <= states:
            break
    middle = frequency / 28.0
    half = min(0.9 * middle, 30.0 + 2.5 * zero_field / 28.0)
    temperature = None if rng.random() < 0.5 else float(10 ** rng.uniform(0.5, 2.5))
    return Trial("random", species, Sweep(frequency, (middle - half, middle + half), 1024, temperature=temperature))


def _one(spin: Spin, *nuclei: Nucleus, width: float = 1.0, exchange: tuple[Exchange, ...] = (), spins=()) -> Species:
    return Species("s", spins or (spin,), nuclei, exchange, Width(gaussian=width))


def awkward() -> Iterator[Trial]:
    """Yield systems that are degenerate or extreme on purpose."""
    x, wide = (300.0, 380.0), (0.0, 800.0)
    half = Spin(g=(2.0, 2.05, 2.2))
    third = Spin(1.5, (2.0,), 5 * PER_CM, PER_CM)
    yield Trial("from zero field", _one(half), Sweep(9500.0, (0.0, 400.0), 1024))
    yield Trial("through zero field", _one(third, width=4.0), Sweep(9500.0, (-100.0, 400.0), 1024))
    yield Trial("S=5/2, D = 0", _one(Spin(2.5, (2.0,))), Sweep(9500.0, x, 1024))
    yield Trial(
        "S=5/2, D = 0, A = 0",
        _one(Spin(2.5, (2.0, 2.0, 2.1)), Nucleus("55Mn", A=(0.0,), treat="exact")),
        Sweep(9500.0, x, 1024),
    )
    yield Trial("S=1, tiny D", _one(Spin(1, (2.0,), 1e-6, 1e-7)), Sweep(9500.0, x, 1024))
    yield Trial(
        "isotropic pair, J = 0",
        _one(half, spins=(Spin(g=(2.0,)), Spin(g=(2.0,))), exchange=(Exchange(J=0.0),)),
        Sweep(9500.0, x, 1024),
    )
    yield Trial(
        "cubic S=5/2",
        _one(Spin(2.5, (2.0,), stevens=(((4, 0), 5.0), ((4, 4), 25.0)))),
        Sweep(9500.0, (250.0, 430.0), 1024),
    )
    yield Trial(
        "cubic S=7/2, sixth order",
        _one(Spin(3.5, (2.0,), stevens=(((4, 0), 1.0), ((4, 4), 5.0), ((6, 0), 0.02), ((6, 4), -0.42)))),
        Sweep(9500.0, (250.0, 430.0), 1024),
    )
    for d in (4750.0, 9499.0, 9500.0, 9501.0, 19000.0):
        yield Trial(f"S=1, D = {d:g} MHz", _one(Spin(1, (2.0,), d, 0.0), width=4.0), Sweep(9500.0, wide, 1024))
    yield Trial("S=1, E at the quantum", _one(Spin(1, (2.0,), 30000.0, 4750.0), width=4.0), Sweep(9500.0, wide, 1024))
    yield Trial("S=2, D/h nu 1000", _one(Spin(2, (2.0,), 9.5e6, 1000.0), width=4.0), Sweep(9500.0, wide, 1024))
    yield Trial("S=3/2, D/h nu 1000", _one(Spin(1.5, (2.0,), 9.5e6, 1e6), width=4.0), Sweep(9500.0, wide, 1024))
    yield Trial("S=7/2, D/h nu 1000", _one(Spin(3.5, (2.0,), -9.5e6, 1e6), width=4.0), Sweep(9500.0, wide, 1024))
    yield Trial("0.001 mT wide", _one(Spin(g=(2.0, 2.0005, 2.001)), width=0.001), Sweep(9500.0, (339.0, 339.5), 4096))
    yield Trial("0.001 mT wide, g spread over 30 mT", _one(half, width=0.001), Sweep(9500.0, (320.0, 322.0), 4096))
    yield Trial(
        "S=5/2 at 0.05 mT", _one(Spin(2.5, (2.0,), 300.0, 30.0), width=0.05), Sweep(9500.0, (335.0, 342.0), 2048)
    )
    yield Trial(
        "nuclear Zeeman cancels A",
        _one(Spin(g=(2.0,)), Nucleus("1H", A=(28.86, 28.86, 28.9), treat="exact"), width=0.05),
        Sweep(9500.0, (337.0, 342.0), 2048),
    )
    yield Trial(
        "A larger than the quantum",
        _one(Spin(g=(2.0,)), Nucleus("209Bi", A=(1475.0,), treat="exact")),
        Sweep(9500.0, (0.0, 900.0), 2048),
    )
    yield Trial(
        "P far larger than A",
        _one(Spin(g=(2.0, 2.0, 2.2)), Nucleus("63Cu", A=(10.0, 10.0, 60.0), P=(-100.0, -200.0, 300.0), treat="exact")),
        Sweep(9500.0, x, 1024),
    )
    yield Trial(
        "equal nuclei with P",
        _one(half, Nucleus("14N", A=(20.0, 20.0, 60.0), P=(-1.0, -1.0, 2.0), count=2, treat="exact")),
        Sweep(9500.0, x, 1024),
    )
    yield Trial(
        "two equal nuclei, apart",
        _one(half, *[Nucleus("1H", A=(60.0, 60.0, 90.0), treat="exact")] * 2),
        Sweep(9500.0, x, 1024),
    )
    yield Trial(
        "two nuclei, A of opposite sign",
        _one(
            half,
            Nucleus("1H", A=(80.0, 80.0, -80.0), treat="exact"),
            Nucleus("1H", A=(-80.0, 80.0, 80.0), treat="exact"),
        ),
        Sweep(9500.0, x, 1024),
    )
    yield Trial(
        "two nuclei, A through zero",
        _one(
            half,
            Nucleus("14N", A=(-60.0, 60.0, 120.0), treat="exact"),
            Nucleus("1H", A=(70.0, 0.0, -70.0), A_tilt=(0.4, 0.9, 0.1), treat="exact"),
        ),
        Sweep(9500.0, x, 1024),
    )
    yield Trial(
        "weak pair with a nucleus each",
        _one(
            half,
            Nucleus("1H", A=(60.0, 60.0, 90.0), treat="exact"),
            Nucleus("1H", A=(60.0, 70.0, 90.0), couples_to=2, treat="exact"),
            spins=(half, half),
            exchange=(Exchange(J=30.0),),
        ),
        Sweep(9500.0, x, 1024),
    )
    yield Trial(
        "S=5/2, two nuclei",
        _one(
            Spin(2.5, (2.0,), 300.0, 40.0),
            Nucleus("55Mn", A=(-250.0,), treat="exact"),
            Nucleus("1H", A=(60.0, 70.0, 90.0), A_tilt=(0.3, 0.5, 0.2), treat="exact"),
            width=1.5,
        ),
        Sweep(34000.0, (1160.0, 1265.0), 1024),
    )
    yield Trial(
        "S=1, two nuclei",
        _one(
            Spin(1, (2.0,), 800.0, 90.0),
            Nucleus("14N", A=(40.0, 50.0, 90.0), treat="exact"),
            Nucleus("1H", A=(60.0, 70.0, 90.0), A_tilt=(0.3, 0.5, 0.2), treat="exact"),
            width=1.5,
        ),
        Sweep(9500.0, (280.0, 400.0), 1024),
    )
    yield Trial("parallel mode, hardly allowed", _one(half), Sweep(9500.0, x, 1024, microwave="parallel"))
    yield Trial("1 mK", _one(third, width=4.0), Sweep(9500.0, wide, 1024, temperature=0.001))
    yield Trial("nothing in the window", _one(half), Sweep(9500.0, (700.0, 800.0), 1024))


def attempt(trial: Trial, seconds: float) -> Outcome:
    """Compute a trial at both tolerances, each in at most `seconds`."""

    def stop(*_: object) -> None:
        raise TooLongError

    def compute(tolerance: float) -> Spectrum:
        signal.setitimer(signal.ITIMER_PROF, seconds)
        try:
            return simulate(trial.species, trial.sweep, tolerance=tolerance)
        finally:
            signal.setitimer(signal.ITIMER_PROF, 0)

    signal.signal(signal.SIGPROF, stop)
    begun = time.process_time()
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            loose = compute(LOOSE)
            took = time.process_time() - begun
            tight = compute(TIGHT)
    except TooLongError:
        return Outcome(trial.name, np.inf, time.process_time() - begun, (), "took too long")
    except Exception as error:
        return Outcome(trial.name, np.inf, time.process_time() - begun, (), f"{type(error).__name__}: {error}")
    top = np.abs(tight.signal).max()
    broken = "" if np.isfinite(loose.signal).all() and np.isfinite(tight.signal).all() else "not finite"
    error = float(np.abs(loose.signal - tight.signal).max() / top) if top else 0.0
    said = tuple(dict.fromkeys(code for one in (loose, tight) for code, _ in one.warnings))
    return Outcome(trial.name, error, took, said, broken)


def main(arguments: list[str] | None = None) -> int:
    """Run everything; return 1 when a promise is broken."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("names", nargs="*", help="awkward systems whose names contain one of these; none for all")
    parser.add_argument("--count", type=int, default=100, help="random systems")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--seconds", type=float, default=120.0, help="longest processor time of one spectrum")
    given = parser.parse_args(arguments)
    bad = 0
    trials = [one for one in awkward() if not given.names or any(name in one.name for name in given.names)]
    for number in range(0 if given.names else given.count):
        one = random_species(np.random.default_rng([given.seed, number]))
        trials.append(Trial(f"random {number}", one.species, one.sweep))
    for one in trials:
        got = attempt(one, given.seconds)
        bad += not got.good
        mark = "ok " if got.good else "BAD"
        numbers = f"error {got.error:8.1e}  {got.seconds:7.2f} s"
        print(f"{mark} {got.name:36s} {numbers}  {got.broken} {' '.join(got.warned)}", flush=True)
    return 1 if bad else 0


if __name__ == "__main__":
    sys.exit(main())
