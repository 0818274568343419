"""How often the truth lies inside the stated uncertainties.

For each system many traces are made with seeded noise, white and correlated, and with a field axis
that is off by a draw from its stated uncertainty; each is fitted and every varied parameter's
deviation from the truth is counted in its own standard uncertainties.  Pooled over parameters the
shares inside 1, 2 and 3 must be 68 +- 2, 95 +- 1 and at least 99.5 %, and no single parameter may
leave the 99.9 % band of the binomial distribution for the normal shares.
"""

from __future__ import annotations

import argparse
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from scipy.signal import lfilter
from scipy.stats import binom, norm

from spinfit.fitting.data import Job, Trace
from spinfit.fitting.driver import fit
from spinfit.fitting.parameters import apply, parameters_of
from spinfit.species import Species, Spin, Width
from spinfit.spectrum import simulate
from spinfit.sweep import Sample, Sweep

FIELD_UNCERTAINTY = 0.02
CORRELATION = 0.6
NOISES = ("white", "correlated")


@dataclass(frozen=True)
class System:
    """Species, sweep, what is varied, and the ratio of the largest signal to the noise."""

    species: tuple[Species, ...]
    sweep: Sweep
    vary: tuple[str, ...]
    signal_to_noise: float = 40.0


def _one(name: str, width: float, amount: float = 1.0, **spin: object) -> Species:
    return Species(name=name, spins=(Spin(**spin),), width=Width(gaussian=width), amount=amount)


SYSTEMS = {
    "radical": System(
        (_one("r", 0.3, g=(2.0021, 2.0058, 2.0091)),), Sweep(34000.0, (1203.0, 1221.0), points=600), ("r.g", "r.width")
    ),
    "triplet": System(
        (_one("t", 1.3, S=1.0, g=(2.0026,), D=2227.0, E=-314.0),),
        Sweep(9400.0, (240.0, 430.0), points=900),
        ("t.g", "t.D", "t.E", "t.width"),
    ),
    "two": System(
        (_one("a", 1.2, g=(2.05, 2.25)), _one("b", 0.8, amount=0.2, g=(2.004,))),
        Sweep(9400.0, (280.0, 350.0), points=800, temperature=77.0),
        ("a.g", "b.g", "b.amount", "a.width", "b.width"),
        60.0,
    ),
}


def noise_of(kind: str, count: int, rng: np.random.Generator) -> np.ndarray:
    """Unit noise, white or first-order autoregressive."""
    phi = CORRELATION if kind == "correlated" else 0.0
    return lfilter([np.sqrt(1 - phi**2)], [1.0, -phi], rng.normal(size=count + 200))[200:]


def deviations(name: str, kind: str, number: int) -> dict[str, float]:
    """Make one trace, fit it, and return each parameter's deviation in standard uncertainties."""
    system = SYSTEMS[name]
    rng = np.random.default_rng([number, NOISES.index(kind), sorted(SYSTEMS).index(name)])
    read = system.sweep.fields
    shift = FIELD_UNCERTAINTY * rng.normal()
    true_sweep = replace(system.sweep, field=(float(read[0] + shift), float(read[-1] + shift)))
    clean = simulate(system.species, true_sweep, tolerance=1e-4, fields=read + shift).signal
    level = float(np.abs(clean).max()) / system.signal_to_noise
    signal = clean + level * noise_of(kind, read.size, rng)
    trace = Trace(
        "trace",
        read,
        signal,
        np.ones(read.size, dtype=bool),
        system.sweep.frequency,
        temperature=system.sweep.temperature,
        field_uncertainty=FIELD_UNCERTAINTY,
    )
    known = parameters_of(system.species, Sample(), (trace,))
    true = {key: parameter.value for key, parameter in known.items()}
    job = Job(system.species, Sample(), (trace,), system.vary)
    outcome = fit(job if number % 2 else replace(job, species=_beside(job, rng)))
    found = {key: value for key, value in outcome.parameters.items() if value.varied}
    return {
        key: np.inf
        if value.uncertainty is None
        else (known[key].from_job(value.value) - true[key]) / abs(known[key].from_job(value.uncertainty))
        for key, value in found.items()
    }


def _beside(job: Job, rng: np.random.Generator) -> tuple[Species, ...]:
    """The species with every g moved by up to a tenth of a line width, so that starts are not the truth."""
    known = parameters_of(job.species, job.sample, job.traces)
    moved = {
        key: parameter.value * (1 + 1e-4 * rng.uniform(-1, 1))
        for key, parameter in known.items()
        if ".g" in key and "tilt" not in key and "spread" not in key
    }
    return apply(moved, job.species, job.sample, job.traces)[0]


def report(name: str, kind: str, rows: list[dict[str, float]]) -> tuple[np.ndarray, bool]:
    """Print one system's shares; return counts inside 1, 2, 3 and whether every parameter is in its band."""
    good = True
    counts = np.zeros(3)
    total = 0
    for key in rows[0]:
        values = np.abs([row[key] for row in rows])
        inside = np.array([np.count_nonzero(values <= k) for k in (1, 2, 3)])
        counts += inside
        total += values.size
        shares = norm.cdf((1, 2, 3)) - norm.cdf((-1, -2, -3))
        low, high = binom.interval(0.999, values.size, shares)
        fits = bool(np.all((inside >= low) & (inside <= high)))
        good &= fits
        shown = "  ".join(f"{100 * share:6.2f}" for share in inside / values.size)
        print(f"{name:10s} {kind:10s} {key:22s} {shown}  {'' if fits else 'OUTSIDE ITS BAND'}", flush=True)
    return np.array([*counts, total]), good


def main(arguments: list[str]) -> int:
    parser = argparse.ArgumentParser(prog="scripts/campaign coverage", description=__doc__)
    parser.add_argument("--count", type=int, default=1000, help="traces for each system and kind of noise")
    parser.add_argument("--workers", type=int, default=1, help="processes")
    parser.add_argument("--system", choices=sorted(SYSTEMS), action="append", help="only these")
    options = parser.parse_args(arguments)
    print(f"{'system':10s} {'noise':10s} {'parameter':22s} {'1 u/%':>6s}  {'2 u/%':>6s}  {'3 u/%':>6s}")
    sums, good = np.zeros(4), True
    with ProcessPoolExecutor(options.workers) as pool:
        for name in options.system or sorted(SYSTEMS):
            for kind in NOISES:
                rows = list(pool.map(partial(deviations, name, kind), range(options.count), chunksize=8))
                counted, fits = report(name, kind, rows)
                sums, good = sums + counted, good and fits
    shares = 100 * sums[:3] / sums[3]
    print("pooled: " + ", ".join(f"{share:.2f} % inside {k}" for k, share in zip((1, 2, 3), shares, strict=True)))
    pooled = abs(shares[0] - 68) <= 2 and abs(shares[1] - 95) <= 1 and shares[2] >= 99.5
    print("as promised" if pooled and good else "NOT as promised")
    return 0 if pooled and good else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
