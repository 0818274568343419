#!/usr/bin/env python
"""Write spinfit/data/isotopes.csv from the `mendeleev` package (needed here only, `pip install mendeleev`).

All isotopes with a natural abundance, and a few long-lived ones that are used in EPR.  The source
stores single-precision numbers; they are written with the digits that single precision holds.
"""

from __future__ import annotations

import csv
import os
from fractions import Fraction
from importlib.metadata import version
from pathlib import Path

import numpy as np
from mendeleev import get_all_elements

TARGET = Path(__file__).resolve().parent.parent / "spinfit" / "data" / "isotopes.csv"
LONG_LIVED = (
    "3H 14C 22Na 26Al 36Cl 41Ca 53Mn 54Mn 57Co 60Co 63Ni 65Zn 79Se 85Kr 90Sr 99Tc 129I 135Cs 137Cs 147Pm 151Sm "
    "152Eu 154Eu 210Pb 226Ra 227Ac 229Th 233U 237Np 239Pu 241Pu 241Am 243Am"
).split()
# Misprints of the source, found by comparing it with published tables: (isotope, column) -> value.
CORRECTIONS = {
    # The moment of 109Ag is negative like that of 107Ag: N. J. Stone, Table of recommended nuclear magnetic dipole
    # moments, INDC(NDS)-0794 (2019); R. K. Harris et al., Pure Appl. Chem. 73, 1795 (2001).
    ("109Ag", "g_n"): "-0.26102",
    # A decimal place was lost in four quadrupole moments: P. Pyykko, Mol. Phys. 116, 1328 (2018).
    ("33S", "quadrupole"): "-0.0694",
    ("39K", "quadrupole"): "0.0603",
    ("40K", "quadrupole"): "-0.075",
    ("41K", "quadrupole"): "0.0734",
}
HEADER = f"""\
# Nuclear data: spin, natural abundance (fraction), nuclear g factor g_n = moment / (nuclear magneton x I), signed,
# and spectroscopic electric quadrupole moment (barn); an empty field is a value that is not known.
# Source: mendeleev {version("mendeleev")}, tables of recommended nuclear moments and isotopic abundances therein.
# Corrected here: {", ".join(f"{column} of {isotope}" for isotope, column in CORRECTIONS)}
# Made by scripts/make_isotopes.py; do not edit.
"""


def digits(value: float | None) -> str:
    """Write a single-precision number without digits it does not have."""
    return "" if value is None else str(np.float32(value))


def rows() -> list[dict[str, str]]:
    """Collect one row for each isotope, ordered by Z and A."""
    table = []
    for element in get_all_elements():
        for isotope in sorted(element.isotopes, key=lambda one: one.mass_number):
            name = f"{isotope.mass_number}{element.symbol}"
            if isotope.abundance is None and name not in LONG_LIVED or isotope.spin is None:
                continue
            spin = float(Fraction(isotope.spin))
            row = {
                "isotope": name,
                "element": element.symbol,
                "Z": str(element.atomic_number),
                "A": str(isotope.mass_number),
                "spin": f"{spin:g}",
                "abundance": f"{(isotope.abundance or 0) / 100:.8g}",
                "g_n": digits(isotope.g_factor) if spin else "0",
                "quadrupole": digits(isotope.quadrupole_moment) if spin >= 1 else "0",
            }
            row.update({column: value for (of, column), value in CORRECTIONS.items() if of == name})
            table.append(row)
    return table


def main() -> None:
    """Write the table beside its place and move it there whole."""
    table = rows()
    TARGET.parent.mkdir(exist_ok=True)
    partial = TARGET.with_suffix(".partial")
    with partial.open("w", encoding="utf-8", newline="") as stream:
        stream.write(HEADER)
        writer = csv.DictWriter(stream, fieldnames=list(table[0]), lineterminator="\n")
        writer.writeheader()
        writer.writerows(table)
    os.replace(partial, TARGET)
    print(f"{len(table)} isotopes written to {TARGET}")


if __name__ == "__main__":
    main()
