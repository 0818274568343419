"""The engine's promise checked at length: powder spectra of varied systems against dense sums.

Run as ``scripts/campaign engine`` or ``python scripts/campaign_engine.py [NAME...] [--cache DIR]``.
Every system is computed at tolerances 1e-3 and 1e-2 and compared with `tests/dense.py`, whose
meshes are refined until two agree; `ref` is by how much the last two differed, and the finer one,
which is used, is better than that.  Errors are relative to the spectrum's largest value; a promise is
broken, too, when the engine's own estimate is smaller than an error of more than a third of the tolerance.
Cases whose names begin with "scan" go through spins, splittings, rhombicities and widths; those that begin
with "axial" are drawn at random.
References do not depend on the engine: with ``--cache`` they are kept from run to run (empty the
folder after a change of `tests/dense.py`).
"""

from __future__ import annotations

import argparse
import hashlib
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

from dense import Scan, converged  # noqa: E402

from spinfit.hamiltonian import systems  # noqa: E402
from spinfit.species import Exchange, Nucleus, Species, Spin, Width  # noqa: E402
from spinfit.spectrum import simulate  # noqa: E402
from spinfit.sweep import Sweep  # noqa: E402

X_BAND, Q_BAND = 9500.0, 34000.0
PER_CM = 29979.2458
TOLERANCES = (1e-3, 1e-2)


@dataclass(frozen=True)
class Case:
    """One system: the species, the scan, and the mesh at which its reference starts."""

    name: str
    spins: tuple[Spin, ...]
    scan: Scan
    domain: str
    mesh: tuple[int, int]
    nodes: int = 16
    nuclei: tuple[Nucleus, ...] = ()
    exchange: tuple[Exchange, ...] = ()

    @property
    def species(self) -> Species:
        """The species with the scan's width."""
        width = Width(gaussian=self.scan.gaussian, lorentzian=self.scan.lorentzian)
        return Species("s", self.spins, self.nuclei, self.exchange, width)

    def reference(self, seconds: float, cache: Path | None) -> tuple[NDArray, float, tuple[int, int]]:
        """Return the reference spectrum, the difference of its last two meshes and the mesh."""
        key = hashlib.sha256(str(self).encode()).hexdigest()[:16]
        path = cache / f"{self.name.replace(' ', '_').replace('/', '-')}_{key}.npz" if cache else None
        if path and path.exists():
            kept = np.load(path)
            return kept["signal"], float(kept["difference"]), tuple(kept["mesh"])
        got = converged(systems(self.species), self.scan, self.domain, *self.mesh, nodes=self.nodes, seconds=seconds)
        if path:
            np.savez(path, signal=got[0], difference=got[1], mesh=got[2])
        return got


@dataclass(frozen=True)
class Row:
    """One line of the table."""

    name: str
    tolerance: float
    error: float
    reference: float
    seconds: float
    note: str
    estimate: float = 0.0

    @property
    def honest(self) -> bool:
        """Whether the engine's own estimate bounds the error, as far as it matters and the reference tells."""
        return self.error <= max(self.estimate, self.tolerance / 3) + self.reference

    @property
    def ratio(self) -> float:
        """Error over tolerance."""
        return self.error / self.tolerance


def compare(case: Case, reference: tuple[NDArray, float, tuple[int, int]], tolerance: float) -> Row:
    """Compute one case with the engine and compare."""
    scan = case.scan
    sweep = Sweep(
        scan.frequency,
        scan.fields[:2],
        scan.fields[2],
        temperature=scan.temperature,
        microwave=scan.mode,
        detect=scan.detect,
    )
    begun = time.perf_counter()
    got = simulate(case.species, sweep, tolerance=tolerance)
    took = time.perf_counter() - begun
    truth, difference, _ = reference
    error = float(np.abs(got.signal - truth).max() / np.abs(truth).max())
    used = got.report["s"]["systems"][0]
    note = f"{used['symmetry']}, {used['rings']} rings, {used['pairs']} + {used['looping']} looping, " + (
        f"estimate {used['estimated_error']:.0e}{', warned' if got.warnings else ''}"
    )
    return Row(case.name, tolerance, error, difference, took, note, used["estimated_error"])


def _radicals() -> list[Case]:
    tilts = {"g_tilt": (0.4, 0.9, -0.3)}
    copper = Nucleus(isotope="63Cu", A=(-30.0, -60.0, -540.0))
    turned = Nucleus(isotope="63Cu", A=(-30.0, -60.0, -540.0), A_tilt=(0.52, 0.35, 0.17))
    rhombic = (2.0, 2.05, 2.25)
    return [
        Case("S=1/2 axial", (Spin(g=(2.05, 2.25)),), Scan(X_BAND, (290, 345, 1024), 0.5), "axial", (400, 1), 3),
        Case("S=1/2 rhombic", (Spin(g=rhombic),), Scan(X_BAND, (290, 350, 1024), 1.0), "octant", (120, 120), 3),
        Case(
            "S=1/2 sharp",
            (Spin(g=(2.002, 2.006, 2.009)),),
            Scan(X_BAND, (336.5, 339.5, 2048), 0.02),
            "octant",
            (160, 160),
            3,
        ),
        Case(
            "S=1/2 tilted", (Spin(g=rhombic, **tilts),), Scan(X_BAND, (290, 350, 1024), 1.5), "hemisphere", (90, 300), 3
        ),
        Case("S=1/2 Lorentzian", (Spin(g=rhombic),), Scan(X_BAND, (290, 350, 1024), 0.0, 1.0), "octant", (120, 120), 4),
        Case(
            "S=1/2 Voigt absorption",
            (Spin(g=rhombic),),
            Scan(X_BAND, (290, 350, 1024), 1.0, 0.5, detect="absorption"),
            "octant",
            (120, 120),
            4,
        ),
        Case(
            "S=1/2 second derivative",
            (Spin(g=rhombic),),
            Scan(X_BAND, (290, 350, 1024), 1.5, detect="second derivative"),
            "octant",
            (100, 100),
            3,
        ),
        Case("S=1/2 window cuts", (Spin(g=rhombic),), Scan(X_BAND, (312, 329, 512), 1.0), "octant", (120, 120), 3),
        Case(
            "S=1/2 wide window", (Spin(g=(1.2, 2.4, 5.5)),), Scan(X_BAND, (0, 800, 4096), 8.0), "octant", (320, 320), 3
        ),
        Case(
            "Cu axial",
            (Spin(g=(2.05, 2.26)),),
            Scan(X_BAND, (270, 350, 1024), 0.8),
            "axial",
            (400, 1),
            8,
            nuclei=(Nucleus(isotope="63Cu", A=(-40.0, -550.0)),),
        ),
        Case(
            "Cu rhombic",
            (Spin(g=(2.04, 2.07, 2.26)),),
            Scan(X_BAND, (270, 350, 1024), 1.5),
            "octant",
            (90, 90),
            8,
            nuclei=(copper,),
        ),
        Case(
            "Cu A tilted",
            (Spin(g=(2.04, 2.07, 2.26)),),
            Scan(X_BAND, (270, 350, 1024), 2.5),
            "hemisphere",
            (50, 180),
            8,
            nuclei=(turned,),
        ),
        Case(
            "two nuclei",
            (Spin(g=(2.0, 2.01, 2.03)),),
            Scan(X_BAND, (325, 350, 1024), 0.8),
            "octant",
            (40, 40),
            8,
            nuclei=(
                Nucleus(isotope="14N", A=(15.0, 15.0, 90.0), P=(-0.5, -0.5, 1.0)),
                Nucleus(isotope="1H", A=(30.0, 40.0, 10.0)),
            ),
        ),
    ]


def _high_spin() -> list[Case]:
    ferric = Spin(2.5, (2.0,), 0.3 * PER_CM, 0.03 * PER_CM)
    return [
        Case("S=1 rhombic", (Spin(1, (2.0,), 3000, -400),), Scan(X_BAND, (100, 480, 1024), 4.0), "octant", (150, 150)),
        Case("S=1 axial", (Spin(1, (2.0,), 2500),), Scan(X_BAND, (100, 480, 1024), 2.0), "axial", (500, 1), 24),
        Case("S=1 absorption", (Spin(1, (2.0,), 1500, 300),),
             Scan(X_BAND, (130, 450, 1024), 4.0, detect="absorption"), "octant", (100, 100)),
        Case("S=1 D~hnu", (Spin(1, (2.1,), 9000, 600),), Scan(X_BAND, (0, 800, 1024), 8.0), "octant", (150, 150), 24),
        Case("S=1 parallel mode", (Spin(1, (2.0,), 3000, -400),), Scan(X_BAND, (100, 480, 1024), 4.0, mode="parallel"),
             "octant", (120, 120)),
        Case("S=1 tilted", (Spin(1, (1.9, 2.0, 2.2), 1200, 200, D_tilt=(0.3, 0.6, 0.2)),),
             Scan(X_BAND, (130, 460, 1024), 8.0), "hemisphere", (60, 220)),
        Case("S=3/2 large D", (Spin(1.5, (2.0,), 5 * PER_CM, PER_CM),), Scan(X_BAND, (100, 500, 1024), 8.0), "octant",
             (180, 180), 6),
        Case("S=3/2 axial D~hnu/2", (Spin(1.5, (1.98,), 5000),), Scan(X_BAND, (0, 700, 1024), 8.0, temperature=10.0),
             "axial", (1000, 1), 24),
        Case("S=5/2 axial D~hnu", (Spin(2.5, (2.0,), 9000),), Scan(X_BAND, (20, 600, 1024), 8.0, temperature=10.0),
             "axial", (1000, 1), 24),
        Case("S=3/2 D~hnu", (Spin(1.5, (1.98,), 5000, 700),), Scan(X_BAND, (0, 800, 1024), 8.0), "octant", (140, 140),
             16),
        Case("S=2 parallel", (Spin(2, (2.0,), 2 * PER_CM, 0.15 * PER_CM),),
             Scan(X_BAND, (0, 300, 1024), 6.0, mode="parallel", temperature=10.0), "octant", (80, 80), 24),
        Case("S=2 small D", (Spin(2, (2.0, 2.02, 1.97), 900, 150),), Scan(Q_BAND, (1050, 1400, 1024), 6.0), "octant",
             (120, 120), 8),
        Case("S=5/2 loops (D)", (ferric,), Scan(X_BAND, (20, 600, 1024), 8.0, temperature=10.0), "octant", (200, 200),
             24),
        Case("S=5/2 cubic field", (Spin(2.5, (2.0,), stevens=(((4, 0), 5.0), ((4, 4), 25.0))),),
             Scan(X_BAND, (280, 400, 1024), 2.0), "octant", (100, 100), 8),
        Case("S=5/2 all Stevens",
             (Spin(2.5, (2.0,), 600, 80, stevens=(((4, 0), 3.0), ((4, -3), 40.0), ((4, 2), 6.0))),),
             Scan(Q_BAND, (1100, 1330, 1024), 5.0), "hemisphere", (50, 180), 8),
        Case("S=3 D~hnu/2", (Spin(3, (2.0,), 1500, 100),), Scan(X_BAND, (100, 600, 1024), 10.0), "octant",
             (130, 130), 24),
        Case("S=7/2 Q band", (Spin(3.5, (1.99,), 1500, 200),), Scan(Q_BAND, (800, 1650, 1024), 12.0), "octant",
             (220, 220), 12),
        Case("S=7/2 X band", (Spin(3.5, (1.99,), 1800, 300),), Scan(X_BAND, (0, 700, 1024), 14.0), "octant",
             (120, 120), 24),
        Case("S=7/2 tilted g", (Spin(3.5, (1.9, 2.0, 2.1), 400, 90, g_tilt=(0.3, 0.8, 0.1)),),
             Scan(Q_BAND, (1050, 1400, 1024), 6.0), "hemisphere", (60, 200), 8),
        Case("Mn hyperfine", (Spin(2.5, (2.0,), 300, 40),), Scan(Q_BAND, (1160, 1265, 1024), 1.5), "octant",
             (60, 60), 6, nuclei=(Nucleus(isotope="55Mn", A=(-250.0,)),)),
    ]  # fmt: skip


def _coupled() -> list[Case]:
    half = Spin(0.5, (2.0, 2.05, 2.2))
    return [
        Case("pair, dipolar", (Spin(0.5, (2.0,)), Spin(0.5, (2.05,))), Scan(X_BAND, (300, 370, 1024), 1.0), "axial",
             (400, 1), exchange=(Exchange(J=2000.0, dipolar=(300.0, 300.0, -600.0)),)),
        Case("pair, nothing collinear",
             (Spin(0.5, (2.0, 2.05, 2.2), g_tilt=(0.2, 0.7, 0.1)), Spin(0.5, (2.02, 2.06, 2.2))),
             Scan(X_BAND, (290, 360, 1024), 2.0), "hemisphere", (70, 260),
             exchange=(Exchange(J=500.0, dipolar=(200.0, 100.0, -300.0), tilt=(0.5, 1.0, 0.2),
                                antisymmetric=(100.0, 0.0, 50.0)),)),
        Case("pair S=1/2, S=3/2", (half, Spin(1.5, (1.98,), 900, 100)), Scan(X_BAND, (200, 480, 1024), 5.0), "octant",
             (90, 90), exchange=(Exchange(J=20000.0, dipolar=(100.0, 100.0, -200.0)),)),
    ]  # fmt: skip


def _looping() -> list[Case]:
    """Return spins of every size with splittings from well below to well above the quantum, by D/h nu and E/D.

    No splitting at zero field equals the quantum: there the spectrum at zero field has no limit.
    """
    out = []
    for spin in (1, 1.5, 2, 2.5, 3, 3.5):
        for ratio in (0.21, 0.35, 0.49, 0.53, 0.75, 0.98, 1.03, 1.5, 2.05, 3.05):
            for width, rhombicities in ((2.0, (0.0,)), (10.0, (0.0, 0.1, 0.33))):
                for rhombicity in rhombicities:
                    d = ratio * X_BAND
                    name = f"scan S={spin:g} D/hnu {ratio:g} E/D {rhombicity:g} {width:g} mT"
                    scan = Scan(X_BAND, (0, 700, 1024 if width > 5 else 2048), width)
                    domain, mesh = ("octant", (120, 120)) if rhombicity else ("axial", (1500, 1))
                    spins = (Spin(spin, (2.0,), d, rhombicity * d),)
                    out.append(Case(name, spins, scan, domain, mesh, 32))
    return out


def _axial(count: int = 120) -> list[Case]:
    """Return random systems of full rotation symmetry, whose references cost a second each.

    A third of them has a splitting at zero field within a tenth of the quantum, so that loops close in the window.
    """
    out = []
    for number in range(count):
        rng = np.random.default_rng([17, number])
        spin = int(rng.integers(2, 8)) / 2
        ratio = float(rng.choice([-1, 1]) * 10 ** rng.uniform(-0.7, 0.5))
        if number % 3 == 0:
            # |m| and |m - 1| are (2|m| - 1) D apart
            steps = int(rng.integers(1, int(spin + 0.5) + 1))
            ratio = float(rng.choice([-1, 1]) * rng.uniform(0.9, 1.1) / (2 * (spin - steps + 1) - 1 or 2))
        g = (float(rng.uniform(1.9, 2.1)), float(rng.uniform(1.9, 2.1)))
        stevens = (
            (((4, 0), float(rng.normal() * 0.002 * abs(ratio) * X_BAND)),) if spin >= 2 and number % 4 == 1 else ()
        )
        scan = Scan(
            X_BAND,
            (0, 800, 1024),
            float(rng.uniform(3, 12)),
            mode="parallel" if number % 5 == 2 else "perpendicular",
            temperature=float(10 ** rng.uniform(0.5, 2.5)) if number % 2 else None,
            detect="absorption" if number % 7 == 3 else "derivative",
        )
        spins = (Spin(spin, g, ratio * X_BAND, stevens=stevens),)
        out.append(Case(f"axial {number} S={spin:g} D/hnu {ratio:.3f}", spins, scan, "axial", (400, 1), 64))
    return out


def cases() -> list[Case]:
    """Return every case."""
    return _radicals() + _coupled() + _high_spin() + _looping() + _axial()


def show(rows: list[Row], write: Callable[[str], object] = print) -> None:
    """Write the table, the most wrong first."""
    write(f"{'system':26s} {'tolerance':>9s} {'error':>9s} {'ratio':>7s} {'ref':>8s} {'s':>7s}  used")
    for row in sorted(rows, key=lambda r: -r.ratio):
        write(
            f"{row.name:26s} {row.tolerance:9.0e} {row.error:9.1e} {row.ratio:7.2f} {row.reference:8.0e} "
            f"{row.seconds:7.3f}  {row.note}"
        )


def main(arguments: list[str] | None = None) -> int:
    """Run the named cases (all without names); return 1 when a promise is broken."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("names", nargs="*", help="cases whose names contain one of these")
    parser.add_argument("--cache", type=Path, help="folder that keeps references from run to run")
    parser.add_argument("--seconds", type=float, default=60.0, help="longest single mesh of a reference")
    parser.add_argument("--part", help="k/n: only every n-th case, from the k-th, to share the work")
    given = parser.parse_args(arguments)
    if given.cache:
        given.cache.mkdir(parents=True, exist_ok=True)
    chosen = [c for c in cases() if not given.names or any(n in c.name for n in given.names)]
    if given.part:
        k, n = (int(v) for v in given.part.split("/"))
        chosen = chosen[k - 1 :: n]
    rows = []
    for case in chosen:
        reference = case.reference(given.seconds, given.cache)
        rows += [compare(case, reference, tolerance) for tolerance in TOLERANCES]
        show(rows[-len(TOLERANCES) :], lambda line: print(line, file=sys.stderr, flush=True))
    show(rows)
    return 1 if any(row.ratio > 1 or not row.honest for row in rows) else 0


if __name__ == "__main__":
    sys.exit(main())
