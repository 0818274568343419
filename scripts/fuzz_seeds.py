"""Where the fuzzer begins: small good files of every kind, and the words of their languages."""

from __future__ import annotations

import io
from pathlib import Path

import h5py
import numpy as np

from spinfit.files.curves import write_nxdata
from spinfit.fitting.data import Job, Trace
from spinfit.fitting.outcome import Curves, Note, Outcome, PositionTable, Quality, Value
from spinfit.report.archive import archive_bytes
from spinfit.species import Species, Spin
from spinfit.sweep import Sample

DEMOS = Path(__file__).resolve().parents[1] / "demo_spectra"

TRACE = b"# frequency 9.4 GHz\nfield_mT,signal\n" + b"".join(
    b"%.2f,%.4f\n" % (320 + 0.5 * k, -(k - 30) / 5 * np.exp(-(((k - 30) / 5) ** 2))) for k in range(60)
)
"""A trace for the jobs."""
TABLE = b"""# frequency 9.4 GHz
angle_deg,field_mT,uncertainty_mT,lower,upper
0,335,0.1,1,2
30,330,0.1,1,2
60,325,0.1,1,2
75,322,0.1,1,2
90,320,0.1,0,0
"""
"""A table of line positions for the jobs."""

_SPECIES = b"""[[species]]
name = "cu"
ion = "Cu2+"
S = "1/2"
g = [2.05, 2.25]
g_tilt = "0, 10, 0 deg"
amount = 1.0
[[species.nucleus]]
isotope = "63Cu"
A = "-35, -540 MHz"
A_tilt = "0, 25, 0 deg"
P = "-6, -4, 10 MHz"
count = 1
treat = "auto"
[species.width]
gaussian = "0.8 mT"
lorentzian = "0.2 mT"
hidden_hyperfine = "20, 20, 40 MHz"
[species.spread]
g = [0.005, 0.02]
A = "5, 15 MHz"
correlation = {g_A = 0.5}
"""
_PAIR = b"""[[species]]
name = "pair"
[[species.spin]]
S = "1/2"
g = 2.0
[[species.spin]]
S = "3/2"
g = 1.98
D = "1000 MHz"
rhombicity = 0.1
[[species.exchange]]
between = [1, 2]
J = "60 cm^-1"
dipolar = "900, 900, -1800 MHz"
antisymmetric = "0, 0, 1 MHz"
[species.width]
gaussian = "1 mT"
[[species]]
name = "fe"
S = "5/2"
g = [2.0, 2.0, 2.1]
populations = [0.1, 0.2, 0.3, 0.2, 0.1, 0.1]
[species.stevens]
B2_0 = "300 MHz"
B4_m3 = "2 MHz"
[species.width]
gaussian = "1 mT"
[species.spread]
D = "300 MHz"
"""
_SWEEP = b"""[sweep]
frequency = "9.5 GHz"
field = "260, 360 mT"
points = 64
temperature = "77 K"
microwave = "parallel"
modulation = "0.1 mT"
detect = "derivative"
[accuracy]
tolerance = 1e-2
"""
_CRYSTAL = b"""[sample]
form = "crystal"
axis = [0, 0, 1]
from = [1, 0, 0]
angles = "0, 5, 10 deg"
angle_zero = "1 deg"
point_group = "4/m"
tilt = "0, 10, 0 deg"
"""
_ALIGNED = b'[sample]\nform = "aligned"\ndirector = [0, 0, 1]\norder = 0.5\nangle = "30 deg"\n'
_JOB = b"""[[trace]]
file = "t.csv"
name = "t"
frequency = "9.4 GHz"
field_unit = "mT"
temperature = "120 K"
fit_range = "321, 348 mT"
exclude = ["325, 326 mT"]
background = "t.csv"
baseline = 1
columns = {field = 1, signal = 2}
group = "day"
phase = "1 deg"
field_offset = "0.01 mT"
field_uncertainty = "0.02 mT"
direction = "both"
[fit]
vary = ["cu.g", "cu.63Cu.A_par", "cu.width.gaussian"]
start = "given"
[fit.limits]
"cu.g_par" = [2.1, 2.4]
[fit.tie]
"cu.width.lorentzian" = "cu.width.gaussian / 2 + 0.01"
"""
_LINES = b'[[lines]]\nfile = "l.csv"\n[fit]\nvary = ["cu.g", "sample.tilt_beta"]\n'
_IONS = (
    b"""[[ion]]
name = "Cu(II)"
source = "band maxima"
covalency = 0.8
measured = "2.05, 2.33(1)"
[ion.orbitals]
"x2-y2" = "15000 cm^-1"
z2 = "7000 cm^-1"
xy = "0 cm^-1"
xz = "-0.06 eV"
yz = "-500 cm^-1"
""",
    b"""[[ion]]
name = "Ni2+"
zeta = "600 cm^-1"
racah = {B = "900 cm^-1", C = "3800 cm^-1"}
space = "term"
[[ion.ligand]]
position = [0, 0, 2.1]
kind = "O"
e_sigma = "4000 cm^-1"
e_pi = "750 cm^-1"
[[ion.ligand]]
angles = "90, 0 deg"
turn = "10 deg"
e_sigma = "4000 cm^-1"
e_pi_x = "750 cm^-1"
""",
    b'[[ion]]\nname = "Co2+"\nracah = {B = "900 cm^-1", C = "3800 cm^-1"}\n'
    b'[ion.octahedral]\nten_Dq = "9000 cm^-1"\nDs = "100 cm^-1"\n',
    b'[[ion]]\nname = "Cu2+"\n[ion.geometry]\nxyz = """\nCu 0 0 0\nO 0 0 2.1\nO1 2 0 0\n"""\n'
    b'[ion.geometry.bonds.O]\ne_sigma = "7000 cm^-1"\n[ion.geometry.bonds.O1]\ne_sigma = "0.5 eV"\n',
    b'[[ion]]\nname = "Er3+"\n[ion.stevens]\nB2_0 = "1 cm^-1"\nB6_m6 = "1e-4 cm^-1"\n',
    b'[[ion]]\nname = "Ce3+"\n[ion.wybourne]\nB4_0 = "-1750 cm^-1"\nB4_4 = "0.1 eV"\n',
)


def _hdf5(**options: object) -> bytes:
    """Return a small NXdata file."""
    buffer = io.BytesIO()
    with h5py.File(buffer, "w", **options) as root:
        root.attrs["default"] = "entry"
        entry = root.create_group("entry")
        entry.attrs["NX_class"], entry.attrs["default"] = "NXentry", "data"
        field = np.linspace(330.0, 340.0, 24)
        write_nxdata(entry.create_group("data"), field, {"signal": np.cos(field)})
        entry.create_dataset("frequency", data=9.4).attrs["units"] = "GHz"
        entry.create_dataset("title", data="a trace")
        entry["link"] = h5py.SoftLink("/entry/data/signal")
        packed = entry.create_dataset("packed", data=np.arange(64.0), compression="gzip", shuffle=True)
        packed.attrs["units"] = ["a", "b"]
    return buffer.getvalue()


def _archive() -> bytes:
    """Return a small archive with everything in it."""
    x = np.linspace(330.0, 340.0, 6)
    used = x > 0
    curves = Curves("t", 9400.0, x, x, x, 0 * x, 0 * x, used, {"r": x}, noise=1.0, scale=2.0)
    column = x[:, None]
    levels = np.arange(6)
    table = PositionTable("l", 9400.0, column, x, x, 0 * x, x, levels, levels + 1, used, np.zeros((2, 3)))
    outcome = Outcome(
        name="seed",
        parameters={"r.g": Value(2.0, 0.1, 0.1, 0.0, varied=True, start=2.1), "r.D": Value(1.0, unit="MHz")},
        quality=Quality(True, True, 1.0, 1.0, 6, 2, 3.0, 4.0),
        correlation_names=("r.g",),
        correlation_matrix=np.eye(1),
        warnings=(Note("code", "text"),),
        curves=(curves,),
        positions=(table,),
        fractions={"r": Value(1.0)},
        budget={"r.g": {"noise": 0.1}},
        provenance={"job": "text", "versions": {"spinfit": "0"}},
    )
    trace = Trace("t", x, x, used, 9400.0, background=x)
    job = Job((Species("r", (Spin(),)),), Sample(), (trace,), (), files={"t.csv": b"1,2"})
    return archive_bytes(outcome, job)


def seeds_of(name: str) -> list[bytes]:
    """Return the files to begin with."""
    if name == "text":
        cut = [file.read_bytes()[:1500].rpartition(b"\n")[0] for file in sorted(DEMOS.glob("*.csv"))]
        comma = b"Feld [G];Signal\n" + b"".join(b"%d,5;%d,25\n" % (3300 + k, k) for k in range(20))
        up = [b"%.1f\t%.1f\n" % (300 + min(k, 60 - k), k % 7) for k in range(60)]
        return [*cut, TRACE, TABLE, comma, b"x y\n" + b"".join(up), TRACE.decode().encode("utf-16")]
    if name == "jcamp":
        demo = (DEMOS / "bottle_chromium.jdx").read_bytes()[:1400].rpartition(b"\n")[0]
        head = (
            b"##TITLE= a\n##JCAMP-DX= 4.24\n##DATA TYPE= EPR\n##XUNITS= GAUSS\n##FIRSTX= 1\n##LASTX= 8\n##NPOINTS= 8\n"
        )
        packed = head + b"##DELTAX= 1\n##YFACTOR= 0.1\n##XYDATA= (X++(Y..Y))\n1A0J0%TK2s\n5B1%j2\n8A9\n##END=\n"
        pairs = head + b"##XYPOINTS= (XY..XY)\n1, 2; 3, 4\n5 6\n7,8\n##END=\n"
        return [demo + b"\n##END=\n", packed, pairs, b"$$ c\n##TITLE= o\n##BLOCKS= 2\n" + packed + pairs + b"##END=\n"]
    if name == "toml":
        models = [_SPECIES + _SWEEP, _PAIR + _SWEEP, _SPECIES + _SWEEP + _CRYSTAL, _SPECIES + _SWEEP + _ALIGNED]
        jobs = [_SPECIES + _JOB, _SPECIES + _CRYSTAL.replace(b"angles", b"#angles") + _LINES]
        field = b'[[species]]\nname = "f"\nion = "Cu2+"\n[species.crystal_field]\nzeta = "829 cm^-1"\n'
        field += b'[species.crystal_field.octahedral]\nten_Dq = "12000 cm^-1"\nDs = "900 cm^-1"\n'
        field += b'Dt = "300 cm^-1"\n[species.width]\ngaussian = "1 mT"\n' + _SWEEP
        return [*models, *jobs, field]
    if name == "ties":
        return [
            b"fe.D / 3\n1",
            b"2*(rad.g + 1)**2 - 3e-2\nrad.amount * 100\n0.1",
            b"-(-(1.5))**-2",
            b"rad.width.lorentzian**0.5",
        ]
    if name == "ligands":
        return list(_IONS)
    if name == "hdf5":
        return [_hdf5(), _hdf5(libver="latest"), _hdf5(libver="v110", track_order=True)]
    archives = Path(__file__).resolve().parents[1] / "tests" / "archives"
    return [_archive(), *(file.read_bytes() for file in sorted(archives.glob("*.h5")))]


_KEYS = (
    "species name ion S g g_tilt D E rhombicity amount populations stevens nucleus isotope element A A_tilt P count "
    "couples_to treat width gaussian lorentzian hidden_hyperfine spread correlation spin exchange between J dipolar "
    "tilt antisymmetric sweep frequency field points temperature microwave modulation detect sample form accuracy "
    "tolerance trace file field_unit angle direction fit_range exclude background baseline columns "
    "field_calibration group phase field_offset field_scale field_uncertainty frequency_uncertainty fit vary start "
    "limits tie lines crystal_field powder crystal aligned solution auto"
).split()
_IONS_KEYS = (
    "ion name source zeta reduction covalency racah slater space measured orbitals octahedral ligand geometry wybourne "
    "stevens position angles kind turn e_sigma e_pi e_pi_x e_pi_y xyz bonds ten_Dq Ds Dt"
).split()
_LABELS = (
    "XYDATA= NPOINTS= FIRSTX= LASTX= DELTAX= YFACTOR= XFACTOR= BLOCKS= END= NTUPLES= XYPOINTS= XUNITS= TITLE="
).split()
DICTIONARIES = {
    "text": [*"field_mT signal ; , nan inf 1e309 - % #".split(), "# frequency 9.4 GHz", "\\x09", "\\xef\\xbb\\xbf"],
    "jcamp": [*(f"##{label}" for label in _LABELS), "(X++(Y..Y))", "(XY..XY)", "##PEAK TABLE=", "$$", "1e999", "?"],
    "toml": [*_KEYS, "[[", "]]", " = ", "nan", "inf", "1e400", "9" * 20, " MHz", " mT", " cm^-1", " deg", " K"],
    "ties": ["fe.D", "rad.g", "fe.g", "**", "1e308", "1e-308", "(", ")", "-", "12", "0"],
    "ligands": [*_IONS_KEYS, "[[ion]]", " cm^-1", "configuration", "level", "Fe3+", "Eu3+", "Gd3+", "U4+", "1e300"],
    "hdf5": ["OHDR", "OCHK", "TREE", "SNOD", "HEAP", "GCOL", "FRHP", "BTHD", "\\xff" * 8],
}
DICTIONARIES["archive"] = DICTIONARIES["hdf5"]
