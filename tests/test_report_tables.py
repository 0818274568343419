"""Tables on screen, letter for letter: a table that shifts by a blank is seen here."""

from __future__ import annotations

import re

import numpy as np
import pytest
from outcomes import curves, outcome
from scipy import constants

from spinfit.fitting.outcome import Quality, Value
from spinfit.report.effective import effective_rows
from spinfit.report.tables import (
    aligned,
    correlation_lines,
    outcome_lines,
    parameter_table,
    quality_lines,
    strong_correlations,
    table,
    wrapped,
)

EXPECTED = """\
kiln-07: kiln_07 (9.4321 GHz)

parameter                    value  unit  noise part  field part  start
-------------------  -------------  ----  ----------  ----------  -----  --------
cu.g_perp               2.0412(3)            0.00010     0.00030   2.05
cu.g_par                2.2620(15)            0.0014     0.00040   2.25
cu.63Cu.A_perp        -35.2(1.2)    MHz          1.2           0    -30
cu.63Cu.A_par        -540(2)        MHz          2.3        0.10   -500
cu.width.gaussian       0.8         mT             -           -      1  at limit
cu.width.lorentzian     0.800(10)   mT         0.010           0      1  tied
radical.amount          0.100(10)              0.010           0    0.2

in other units         value  unit
--------------  ------------  -----
cu.63Cu.A_perp   -0.00117(4)  cm^-1
cu.63Cu.A_perp   -1.23(4)     mT
cu.63Cu.A_par    -0.01802(8)  cm^-1
cu.63Cu.A_par   -17.07(7)     mT

species  fraction of spins
-------  -----------------
cu               0.909(10)
radical          0.091(10)

held fixed: radical.g = 2.0036

converged; 760 points, 11 free parameters, reduced chi-square 1.02, noise 80, AICc 123.4, BIC 150

correlations above 0.9 (these values move together):
  cu.g_perp and cu.63Cu.A_par: -0.950

warning: cu.width.gaussian ends at its lower limit of 0.8 mT."""


def test_everything_a_person_sees_after_a_fit():
    shown = outcome_lines(outcome())
    assert shown == EXPECTED
    assert shown.isascii()  # any terminal can show it
    assert max(map(len, shown.splitlines())) <= 100


def test_decimal_points_stand_below_each_other():
    lines = parameter_table(outcome()).splitlines()[2:]
    assert lines[0].index("2.0412(3)") == lines[1].index("2.2620(15)")
    numbers = ["2.04(3)", "-512(2)", "7", "1.2e-05", "3e+08"]
    right = [text.rjust(20) for text in aligned(numbers)]
    assert [text.strip() for text in right] == numbers
    # The digit before the point, the parenthesis, the exponent or the end.
    assert {re.search(r"\d(?=[.(e ]|$)", text).start() for text in right} == {13}  # ".2e-05" is six wide


def test_table():
    assert table(["a", "bb"], [["x", "1"], ["long", "22"]]) == "a     bb\n----  --\nx      1\nlong  22"


def test_other_units_are_codata():
    """h c and g muB from scipy.constants, worked out here."""
    rows = {(row["name"], row["unit"]): row for row in effective_rows(outcome())}
    joule = constants.h * 540.3e6
    assert rows["cu.63Cu.A_par", "cm^-1"]["value"] == pytest.approx(-joule / (constants.h * constants.c * 100))
    mu_b = constants.physical_constants["Bohr magneton"][0]
    assert rows["cu.63Cu.A_par", "mT"]["value"] == pytest.approx(-joule / (2.262 * mu_b) * 1e3)
    assert rows["cu.63Cu.A_perp", "mT"]["value"] == pytest.approx(-constants.h * 35.2e6 / (2.04123 * mu_b) * 1e3)
    ratio = rows["cu.63Cu.A_par", "cm^-1"]["uncertainty"] / abs(rows["cu.63Cu.A_par", "cm^-1"]["value"])
    assert ratio == pytest.approx(2.3 / 540.3)


def test_units_the_job_used_are_not_repeated():
    values = {"t.g": Value(2.0), "t.D": Value(0.1, 0.001, unit="cm^-1", varied=True)}
    assert [row["unit"] for row in effective_rows(outcome(parameters=values))] == ["MHz", "mT"]
    fixed = {"t.g": Value(2.0), "t.D": Value(0.1, unit="cm^-1")}
    assert effective_rows(outcome(parameters=fixed)) == []


def test_correlations_are_listed_strongest_first_and_only_strong_ones():
    matrix = np.array([[1, 0.91, 0.5], [0.91, 1, -0.99], [0.5, -0.99, 1]])
    found = outcome(correlation_names=("a", "b", "c"), correlation_matrix=matrix)
    assert strong_correlations(found) == [("b", "c", -0.99), ("a", "b", 0.91)]
    assert correlation_lines(outcome(correlation_names=(), correlation_matrix=np.zeros((0, 0)))) == ""


def test_a_fit_that_is_not_good_says_so_first():
    bad = outcome(quality=Quality(False, True, 7.0, 80.0, 760, 11, 1.0, 1.0), message="used up")
    assert quality_lines(bad).startswith("NOT converged")
    assert "the optimiser says: used up" in quality_lines(bad)
    stopped = outcome(quality=Quality(False, False, 7.0, 80.0, 760, 11, 1.0, 1.0))
    assert quality_lines(stopped).startswith("STOPPED before the end")


def test_nothing_varied_and_many_traces():
    assert parameter_table(outcome(parameters={"a.g": Value(2.0)})) == "no parameter was varied"
    many = outcome(*[curves(f"t{k}") for k in range(9)])
    assert "t5 (9.4321 GHz) and 3 more" in outcome_lines(many).splitlines()[0]


def test_wrapped_breaks_at_words():
    assert wrapped("one  two\nthree", width=8) == "one two\n  three"
