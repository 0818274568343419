"""Every key that a model, job or crystal-field file may hold: what stands there, its default, its meaning.

The readers know their keys from these tables and from nowhere else, and ``docs/keys.md`` is written from them
(``scripts/make_pages.py``), so that neither can fall behind the other.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

from spinfit.fitting.data import LOSSES
from spinfit.ion.crystal_field import parameter_name
from spinfit.ion.model import SPACES
from spinfit.ion.orbitals import REAL_ORBITALS
from spinfit.sweep import DETECT, FORMS, MICROWAVE
from spinfit.units import UNITS

TREATMENTS = ("auto", "exact", "first order", "second order")
DIRECTIONS = ("both", "up", "down")
FIELD_UNITS = (*UNITS["field"], *UNITS["voltage"])
SMOOTH = ("smooth", "asymmetric")
STARTS = ("given", "near", "auto")


@dataclass(frozen=True)
class Key:
    """One key.

    Attributes
    ----------
    value : str
        What stands there, for people: "3 angles", "number".
    meaning : str
        One line.
    example : str
        As it stands in a file right of the equals sign; "" for a table of its own.
    default : str
        What a missing key means, as it would stand in a file; "" where nothing that could be written means the same.
    without : str
        What a missing key means, in words, before the `default` or where there is none; "" with neither: it is needed.
    forms : tuple of str
        Of ``[sample]``: the forms with which the key goes; () for all.
    series : str
        What keys that differ by their numbers are together; "" for a key of its own.
    """

    value: str
    meaning: str
    example: str = ""
    default: str = ""
    without: str = ""
    forms: tuple[str, ...] = ()
    series: str = ""


Keys = Mapping[str, Key]


def words(known: Iterable[str]) -> str:
    """Return the words of a choice, quoted."""
    return ", ".join(f'"{word}"' for word in known)


def _keys(*tables: Keys, **own: Key) -> Keys:
    """Return one table that nobody can change by mistake, its keys in the order given."""
    joined: dict[str, Key] = {}
    for table in (*tables, own):
        joined.update(table)
    return MappingProxyType(joined)


_TENSOR = "1, 2 or 3 energies"
_NO_TILT = '"0, 0, 0 deg"'

# Files ----------------------------------------------------------------------------------------------

MODEL = _keys(
    species=Key("tables `[[species]]`", "what is paramagnetic"),
    sweep=Key("table `[sweep]`", "how the spectrum is taken"),
    sample=Key("table `[sample]`", "how the species are oriented", without="a powder"),
    accuracy=Key("table `[accuracy]`", "how exact spectra are", without="`tolerance = 1e-3`"),
)
JOB = _keys(
    {key: MODEL[key] for key in ("species", "sample", "accuracy")},
    trace=Key("tables `[[trace]]`", "measured sweeps", without="`[[lines]]` must be there"),
    lines=Key("tables `[[lines]]`", "tables of line positions of a crystal", without="`[[trace]]` must be there"),
    fit=Key("table `[fit]`", "what to vary, and how"),
)

# Conditions, sample, accuracy -----------------------------------------------------------------------

SWEEP = _keys(
    frequency=Key("frequency", "of the microwaves", '"9.5 GHz"'),
    field=Key("2 fields", "first and last field of the sweep", '"260, 360 mT"'),
    points=Key("whole number, 2 to 10000000", "evenly spaced fields of the spectrum", "2048", "1024"),
    temperature=Key("temperature", "populates the levels", '"77 K"', without="all pairs of levels count alike"),
    microwave=Key(words(MICROWAVE), "microwave field against the static one", '"parallel"', '"perpendicular"'),
    modulation=Key("field", "modulation, peak to peak", '"0.1 mT"', '"0 mT"'),
    detect=Key(words(DETECT), "what is recorded", '"absorption"', '"derivative"'),
    phase=Key("angle", "of the microwaves: mixes dispersion into the absorption", '"5 deg"', '"0 deg"'),
)
SAMPLE = _keys(
    form=Key(words(FORMS), "how the species are oriented", '"crystal"', '"powder"'),
    axis=Key(
        "3 numbers", "axis about which the crystal is turned, crystal frame", "[0, 1, 0]", "[0, 0, 1]", "", FORMS[1:2]
    ),
    **{"from": Key("3 numbers", "direction of the field at angle 0", "[1, 0, 1]", "[1, 0, 0]", "", FORMS[1:2])},
    angles=Key("angles", "of a model: one spectrum for each", '"0, 5, 10 deg"', '"0 deg"', "", FORMS[1:2]),
    angle_zero=Key(
        "angle", "reading of the goniometer with the field along `from`", '"2 deg"', '"0 deg"', "", FORMS[1:2]
    ),
    microwave_axis=Key(
        "3 numbers", "direction of the microwave field", "[0, 0, 1]", "", "the rotation axis", FORMS[1:2]
    ),
    tilt=Key(
        "3 angles", "carries the crystal axes into the molecular axes", '"10, 20, 0 deg"', _NO_TILT, "", FORMS[1:2]
    ),
    point_group=Key("short symbol of a point group", "its operations make the sites", '"4/m"', '"1"', "", FORMS[1:2]),
    director=Key("3 numbers", "molecular axis that orders", "[1, 0, 0]", "[0, 0, 1]", "", FORMS[2:3]),
    order=Key("number, -0.5 to 1", "order parameter ⟨P₂⟩", "0.6", "", "", FORMS[2:3]),
    angle=Key("angle", "from the sample's director to the field", '"30 deg"', '"0 deg"', "", FORMS[2:3]),
)
ACCURACY = _keys(
    tolerance=Key(
        "number, 1e-8 to 0.5",
        "largest error of a spectrum, relative to its largest value in the window",
        "1e-4",
        "1e-3",
    )
)

# Species --------------------------------------------------------------------------------------------

SPIN = _keys(
    S=Key("multiple of 1/2, as a text or number", "spin, or J of a whole multiplet", '"5/2"'),
    g=Key("1, 2 or 3 numbers", 'g-tensor; may be missing with `start = "auto"`', "[2.04, 2.06, 2.26]"),
    g_tilt=Key("3 angles", "carries the molecular axes into those of g", '"0, 25, 0 deg"', _NO_TILT),
    D=Key("energy", "axial zero-field splitting", '"0.30 cm^-1"', '"0 MHz"'),
    E=Key("energy", "rhombic zero-field splitting", '"300 MHz"', '"0 MHz"'),
    rhombicity=Key("number", "E/D, in place of `E`", "0.1", without="`E` counts"),
    D_tilt=Key("3 angles", "carries the molecular axes into those of D", '"0, 25, 0 deg"', _NO_TILT),
    stevens=Key("table", "Stevens operators, see `[species.stevens]`", '{B4_0 = "5.1 MHz"}', without="none"),
)
SPECIES = _keys(
    dict(
        name=Key(
            "name", "first part of its parameters' names", '"cu"', without='"species"; needed with several species'
        ),
        ion=Key("ion", "for starts and the comparison with the free ion", '"Cu2+"', without="no comparison"),
        amount=Key("number, not negative", "relative number of spins", "0.5", "1.0"),
        populations=Key(
            "list of numbers, one a sublevel",
            "of the sublevels at zero field, low to high, in place of a temperature",
            "[0.2, 0.1, 0.1, 0.2, 0.2, 0.2]",
            without="`temperature` counts",
        ),
    ),
    SPIN,
    crystal_field=Key("table `[species.crystal_field]`", "in place of g, D and E", without="g, D and E count"),
    spin=Key("tables `[[species.spin]]`", "coupled spins, in place of S, g, D, ...", without="one spin"),
    exchange=Key("tables `[[species.exchange]]`", "couplings of pairs of spins", without="none"),
    nucleus=Key("tables `[[species.nucleus]]`", "nuclei with a spin", without="none"),
    width=Key("table `[species.width]`", 'what broadens every line; may be missing with `start = "auto"`'),
    spread=Key("table `[species.spread]`", "distributions across the sample", without="none"),
)
STEVENS = _keys(
    {
        parameter_name(k, q): Key("energy", "coefficient of O_k^q", '"5.1 MHz"', without="0", series=f"B{k}")
        for k in (2, 4, 6)
        for q in range(-k, k + 1)
    }
)
NUCLEUS = _keys(
    isotope=Key("isotope", "one isotope", '"63Cu"', without="`element` is needed"),
    element=Key("element", "all isotopes in natural abundance", '"Cu"', without="`isotope` is needed"),
    name=Key("name", "its part of the parameters' names", '"copper"', without="the isotope or element"),
    A=Key(_TENSOR, "hyperfine tensor", '"-35, -60, -540 MHz"'),
    A_tilt=Key("3 angles", "carries the molecular axes into those of A", '"0, 25, 0 deg"', _NO_TILT),
    P=Key(_TENSOR, "quadrupole tensor, traceless", '"-6, -4, 10 MHz"', '"0, 0, 0 MHz"'),
    P_tilt=Key("3 angles", "carries the molecular axes into those of P", '"0, 25, 0 deg"', _NO_TILT),
    count=Key("whole number, 1 to 1000", "equivalent nuclei", "2", "1"),
    couples_to=Key("whole number", "the spin it couples to, counted from 1", "1", "1"),
    treat=Key(words(TREATMENTS), "how it is computed", '"second order"', '"auto"'),
)
EXCHANGE = _keys(
    between=Key("2 whole numbers", "the two spins, counted from 1", "[1, 2]"),
    J=Key("energy", "J S₁·S₂, positive is antiferromagnetic", '"60 cm^-1"', '"0 MHz"'),
    dipolar=Key(_TENSOR, "traceless coupling", '"900, 900, -1800 MHz"', '"0, 0, 0 MHz"'),
    tilt=Key("3 angles", "with `dipolar`: carries the molecular axes into its own", '"0, 35, 0 deg"', _NO_TILT),
    antisymmetric=Key("3 energies", "d of d·(S₁ × S₂), molecular axes", '"0, 0, 30 MHz"', '"0, 0, 0 MHz"'),
)
WIDTH = _keys(
    gaussian=Key("field", "Gaussian part, peak to peak of the derivative", '"0.8 mT"', '"0 mT"'),
    lorentzian=Key("field", "Lorentzian part, peak to peak of the derivative", '"0.2 mT"', '"0 mT"'),
    hidden_hyperfine=Key(
        _TENSOR, "hyperfine lines not resolved, FWHM, along the axes of g", '"20, 20, 40 MHz"', '"0 MHz"'
    ),
    a=Key("field", "solutions: width a + b m + c m², peak to peak", '"0.2 mT"', without="not used"),
    b=Key("field", "solutions, with `a`", '"0.01 mT"', without="0"),
    c=Key("field", "solutions, with `a`", '"0.02 mT"', without="0"),
)
SPREAD = _keys(
    g=Key("1, 2 or 3 numbers", "of g, FWHM", "[0.005, 0.005, 0.02]", "0.0"),
    D=Key("energy", "of D, FWHM", '"300 MHz"', '"0 MHz"'),
    E=Key("energy", "of E, FWHM", '"100 MHz"', '"0 MHz"'),
    A=Key(_TENSOR, "of A of the nuclei, FWHM", '"5, 5, 15 MHz"', '"0 MHz"'),
    tilt=Key("angle", "mosaic of a crystal, FWHM about each of three axes", '"0.5 deg"', '"0 deg"'),
    correlation=Key("table", "correlations of spreads, -1 to 1", "{g_A = 0.5}", without="none"),
)
CORRELATION = _keys(
    g_A=Key("number, -1 to 1", "of the spreads of g and A", "0.5", "0.0"),
    D_E=Key("number, -1 to 1", "of the spreads of D and E", "-0.2", "0.0"),
)

# Crystal fields -------------------------------------------------------------------------------------

FIELD_FORMS = _keys(
    orbitals=Key("table", "energies of the real orbitals", without="another form"),
    octahedral=Key("table", "d shells: 10Dq, Ds, Dt", without="another form"),
    ligand=Key("tables", "angular overlap: ligands one by one", without="another form"),
    geometry=Key("table", "angular overlap: coordinates of the atoms", without="another form"),
    wybourne=Key("table", "Wybourne coefficients", without="another form"),
    stevens=Key("table", "Stevens coefficients", without="another form"),
)
FIELD = _keys(
    FIELD_FORMS,
    zeta=Key("energy", "spin-orbit constant of the shell", '"829 cm^-1"', without="from the table of constants"),
    reduction=Key("number, above 0, up to 2", "k of k L in the Zeeman operator", "0.85", "1.0"),
    covalency=Key(
        "number, above 0, up to 2", "k of L and of zeta, in place of `reduction`", "0.85", without="not used"
    ),
    racah=Key(
        "table", "repulsion of d electrons", '{B = "900 cm^-1", C = "3800 cm^-1"}', without="see [the ion](ion.md)"
    ),
    slater=Key("table", "repulsion of the electrons", without="see [the ion](ion.md)"),
    space=Key(words(SPACES), "states that are computed", '"term"', without="see [the ion](ion.md)"),
    source=Key("text", "where the numbers come from, printed with every result", '"band maxima"', without="the form"),
)
ION_OWN = _keys(
    name=Key("ion", "which ion", '"Cu2+"'),
    measured=Key("text", "measured g to compare with", '"2.05, 2.06, 2.33(1)"', without="no comparison"),
)
ION = _keys(ION_OWN, FIELD)
ORBITALS = {
    shell: _keys({name: Key("energy", "of this orbital", '"1000 cm^-1"', series=f"l = {shell}") for name in names})
    for shell, names in REAL_ORBITALS.items()
}
OCTAHEDRAL = _keys(
    ten_Dq=Key("energy", "octahedral splitting", '"12000 cm^-1"'),
    Ds=Key("energy", "tetragonal splitting of rank 2", '"500 cm^-1"', '"0 MHz"'),
    Dt=Key("energy", "tetragonal splitting of rank 4", '"200 cm^-1"', '"0 MHz"'),
)
BOND = _keys(
    e_sigma=Key("energy", "σ antibonding", '"7000 cm^-1"'),
    e_pi=Key("energy", "π antibonding, alike about the bond", '"1000 cm^-1"', '"0 MHz"'),
    e_pi_x=Key("energy", "π along x of the ligand, in place of `e_pi`", '"1000 cm^-1"', '"0 MHz"'),
    e_pi_y=Key("energy", "π along y of the ligand, in place of `e_pi`", '"500 cm^-1"', '"0 MHz"'),
)
_PLACE = _keys(
    position=Key("3 numbers", "from the metal; only the direction counts", "[0, 0, 2.1]", without="`angles` is needed"),
    angles=Key("2 angles", "theta, phi, in place of `position`", '"90, 45 deg"', without="`position` is needed"),
    kind=Key("name", "ligands of one kind share their parameters", '"O"', without="its own kind"),
    turn=Key("angle", "of the ligand's x about the bond", '"30 deg"', '"0 deg"'),
)
LIGAND = _keys(_PLACE, BOND)
GEOMETRY = _keys(
    xyz=Key("text", "lines of symbol x y z, the metal first", '"Cu 0 0 0\\nO 0 0 2.1"'),
    bonds=Key("table", "for each symbol `e_sigma`, `e_pi`, ...", '{O = {e_sigma = "7000 cm^-1"}}'),
)
RACAH = _keys(
    B=Key("energy", "Racah's B", '"900 cm^-1"'),
    C=Key("energy", "Racah's C", '"3800 cm^-1"'),
)
SLATER = {
    shell: _keys({f"F{k}": Key("energy", f"Slater's F^{k}", '"60000 cm^-1"') for k in range(2, 2 * shell + 1, 2)})
    for shell in REAL_ORBITALS
}
COEFFICIENTS = {
    shell: _keys(
        {
            parameter_name(k, q): Key(
                "energy", "coefficient of rank k and order q", '"-1750 cm^-1"', without="0", series=f"B{k}"
            )
            for k in range(2, 2 * shell + 1, 2)
            for q in range(-k, k + 1)
        }
    )
    for shell in REAL_ORBITALS
}
ANY_ORBITAL, ANY_SLATER, ANY_COEFFICIENT = (_keys(*tables.values()) for tables in (ORBITALS, SLATER, COEFFICIENTS))
"""Those of every shell."""

# Measured data --------------------------------------------------------------------------------------

_HEADER = "the file's header"
LINES = _keys(
    name=Key("name", "first part of its parameters' names", '"kiln_07"', without="the file's stem"),
    file=Key("path", "data file, relative to the job", '"kiln-07.csv"'),
    frequency=Key("frequency", "of the microwaves", '"9.4321 GHz"', without=f"{_HEADER}; needed there or here"),
    temperature=Key("temperature", "populates the levels", '"120 K"', without=f"{_HEADER}, else all pairs count alike"),
    microwave=Key(words(MICROWAVE), "microwave field against the static one", '"parallel"', '"perpendicular"', _HEADER),
    axis=Key("3 numbers", "crystals: axis of this rotation", "[0, 1, 0]", without="the sample's"),
    **{"from": Key("3 numbers", "crystals: field at angle 0 of this rotation", "[1, 0, 1]", without="the sample's")},
    group=Key(
        "name, or list of names", "shares its corrections with others of the group", '"day_2"', without="its own"
    ),
    field_offset=Key("field", "true field = field × `field_scale` + `field_offset`", '"0.05 mT"', '"0 mT"'),
    field_scale=Key("number, positive", "see `field_offset`", "1.0001", "1.0"),
    field_uncertainty=Key("field", "standard uncertainty of the axis' shift; goes into every g", '"0.02 mT"', '"0 mT"'),
    frequency_uncertainty=Key("frequency", "standard uncertainty; goes into every g", '"0.2 MHz"', '"0 MHz"'),
    angle_uncertainty=Key("angle", "standard uncertainty of each reading of an angle", '"1 deg"', '"0 deg"'),
)
TRACE = _keys(
    LINES,
    field_unit=Key(
        words(FIELD_UNITS), "unit of the field's column", '"mT"', without=f"{_HEADER}; needed there or here"
    ),
    modulation=Key("field", "modulation, peak to peak", '"0.2 mT"', '"0 mT"', _HEADER),
    detect=Key(words(DETECT), "what is recorded", '"absorption"', '"derivative"', _HEADER),
    angle=Key("angle", "crystal and aligned samples", '"140 deg"', without=f"{_HEADER}; needed for crystals"),
    direction=Key(words(DIRECTIONS), "which part of an up-and-down sweep", '"up"', '"both"'),
    fit_range=Key("2 fields", "what is fitted", '"332, 340 mT"', without="all of it"),
    exclude=Key("list of texts, 2 fields each", "stretches that are left out", '["335, 336 mT"]', "[]"),
    background=Key(
        "path", "trace without sample; its scale is solved with the baseline", '"empty-tube.csv"', without="none"
    ),
    baseline=Key(f'whole number, 0 to 20, "none", {words(SMOOTH)}', "order of the polynomial, or kind", "2", "1"),
    smoothness=Key("field", "smooth baselines: period of which half is taken", '"40 mT"', without="the fitted range"),
    asymmetry=Key("number, 0.001 to 0.5", "asymmetric baselines: weight of points above", "0.1", "0.05"),
    columns=Key("table", "columns of the file, counted from 1", "{field = 1, signal = 2}", without="found by headings"),
    field_calibration=Key("table", "field from a voltage", '{slope = "216 mT/V", zero = "3 mT"}', without="none"),
    phase=Key("angle", "of the microwaves", '"5 deg"', '"0 deg"'),
)
COLUMNS = _keys(
    field=Key("whole number", "the field's column", "1", without="found by its heading"),
    signal=Key("whole number", "the signal's column", "2", without="found by its heading"),
)
CALIBRATION = _keys(
    slope=Key("field per voltage", "field over voltage", '"216 mT/V"'),
    zero=Key("field", "field at 0 V", '"3 mT"', '"0 mT"'),
)

# Fit ------------------------------------------------------------------------------------------------

FIT = _keys(
    vary=Key("list of texts", "parameters and groups of them", '["r.g", "r.width.gaussian"]'),
    start=Key(words(STARTS), "start as given; as given and near the minimum; guessed", '"auto"', '"given"'),
    limits=Key("table", "name = [low, high], or a text with a unit", '{"r.g_z" = [1.9, 2.4]}', "{}"),
    tie=Key(
        "table", "name = arithmetic on names of parameters", '{"r.width.lorentzian" = "r.width.gaussian / 2"}', "{}"
    ),
    loss=Key(words(LOSSES), "how points far off count, see [options](fit_options.md)", '"huber"', '"linear"'),
    loss_scale=Key(
        "number, positive",
        "standard deviations at which the loss bends",
        "1.345",
        without="see [options](fit_options.md)",
    ),
)
