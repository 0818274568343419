"""Ties: arithmetic on parameter names, never executed as code."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.fitting.parameters import apply, expand_vary, parameters_of
from spinfit.fitting.ties import compile_ties, evaluate, names_in, parse_tie, slopes
from spinfit.species import Exchange, Nucleus, Species, Spin
from spinfit.sweep import Sample

CU = Species(
    "cu",
    (Spin(1.5, (2.04, 2.06, 2.26), D=3000.0),),
    (Nucleus("63Cu", A=(-60.0, -540.0), P=(-6.0, -4.0, 10.0)), Nucleus("14N", P=(-1.0, 2.0))),
)
PAIR = Species("pair", (Spin(), Spin()), exchange=(Exchange(J=100.0, dipolar=(900.0, 900.0, -1800.0)),))
PARAMETERS = parameters_of([CU, PAIR], Sample(), units={"cu.D": "GHz", "pair.J_12": "cm^-1"})
START = {name: p.value for name, p in PARAMETERS.items()}

# What Python calls the three names when it works out the same text.
NAMES = {"cu.g_x": "aa", "cu.63Cu.A_par": "bb", "cu.14N.A": "cc"}


def _expressions() -> st.SearchStrategy[str]:
    numbers = st.one_of(st.integers(0, 99).map(str), st.floats(0.01, 99).map(lambda v: f"{v:.4g}"))
    leaves = st.one_of(numbers, st.sampled_from(sorted(NAMES)))

    def grow(inner: st.SearchStrategy[str]) -> st.SearchStrategy[str]:
        two = st.tuples(inner, st.sampled_from(["+", "-", "*", "/", " - ", " * "]), inner).map("".join)
        signed = st.tuples(st.sampled_from("+-"), inner).map("".join)
        power = st.tuples(inner, st.sampled_from(["**2", "** 3", "**-1", "**0.5", "**-2**2"])).map("".join)
        return st.one_of(two, signed, power, inner.map(lambda text: f"({text})"))

    return st.recursive(leaves, grow, max_leaves=10)


def _python(text: str, values: dict[str, float]) -> float:
    for name, letters in NAMES.items():
        text = text.replace(name, letters)
    result = eval(text, {"__builtins__": {}}, {letters: values[name] for name, letters in NAMES.items()})
    if isinstance(result, complex):
        raise ValueError
    return float(result)


def _outcome(text: str, values: dict[str, float] | None) -> tuple[float | None, str]:
    """Return the value, or the text of the refusal."""
    try:
        tree = parse_tie(text)
        return evaluate(tree, values or dict.fromkeys(names_in(tree), 1.5)), ""
    except InputError as error:
        return None, str(error)


@settings(max_examples=400, derandomize=True, deadline=None)
@given(_expressions(), st.tuples(*[st.floats(-5, 5) for _ in NAMES]))
def test_arithmetic_is_that_of_python(text, numbers):
    values = dict(zip(NAMES, numbers, strict=True))
    try:
        expected = _python(text, values)
    except (ZeroDivisionError, OverflowError, ValueError, TypeError):
        with pytest.raises(InputError):
            evaluate(parse_tie(text), values)
        return
    found, refusal = _outcome(text, values)
    if refusal:
        # Only what Python would work out and a tie may not hold.
        assert any(part in refusal for part in ("the power", "no finite value", "no real value")), refusal
        return
    assert found == pytest.approx(expected, rel=1e-12, abs=1e-12)


@settings(max_examples=200, derandomize=True, deadline=None)
@given(_expressions(), st.tuples(*[st.floats(0.5, 3) for _ in NAMES]))
def test_slopes_are_those_of_finite_differences(text, numbers):
    values = dict(zip(NAMES, numbers, strict=True))
    try:
        tree = parse_tie(text)
        found = slopes(tree, values)
        for name in names_in(tree):
            h = 1e-5 * values[name]
            sides = [evaluate(tree, values | {name: values[name] + k * h}) for k in (-2, -1, 1, 2)]
            expected = (sides[0] - 8 * sides[1] + 8 * sides[2] - sides[3]) / (12 * h)
            rough = max(abs(v) for v in sides) * 1e-9 / h
            # A pole next to the point spoils the difference, not the slope.
            assume(abs((sides[2] - sides[1]) / (2 * h) - expected) <= 1e-4 * abs(expected) + rough)
            assert found[name] == pytest.approx(expected, rel=1e-4, abs=rough + 1e-9)
    except InputError:
        assume(False)


@settings(max_examples=500, derandomize=True, deadline=None)
@given(st.text(alphabet="cu.g_x63CuA()*+-/ 0123456789e,[]'\"=;:\\@ü", max_size=60))
def test_any_text_is_a_tree_or_an_input_error(text):
    found, refusal = _outcome(text, None)
    assert (found is None) == bool(refusal)
    assert "\n" not in refusal


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("__import__('os').system('true')", '"\'" at character 12'),
        ("exit(0)", '"exit(" calls a function; write arithmetic (+ - * / ** and brackets) on parameter names'),
        ("sqrt(cu.g_x)", '"sqrt(" calls a function'),
        ("cu.g_x[0]", '"[" at character 7 of "cu.g_x[0]"'),
        ("'a'", '"\'" at character 1'),
        ("cu.g_x = 2", '"=" at character 8'),
        ("cu.g_x; 2", '";" at character 7'),
        ("lambda: 0", '":" at character 7'),
        ("cu.g_x + ", '"cu.g_x +" ends too early'),
        ("", '"" ends too early'),
        ("(cu.g_x", "a bracket is not closed"),
        ("cu.g_x)", '")" cannot stand there'),
        ("cu.g_x cu.g_y", '"cu.g_y" cannot stand there'),
        ("* 2", '"*" cannot stand there'),
        ("cu.g_x // 2", '"/" cannot stand there'),
        ("2 ** cu.g_x", "a parameter in the exponent"),
        ("9**9**9", "the power 3.8742e+08 in"),
        ("cu.g_x ** 100", "powers go up to 12"),
        ("1 / 0", "the arithmetic divides by 0"),
        ("(-8) ** 0.5", "the arithmetic has no real value"),
        ("cu.g_x * 1e999", "a number too large"),
        ("(" * 2000 + "1" + ")" * 2000, "4001 characters; write at most 1000"),
        ("(" * 300 + "1" + ")" * 300, "is nested more than 40 deep"),
        ("-" * 300 + "1", "is nested more than 40 deep"),
        ("1" + "**1" * 200, "is nested more than 40 deep"),
    ],
)
def test_what_is_not_arithmetic_is_refused(text, message):
    with pytest.raises(InputError) as caught:
        parse_tie(text)
    assert message in str(caught.value)


def test_a_long_sum_is_no_deep_recursion():
    text = "+".join(["cu.g_x"] * 140)
    assert evaluate(parse_tie(text), {"cu.g_x": 0.5}) == 70.0


def test_names_whose_parts_begin_with_digits():
    tree = parse_tie("2*cu.63Cu.A_z - 1.5e1 + 2.5*cu.14N_1.A+3.field_offset")
    assert names_in(tree) == ("cu.63Cu.A_z", "cu.14N_1.A", "3.field_offset")
    assert evaluate(tree, {"cu.63Cu.A_z": 10.0, "cu.14N_1.A": 2.0, "3.field_offset": 0.25}) == 10.25


def test_numbers_are_in_the_units_of_the_job():
    ties = compile_ties({"cu.E": "cu.D / 10 + 0.1", "cu.63Cu.A_par": "9 * cu.63Cu.A_perp"}, PARAMETERS)
    values = ties.apply({"cu.D": 4000.0, "cu.63Cu.A_perp": -50.0})
    # E takes the unit of D, GHz.
    assert values["cu.E"] == pytest.approx(500.0)
    assert values["cu.63Cu.A_par"] == -450.0


def test_chains_of_ties_in_any_order():
    ties = compile_ties({"cu.g_z": "cu.g_y * 2", "cu.g_y": "cu.g_x + 1"}, PARAMETERS, varied=["cu.g_x"])
    assert ties.names == ("cu.g_y", "cu.g_z")
    assert ties.apply({"cu.g_x": 2.0})["cu.g_z"] == 6.0
    # What is not given has its start value.
    assert ties.apply({})["cu.g_y"] == pytest.approx(3.04)
    assert ties.gradient({"cu.g_x": 2.0}) == {"cu.g_y": {"cu.g_x": 1.0}, "cu.g_z": {"cu.g_x": 2.0}}


def test_the_gradient_is_in_internal_units():
    ties = compile_ties({"cu.E": "cu.D ** 2 / 10", "pair.J_12": "pair.amount * 3"}, PARAMETERS)
    step = 1e-3
    low, high = (ties.apply({"cu.D": 3000.0 + s, "pair.amount": 1.0 + s}) for s in (-step, step))
    gradient = ties.gradient({"cu.D": 3000.0, "pair.amount": 1.0})
    assert gradient["cu.E"]["cu.D"] == pytest.approx((high["cu.E"] - low["cu.E"]) / (2 * step), rel=1e-6)
    slope = (high["pair.J_12"] - low["pair.J_12"]) / (2 * step)
    assert gradient["pair.J_12"]["pair.amount"] == pytest.approx(slope, rel=1e-6)


@pytest.mark.parametrize(
    ("ties", "varied", "message"),
    [
        ({"cu.g_x": "cu.g_y", "cu.g_y": "cu.g_x"}, (), "the ties form a circle: cu.g_x -> cu.g_y -> cu.g_x"),
        ({"cu.g_x": "cu.g_x + 1"}, (), "fit.tie.cu.g_x: the ties form a circle: cu.g_x -> cu.g_x"),
        (
            {"cu.g_x": "cu.g_y", "cu.g_y": "cu.g_z", "cu.g_z": "cu.g_y * 2"},
            (),
            "the ties form a circle: cu.g_y -> cu.g_z -> cu.g_y",
        ),
        ({"cu.g_x": "cu.gy"}, (), 'fit.tie.cu.g_x: "cu.gy" is no parameter of this model; did you mean "cu.g'),
        ({"cu.gy": "1"}, (), 'fit.tie.cu.gy: "cu.gy" is no parameter of this model; did you mean "cu.g'),
        ({"cu.g": "2"}, (), 'fit.tie.cu.g: "cu.g" is a group; tie its parts: cu.g_x, cu.g_y, cu.g_z'),
        ({"cu.g_x": "cu.g_y"}, ("cu.g_x",), '"cu.g_x" is both varied and tied'),
        ({"cu.D": "cu.63Cu.A_perp * 2"}, (), '"cu.D" is in GHz and "cu.63Cu.A_perp" in MHz'),
        ({"cu.g_x": 2.0}, (), "fit.tie.cu.g_x: 2.0 is not a text"),
    ],
)
def test_bad_ties_are_named(ties, varied, message):
    with pytest.raises(InputError) as caught:
        compile_ties(ties, PARAMETERS, varied=varied)
    assert message in str(caught.value)


def test_a_tie_that_leaves_the_numbers_during_the_fit_says_which():
    ties = compile_ties({"cu.g_y": "1 / (cu.g_x - 2)"}, PARAMETERS)
    with pytest.raises(InputError, match=r"fit\.tie\.cu\.g_y: the arithmetic divides by 0"):
        ties.apply({"cu.g_x": 2.0})


@pytest.mark.parametrize(
    ("vary", "tie", "moved", "expected"),
    [
        (["cu.63Cu.P"], {}, {"cu.63Cu.P_x": -7.0}, (-7.0, -4.0, 11.0)),
        (["cu.63Cu.P_z"], {}, {"cu.63Cu.P_z": 12.0}, (-7.0, -5.0, 12.0)),
        (["cu.63Cu.P_x", "cu.63Cu.P_z"], {}, {"cu.63Cu.P_z": 12.0}, (-6.0, -6.0, 12.0)),
        (["cu.63Cu.P_z"], {"cu.63Cu.P_x": "cu.63Cu.P_y"}, {"cu.63Cu.P_z": 12.0}, None),
        ([], {"cu.63Cu.P_x": "-cu.63Cu.P_z / 2"}, {}, (-5.0, -5.0, 10.0)),
        (["cu.63Cu.P_z"], {"cu.63Cu.P_x": "-cu.63Cu.P_z / 2"}, {"cu.63Cu.P_z": 8.0}, (-4.0, -4.0, 8.0)),
    ],
)
def test_traceless_tensors_stay_so(vary, tie, moved, expected):
    if expected is None:
        # Everything is spoken for and the sum is wrong: the model itself says so.
        with pytest.raises(InputError, match="the trace is"):
            _apply(vary, tie, moved)
        return
    nucleus = _apply(vary, tie, moved)
    assert nucleus.P == pytest.approx(expected)


def _apply(vary, tie, moved) -> Nucleus:
    ties = compile_ties(tie, PARAMETERS, varied=expand_vary(vary, PARAMETERS))
    species, _, _ = apply(ties.apply(START | moved), [CU, PAIR], Sample())
    return species[0].nuclei[0]


def test_traceless_tensors_of_two_numbers_and_of_pairs():
    varied = expand_vary(["cu.14N.P", "pair.dipolar_12"], PARAMETERS)
    ties = compile_ties({}, PARAMETERS, varied=varied)
    assert set(ties.names) == {"cu.14N.P_par", "pair.dipolar_12_z"}
    values = ties.apply(START | {"cu.14N.P_perp": -1.5, "pair.dipolar_12_x": 800.0})
    assert values["cu.14N.P_par"] == 3.0
    assert values["pair.dipolar_12_z"] == -1700.0
    gradient = ties.gradient(values)
    assert gradient["cu.14N.P_par"] == {"cu.14N.P_perp": -2.0}
    assert gradient["pair.dipolar_12_z"] == {"pair.dipolar_12_x": -1.0, "pair.dipolar_12_y": -1.0}
    ties = compile_ties({}, PARAMETERS, varied=["cu.14N.P_par"])
    assert ties.apply({"cu.14N.P_par": 3.0})["cu.14N.P_perp"] == -1.5


def test_start_values_pass_unchanged_where_nothing_is_tied():
    ties = compile_ties({}, PARAMETERS)
    assert ties.apply(START) == START
    assert all(math.isfinite(v) for v in START.values())
    assert not np.isnan(list(START.values())).any()
