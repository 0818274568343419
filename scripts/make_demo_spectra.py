"""Make the demonstration traces again: ``python scripts/make_demo_spectra.py [FOLDER]``.

The traces are invented.  What is true of each stands here and nowhere else: the files under
``demo_spectra/`` (traces, and the model files that `spinfit simulate` takes) are written from it.
The jobs, with their rough starts, are written by hand and are left alone.

To the computed spectrum are added what a real bench adds: noise, a drifting baseline, and a field
axis and a frequency that are off by an amount drawn from their stated uncertainties (or, in one
measuring session, by a constant that the field standard of that session reveals).
"""

from __future__ import annotations

import csv
import dataclasses
import io
import sys
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np
from numpy.typing import NDArray

from spinfit.files.job import read_model
from spinfit.spectrum import simulate

SEED = 20260117
# Accuracy of the computed spectra: far below the noise that is added.
TOLERANCE = 1e-4

Array = NDArray[np.float64]
Writer = Callable[[Path, "Demo", Array, Array], None]


@dataclass(frozen=True)
class Demo:
    """One trace: what is true, how it was measured, how its file looks.

    Attributes
    ----------
    model : str
        The model file, with a place for each true value: ``{varnish_g_x}``.
    truth : mapping
        Parameter name -> value in the unit of the model file.
    write : callable
        Writes the file from path, demo, indicated fields (mT) and signal.
    frequency : str
        As the notebook has it; the model file says the same.
    height : float
        Largest value of the signal above its baseline.
    signal_to_noise : float
        Height over the standard deviation of the noise.
    drift : tuple of float
        Baseline in Legendre polynomials over the sweep, relative to the height.
    axis_error : float or None
        mT by which the true field exceeds the indicated one; None draws it from `field_uncertainty`.
    field_uncertainty, frequency_uncertainty : float
        Standard uncertainties, mT and MHz, as the job states them.
    """

    file: str
    model: str
    truth: Mapping[str, float]
    write: Writer
    frequency: str
    height: float = 1000.0
    signal_to_noise: float = 80.0
    drift: tuple[float, ...] = (0.0,)
    axis_error: float | None = None
    field_uncertainty: float = 0.02
    frequency_uncertainty: float = 0.2
    notes: tuple[str, ...] = ()

    @property
    def name(self) -> str:
        """The file's stem."""
        return Path(self.file).stem

    @property
    def model_text(self) -> str:
        """The model file with the true values filled in."""
        return self.model.format_map({key.replace(".", "_"): value for key, value in self.truth.items()})


def write_text(separator: str, decimal: str, head: str, scale: float = 1.0) -> Writer:
    """Return a writer of delimited text; `scale` turns mT into the unit that `head` names."""

    def write(path: Path, demo: Demo, fields: Array, signal: Array) -> None:
        text = io.StringIO()
        for note in demo.notes:
            text.write(f"# {note}\n")
        text.write(head + "\n")
        rows = ([f"{b * scale:.5f}", f"{s:.3f}"] for b, s in zip(fields, signal, strict=True))
        lines = csv.writer(text, delimiter=separator, lineterminator="\n")
        lines.writerows([cell.replace(".", decimal) for cell in row] for row in rows)
        path.write_text(text.getvalue(), encoding="utf-8")

    return write


def write_jcamp(path: Path, demo: Demo, fields: Array, signal: Array) -> None:
    """Write JCAMP-DX 5.01, (X++(Y..Y)) with whole numbers, eight a line."""
    whole = np.rint(signal).astype(int)
    lines = [
        f"##TITLE= {demo.notes[0]}",
        "##JCAMP-DX= 5.01",
        "##DATA TYPE= EMR SPECTRUM",
        "##DATA CLASS= XYDATA",
        "##ORIGIN= demonstration",
        "##OWNER= public domain",
        f"##.MICROWAVE FREQUENCY= {float(demo.frequency.split()[0]):.6f}",
        "##XUNITS= MILLITESLA",
        "##YUNITS= ARBITRARY UNITS",
        "##XFACTOR= 1.0",
        "##YFACTOR= 1.0",
        f"##FIRSTX= {fields[0]:.6f}",
        f"##LASTX= {fields[-1]:.6f}",
        f"##DELTAX= {(fields[-1] - fields[0]) / (len(fields) - 1):.8f}",
        f"##FIRSTY= {whole[0]}",
        f"##NPOINTS= {len(whole)}",
        "##XYDATA= (X++(Y..Y))",
    ]
    for start in range(0, len(whole), 8):
        lines.append(f"{fields[start]:.5f} " + " ".join(str(y) for y in whole[start : start + 8]))
    path.write_text("\n".join([*lines, "##END="]) + "\n", encoding="utf-8")


def write_hdf5(path: Path, demo: Demo, fields: Array, signal: Array) -> None:
    """Write a NeXus file: an entry whose default plottable group holds field and signal."""
    with h5py.File(path, "w") as file:
        file.attrs["default"] = "entry"
        entry = file.create_group("entry")
        entry.attrs["NX_class"] = "NXentry"
        entry.attrs["default"] = "data"
        data = entry.create_group("data")
        data.attrs["NX_class"] = "NXdata"
        data.attrs["signal"] = "signal"
        data.attrs["axes"] = "field"
        # Single precision, as an acquisition program stores it, halves the file.
        data.create_dataset("field", data=np.round(fields, 5)).attrs["units"] = "mT"
        data.create_dataset("signal", data=signal.astype(np.float32))
        value, unit = demo.frequency.split()
        data.create_dataset("frequency", data=float(value)).attrs["units"] = unit


DEMOS = (
    Demo(
        file="varnish_radical.csv",
        notes=("radical in an aged varnish, Q band, 295 K", "frequency 34.05210 GHz"),
        frequency="34.0521 GHz",
        truth={
            "varnish.g_x": 2.00655,
            "varnish.g_y": 2.00418,
            "varnish.g_z": 2.00217,
            "varnish.width.gaussian": 0.32,
            "varnish.width.lorentzian": 0.11,
        },
        model="""\
[sweep]
frequency = "34.0521 GHz"
field = "1206, 1222 mT"
points = 1201
modulation = "0.1 mT"

[[species]]
name = "varnish"
S = "1/2"
g = [{varnish_g_x}, {varnish_g_y}, {varnish_g_z}]
[species.width]
gaussian = "{varnish_width_gaussian} mT"
lorentzian = "{varnish_width_lorentzian} mT"
""",
        write=write_text(";", ",", "field/G;signal", scale=10.0),
        signal_to_noise=60.0,
        drift=(0.12, -0.05),
    ),
    Demo(
        file="session_standard.csv",
        notes=("field standard, g = 2.0036(2), same session as bottle_chromium", "frequency 9.43120 GHz"),
        frequency="9.4312 GHz",
        truth={"standard.g": 2.0036, "standard.width.lorentzian": 0.16},
        model="""\
[sweep]
frequency = "9.4312 GHz"
field = "334, 338.5 mT"
points = 601
modulation = "0.02 mT"

[[species]]
name = "standard"
S = "1/2"
g = {standard_g}
[species.width]
lorentzian = "{standard_width_lorentzian} mT"
""",
        write=write_text("\t", ".", "field/mT\tsignal"),
        drift=(-0.04, 0.02),
        axis_error=0.38,
    ),
    Demo(
        file="bottle_chromium.jdx",
        notes=("green bottle glass, Cr(III), 90 K",),
        frequency="9.4312 GHz",
        truth={
            "cr.g": 1.9746,
            "cr.D": 1180.0,
            "cr.E": 165.0,
            "cr.width.gaussian": 2.4,
        },
        model="""\
[sweep]
frequency = "9.4312 GHz"
field = "140, 480 mT"
points = 1501
temperature = "90 K"
modulation = "0.5 mT"

[[species]]
name = "cr"
ion = "Cr3+"
S = "3/2"
g = {cr_g}
D = "{cr_D} MHz"
E = "{cr_E} MHz"
[species.width]
gaussian = "{cr_width_gaussian} mT"
""",
        write=write_jcamp,
        height=20000.0,
        drift=(0.1, 0.06),
        axis_error=0.38,
    ),
    Demo(
        file="honey_glass_iron.csv",
        notes=(
            "honey-coloured glass, Fe(III), with a radical line on top",
            "frequency 9.42660 GHz",
            "temperature 15 K",
        ),
        frequency="9.4266 GHz",
        truth={
            "fe.D": 0.46,
            "fe.rhombicity": 0.283,
            "fe.width.gaussian": 3.6,
            "rad.g": 2.00473,
            "rad.amount": 0.02,
            "rad.width.lorentzian": 0.7,
        },
        model="""\
[sweep]
frequency = "9.4266 GHz"
field = "50, 400 mT"
points = 1801
temperature = "15 K"
modulation = "0.2 mT"

[[species]]
name = "fe"
ion = "Fe3+"
S = "5/2"
g = 2.003
D = "{fe_D} cm^-1"
rhombicity = {fe_rhombicity}
[species.width]
gaussian = "{fe_width_gaussian} mT"

[[species]]
name = "rad"
S = "1/2"
g = {rad_g}
amount = {rad_amount}
[species.width]
lorentzian = "{rad_width_lorentzian} mT"
""",
        write=write_text(",", ".", "field/mT,signal"),
        signal_to_noise=150.0,
        drift=(0.05, -0.03),
    ),
    Demo(
        file="pigment_triplet.h5",
        frequency="9.3874 GHz",
        truth={
            "dye.g": 2.00312,
            "dye.D": 2140.0,
            "dye.E": -315.0,
            "dye.width.gaussian": 1.5,
        },
        model="""\
[sweep]
frequency = "9.3874 GHz"
field = "130, 450 mT"
points = 2001

[[species]]
name = "dye"
S = "1"
g = {dye_g}
D = "{dye_D} MHz"
E = "{dye_E} MHz"
[species.width]
gaussian = "{dye_width_gaussian} mT"
""",
        write=write_hdf5,
        height=1.0,
        signal_to_noise=70.0,
        drift=(-0.03, 0.08, 0.04),
    ),
)


def computed(demo: Demo, model: Path, axis_error: float, frequency_error: float) -> tuple[Array, Array]:
    """Return the indicated fields (mT) and the noiseless signal, both of shape (points,).

    The model's window and frequency are what the instruments indicate; the spectrum is computed at
    what they really were.
    """
    given = read_model(model)
    first, last = given.sweep.field
    true = dataclasses.replace(
        given.sweep,
        field=(first + axis_error, last + axis_error),
        frequency=given.sweep.frequency + frequency_error,
    )
    spectrum = simulate(given.species, true, given.sample, tolerance=TOLERANCE)
    return given.sweep.fields, demo.height * spectrum.signal / np.abs(spectrum.signal).max()


def make(demo: Demo, folder: Path, rng: np.random.Generator) -> None:
    """Write one trace and its model file."""
    model = folder / "models" / f"{demo.name}.toml"
    model.parent.mkdir(parents=True, exist_ok=True)
    model.write_text(demo.model_text, encoding="utf-8")
    drawn = rng.normal(0.0, demo.field_uncertainty)
    axis_error = drawn if demo.axis_error is None else demo.axis_error
    frequency_error = rng.normal(0.0, demo.frequency_uncertainty)
    fields, signal = computed(demo, model, axis_error, frequency_error)
    baseline = demo.height * np.polynomial.legendre.legval(np.linspace(-1, 1, len(fields)), demo.drift)
    noise = rng.normal(0.0, demo.height / demo.signal_to_noise, len(fields))
    demo.write(folder / demo.file, demo, fields, signal + baseline + noise)


def main(folder: Path) -> None:
    """Write every trace and every model file into the folder."""
    # One stream a trace, so that a new trace leaves the others as they are.
    for demo in DEMOS:
        make(demo, folder, np.random.default_rng([SEED, *demo.name.encode()]))


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).resolve().parents[1] / "demo_spectra")
