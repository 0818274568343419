"""Files of an outcome: JSON without NaN, csv that adds up, HDF5 that a generic viewer opens."""

from __future__ import annotations

import csv
import io
import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from outcomes import curves, outcome

from spinfit.fitting.outcome import Quality, Value
from spinfit.report.archive import archive_bytes
from spinfit.report.outcome_json import clean, curves_text, outcome_record, outcome_text


def no_constants(name):
    raise AssertionError(f"{name} in JSON")


def test_keys_are_those_promised():
    record = outcome_record(outcome())
    assert list(record) == ["parameters", "fractions", "quality", "correlations", "budget", "warnings", "provenance"]
    for value in record["parameters"].values():
        assert list(value) == [
            "value", "uncertainty", "uncertainty_noise", "uncertainty_field", "unit", "varied", "at_limit",
        ]  # fmt: skip
    assert list(record["quality"]) == [
        "converged", "finished", "chi2_reduced", "noise", "points", "free_parameters", "aicc", "bic",
    ]  # fmt: skip
    assert record["correlations"] == {"names": ["cu.g_perp", "cu.63Cu.A_par"], "matrix": [[1, -0.95], [-0.95, 1]]}
    assert record["warnings"] == [{"code": "at_limit", "text": "cu.width.gaussian ends at its lower limit of 0.8 mT."}]
    assert sum(value["value"] for value in record["fractions"].values()) == pytest.approx(1)


def test_nothing_of_the_run_itself_is_written():
    fast, slow = outcome(seconds=0.1), outcome(seconds=99.0)
    assert outcome_text(fast) == outcome_text(slow)
    assert archive_bytes(fast) == archive_bytes(slow)


def test_what_is_not_finite_becomes_null():
    bad = outcome(
        parameters={"a.g": Value(float("nan"), float("inf"))},
        quality=Quality(False, False, float("nan"), 0.0, 1, 1, float("-inf"), 1.0),
        correlation_matrix=np.array([[np.nan]]),
        engine={"error": np.float64("nan"), "count": np.int64(3), "flag": np.bool_(True)},
    )
    record = json.loads(outcome_text(bad), parse_constant=no_constants)
    assert record["parameters"]["a.g"]["value"] is None
    assert record["quality"]["chi2_reduced"] is None
    assert record["correlations"]["matrix"] == [[None]]
    assert record["provenance"]["engine"] == {"error": None, "count": 3, "flag": True}


@settings(derandomize=True, deadline=None)
@given(
    st.recursive(
        st.none() | st.booleans() | st.integers() | st.floats() | st.text() | st.builds(np.float64, st.floats()),
        lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
        max_leaves=12,
    )
)
def test_anything_cleaned_is_json(content):
    assert json.loads(json.dumps(clean(content), allow_nan=False)) == clean(content)


def test_curves_of_one_and_of_several_traces():
    one = list(csv.reader(io.StringIO(curves_text(outcome()))))
    assert one[0] == ["field_mT", "measured", "fitted", "residual", "cu", "radical"]
    data = np.array(one[1:], dtype=float)
    np.testing.assert_allclose(data[:, 0], curves().field, rtol=1e-8)
    np.testing.assert_allclose(data[:, 1] - data[:, 2], data[:, 3], atol=1e-4)
    several = list(csv.reader(io.StringIO(curves_text(outcome(curves("a"), curves("b", species=1))))))
    assert several[0] == ["trace", "field_mT", "measured", "fitted", "residual", "cu", "radical"]
    assert several[1][0] == "a"
    assert several[-1][0] == "b"
    assert several[-1][-1] == ""  # this trace has no such species


def test_each_number_of_a_curve_has_nine_digits():
    """Python's own formatting of one number at a time, over more lines than are written at once."""
    one = curves("50%", points=2345)
    lines = curves_text(outcome(one, curves("b"))).splitlines()
    columns = [one.field, one.measured, one.fitted, one.residual, *one.parts.values()]
    wanted = ["50%," + ",".join(format(value, ".9g") for value in row) for row in np.column_stack(columns).tolist()]
    assert lines[1:2346] == wanted
