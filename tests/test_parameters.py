"""Names of parameters, and putting values back by name."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spinfit.errors import InputError
from spinfit.fitting.data import Lines, Trace
from spinfit.fitting.parameters import Binding, apply, expand_vary, members, parameters_of
from spinfit.fitting.slots import nucleus_labels
from spinfit.species import Exchange, Nucleus, Species, Spin, Spread, Width
from spinfit.sweep import Sample

FIELD = np.linspace(300.0, 350.0, 5)


def make_trace(name: str, **more) -> Trace:
    return Trace(name, FIELD, np.zeros(5), np.ones(5, bool), 9400.0, **more)


# Models -------------------------------------------------------------------------------------------

number = st.floats(-1e4, 1e4)
angle = st.floats(-6.0, 6.0)
angles = st.tuples(angle, angle, angle)
positive = st.floats(0.0, 100.0)


def tensors(values: st.SearchStrategy[float]) -> st.SearchStrategy[tuple[float, ...]]:
    return st.integers(1, 3).flatmap(lambda n: st.tuples(*[values] * n))


@st.composite
def traceless(draw) -> tuple[float, ...]:
    a, b = draw(number), draw(number)
    return draw(st.sampled_from([(0.0,), (a, -2 * a), (a, b, -a - b)]))


@st.composite
def spins(draw) -> Spin:
    S = draw(st.sampled_from([0.5, 1.0, 1.5, 2.0, 3.5]))
    stevens = [
        ((k, q), draw(number)) for k, q in [(2, -1), (4, 0), (4, -3), (6, 6)] if k <= 2 * S and draw(st.booleans())
    ]
    return Spin(
        S,
        draw(tensors(st.floats(0.5, 10.0))),
        draw(number) if S > 0.5 else 0.0,
        draw(number) if S > 0.5 else 0.0,
        draw(st.none() | st.floats(-1, 1)) if S > 0.5 else None,
        draw(angles),
        draw(angles),
        tuple(stevens),
    )


@st.composite
def nuclei(draw) -> Nucleus:
    isotope = draw(st.sampled_from(["63Cu", "14N", "1H"]))
    return Nucleus(isotope, A=draw(tensors(number)), P=draw(traceless()), A_tilt=draw(angles), P_tilt=draw(angles))


@st.composite
def species(draw, name: str) -> Species:
    electrons = draw(st.lists(spins(), min_size=1, max_size=3))
    pairs = [(1, 2), (3, 1)][: max(0, len(electrons) - 1)]
    exchange = [Exchange(pair, draw(number), draw(traceless()), draw(angles), draw(angles)) for pair in pairs]
    width = Width(draw(positive), draw(positive), draw(tensors(positive)), draw(st.none() | positive), None, None)
    spread = Spread(draw(tensors(positive)), draw(positive), draw(positive), draw(tensors(positive)), 0.5, -0.25)
    cores = draw(st.lists(nuclei(), max_size=3))
    return Species(name, tuple(electrons), tuple(cores), tuple(exchange), width, spread, draw(positive))


@st.composite
def models(draw):
    kinds = tuple(draw(species(name)) for name in ["cu", "2nd"][: draw(st.integers(1, 2))])
    sample = draw(
        st.sampled_from(
            [
                Sample(),
                Sample("crystal", tilt=(0.1, 0.2, 0.3), angle_zero=0.4),
                Sample("aligned", order=0.3, angle=1.0),
                Sample("solution"),
            ]
        )
    )
    traces = (
        make_trace("kiln_07", angle=draw(st.none() | angle), group="day_2", field_offset=0.5),
        make_trace("7", phase=0.25, field_scale=1.25),
    )
    return kinds, sample, traces[: draw(st.integers(0, 2))]


# Round trips --------------------------------------------------------------------------------------


def same_trace(first: Trace, second: Trace) -> bool:
    keys = ("name", "angle", "field_offset", "field_scale", "phase", "group", "frequency")
    return all(getattr(first, key) == getattr(second, key) for key in keys)


@settings(max_examples=150, derandomize=True, deadline=None)
@given(models())
def test_own_values_rebuild_the_same_model(model):
    kinds, sample, traces = model
    parameters = parameters_of(kinds, sample, traces)
    values = {name: p.value for name, p in parameters.items()}
    new_kinds, new_sample, new_traces = apply(values, kinds, sample, traces)
    assert new_kinds == kinds
    assert new_sample == sample
    assert all(same_trace(a, b) for a, b in zip(new_traces, traces, strict=True))


@settings(max_examples=150, derandomize=True, deadline=None)
@given(models(), st.data())
def test_a_new_value_arrives_where_its_name_says_and_nowhere_else(model, data):
    kinds, sample, traces = model
    parameters = parameters_of(kinds, sample, traces)
    free = [n for n, p in parameters.items() if not p.sum_zero and not n.startswith("day_2.") and "angle_zero" not in n]
    name = data.draw(st.sampled_from(free))
    low, high = parameters[name].hard_limits
    value = data.draw(st.floats(max(low, -100.0), min(high, 100.0)))
    after = parameters_of(*apply({name: value}, kinds, sample, traces))
    assert after[name].value == value
    for other in parameters:
        if other != name:
            assert after[other].value == parameters[other].value


def test_values_are_checked_where_they_arrive():
    with pytest.raises(InputError, match="write a width that is not negative"):
        apply({"cu.width.gaussian": -1.0}, [Species("cu")], Sample())
    with pytest.raises(
        InputError, match='"cu.width.gausian" is no parameter of this model; did you mean "cu.width.gau'
    ):
        apply({"cu.width.gausian": 1.0}, [Species("cu")], Sample())


# Names --------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("spin", "names"),
    [
        (Spin(g=(2.0,)), ["cu.g"]),
        (
            Spin(g=(2.0, 2.2)),
            ["cu.g_perp", "cu.g_par", "cu.g_tilt_alpha", "cu.g_tilt_beta", "cu.g_tilt_gamma"],
        ),
        (
            Spin(g=(2.0, 2.1, 2.2)),
            ["cu.g_x", "cu.g_y", "cu.g_z", "cu.g_tilt_alpha", "cu.g_tilt_beta", "cu.g_tilt_gamma"],
        ),
        (Spin(1.0), ["cu.g", "cu.D", "cu.E", "cu.D_tilt_alpha", "cu.D_tilt_beta", "cu.D_tilt_gamma"]),
        (
            Spin(1.0, rhombicity=0.1),
            ["cu.g", "cu.D", "cu.rhombicity", "cu.D_tilt_alpha", "cu.D_tilt_beta", "cu.D_tilt_gamma"],
        ),
        (
            Spin(2.5, stevens=(((4, 0), 5.0), ((4, -3), 1.0))),
            ["cu.g", "cu.D", "cu.E", "cu.D_tilt_alpha", "cu.D_tilt_beta", "cu.D_tilt_gamma", "cu.B4_0", "cu.B4_m3"],
        ),
    ],
)
def test_names_follow_the_form_of_the_tensors(spin, names):
    found = list(parameters_of([Species("cu", (spin,))], Sample()))
    assert found[: len(names)] == names
    rest = ["cu.width.gaussian", "cu.width.lorentzian", "cu.width.hidden_hyperfine", "cu.spread.g"]
    rest += ["cu.spread.D", "cu.spread.E", "cu.spread.correlation_D_E"] if spin.S > 0.5 else []
    assert found[len(names) :] == [*rest, "cu.amount"]


def test_nuclei_are_numbered_in_file_order_unless_named():
    cores = [Nucleus("14N"), Nucleus("63Cu"), Nucleus("14N", name="far"), Nucleus("14N"), Nucleus(element="Cu")]
    assert nucleus_labels(cores) == ("14N_1", "63Cu", "far", "14N_2", "Cu")
    assert nucleus_labels([Nucleus("14N"), Nucleus("14N", name="far")]) == ("14N", "far")
    names = parameters_of([Species("cu", nuclei=tuple(cores))], Sample())
    assert {"cu.14N_1.A", "cu.14N_2.P_x", "cu.far.A", "cu.Cu.A", "cu.63Cu.P_tilt_beta"} <= set(names)


def test_names_of_coupled_spins():
    pair = Species(
        "pair",
        (Spin(g=(2.0, 2.1, 2.2)), Spin(1.0)),
        (Nucleus("63Cu", A=(1.0, 2.0, 3.0), couples_to=2),),
        (Exchange((1, 2), dipolar=(1.0, -2.0)),),
        spread=Spread(g=(0.1, 0.2)),
        width=Width(hidden_hyperfine=(1.0, 2.0, 3.0)),
    )
    names = set(parameters_of([pair], Sample()))
    assert {"pair.1.g_x", "pair.1.g_tilt_alpha", "pair.2.g", "pair.2.D", "pair.J_12", "pair.63Cu.A_z"} <= names
    assert {"pair.dipolar_12_perp", "pair.dipolar_12_par", "pair.dipolar_12_tilt_beta"} <= names
    assert {"pair.antisymmetric_12_x", "pair.spread.g_perp", "pair.width.hidden_hyperfine_z"} <= names
    assert "pair.g_x" not in names


def test_names_of_samples_traces_and_groups():
    crystal = parameters_of([Species("cr")], Sample("crystal"), [make_trace("a", angle=0.1, group="day")])
    assert {"sample.tilt_beta", "sample.angle_zero"} <= set(crystal)
    for owner in ("a", "day"):
        assert {f"{owner}.{key}" for key in ("field_offset", "field_scale", "phase", "angle_zero")} <= set(crystal)
    aligned = parameters_of([Species("cr")], Sample("aligned"), [make_trace("a")])
    assert aligned["sample.order"].hard_limits == (-0.5, 1.0)
    assert "a.angle_zero" not in aligned
    assert not any(name.startswith("sample.") for name in parameters_of([Species("cr")], Sample()))


def test_corrections_of_a_group_come_on_top_of_the_traces_own():
    traces = [
        make_trace("a", angle=1.0, group="day", field_offset=0.5),
        make_trace("b", angle=2.0, group="day", field_scale=2.0),
        make_trace("c", angle=3.0),
    ]
    values = {"day.field_offset": 0.25, "day.angle_zero": 0.5, "day.field_scale": 1.5, "a.field_offset": 1.0}
    values |= {"c.angle_zero": -1.0, "day.phase": 0.125}
    _, _, (a, b, c) = apply(values, [Species("cr")], Sample("crystal"), traces)
    assert (a.field_offset, a.field_scale, a.angle, a.phase) == (1.25, 1.5, 0.5, 0.125)
    assert (b.field_offset, b.field_scale, b.angle, b.phase) == (0.25, 3.0, 1.5, 0.125)
    assert (c.field_offset, c.field_scale, c.angle, c.phase) == (0.0, 1.0, 4.0, 0.0)
    assert traces[0].angle == 1.0


def test_tables_of_lines_have_corrections_too():
    table = Lines("rot", FIELD, 9400.0, angle=np.zeros(5), group="day")
    binding = Binding([Species("cr")], Sample("crystal"), [table])
    assert "rot.phase" not in binding.parameters
    _, _, (after,) = binding.apply({"rot.angle_zero": 0.5, "day.field_offset": 0.25})
    assert after.angle.tolist() == [-0.5] * 5
    assert after.field_offset == 0.25


@pytest.mark.parametrize(
    ("kinds", "traces", "message"),
    [
        ([Species("cu"), Species("cu")], [], '"cu" is the name of two of these'),
        ([Species("cu")], [make_trace("cu")], '"cu" is the name of a species and a trace'),
        ([Species("cu")], [make_trace("a"), make_trace("a")], '"a" is the name of two of these'),
        ([Species("cu")], [make_trace("a", group="a")], '"a" is the name of a trace and a group of traces'),
        ([Species("sample")], [], '"sample" is the name of the sample and a species'),
        ([Species("c u")], [], '"c u" as the name of a species; use letters, digits and _ only'),
        ([Species("cu", nuclei=(Nucleus("14N", name="width"),))], [], 'a nucleus called "width"'),
        ([Species("cu", nuclei=(Nucleus("14N", name="1"),))], [], 'a nucleus called "1"'),
        (
            [Species("cu", nuclei=(Nucleus("14N"), Nucleus("14N"), Nucleus("14N", name="14N_2")))],
            [],
            'two parameters are called "cu.14N_2.A"',
        ),
    ],
)
def test_two_things_of_the_same_name_are_refused(kinds, traces, message):
    with pytest.raises(InputError) as caught:
        parameters_of(kinds, Sample(), traces)
    assert message in str(caught.value)


# Units, limits, steps ------------------------------------------------------------------------------


def test_units_are_those_of_the_job():
    kind = Species("t", (Spin(1.0, D=2997.92458),))
    parameters = parameters_of([kind], Sample("crystal"), units={"t.D": "cm^-1", "t.width.gaussian": "G"})
    # 1 cm^-1 is c times 100 / m, 29979.2458 MHz exactly (SI definition of c).
    assert parameters["t.D"].to_job(2997.92458) == pytest.approx(0.1, rel=1e-14)
    assert parameters["t.D"].from_job(0.1) == pytest.approx(2997.92458, rel=1e-14)
    assert parameters["t.E"].unit == "cm^-1"  # as D, for want of its own
    assert parameters["t.width.gaussian"].to_job(1.0) == pytest.approx(10.0)
    assert parameters["t.g"].unit == ""
    assert parameters["t.g"].to_job(2.0) == 2.0
    assert parameters["sample.tilt_beta"].unit == "deg"
    assert parameters["sample.tilt_beta"].from_job(180.0) == pytest.approx(math.pi)


def test_hard_limits_hold_the_start_and_steps_are_positive():
    kind = Species("t", (Spin(1.0, (-2.0, 2.0)),), (Nucleus("14N", A=(-5.0,)),), amount=2.0)
    for p in parameters_of([kind], Sample("aligned"), [make_trace("a", group="b")]).values():
        assert p.hard_limits[0] <= p.value <= p.hard_limits[1], p
        assert p.scale > 0
        assert p.kind in ("energy", "field", "angle", "number")
    assert parameters_of([Species("t")], Sample())["t.width.gaussian"].hard_limits == (0.0, math.inf)


# vary ----------------------------------------------------------------------------------------------

CU = Species(
    "cu",
    (Spin(1.5, (2.0, 2.1, 2.2), stevens=(((2, 0), 1.0), ((2, 2), 1.0))),),
    (Nucleus("63Cu", A=(1.0, 2.0), P=(-1.0, -1.0, 2.0)), Nucleus("14N", P=(1.0, -2.0))),
    width=Width(gaussian=1.0, hidden_hyperfine=(1.0, 2.0)),
)
PARAMETERS = parameters_of([CU, replace(CU, name="two")], Sample("crystal"), [make_trace("a", angle=0.0)])


@pytest.mark.parametrize(
    ("vary", "names"),
    [
        (["cu.g"], ("cu.g_x", "cu.g_y", "cu.g_z")),
        (["cu.g_z", "cu.g", "cu.g_z"], ("cu.g_z", "cu.g_x", "cu.g_y")),
        (["cu.63Cu.A"], ("cu.63Cu.A_perp", "cu.63Cu.A_par")),
        (["cu.63Cu.A_tilt"], ("cu.63Cu.A_tilt_alpha", "cu.63Cu.A_tilt_beta", "cu.63Cu.A_tilt_gamma")),
        (["cu.63Cu.P"], ("cu.63Cu.P_x", "cu.63Cu.P_y")),
        (["cu.14N.P", "cu.14N.A"], ("cu.14N.P_perp", "cu.14N.A")),
        (["cu.63Cu.P_z"], ("cu.63Cu.P_z",)),
        (["cu.width"], ("cu.width.gaussian", "cu.width.hidden_hyperfine_perp", "cu.width.hidden_hyperfine_par")),
        (["cu.width.hidden_hyperfine"], ("cu.width.hidden_hyperfine_perp", "cu.width.hidden_hyperfine_par")),
        (["cu.stevens"], ("cu.B2_0", "cu.B2_2")),
        (["two.amount", "sample.tilt", "a.field_offset"], None),
        (["cu.D", "two.B2_0", "cu.B2_2"], ("cu.D", "two.B2_0", "cu.B2_2")),
    ],
)
def test_groups_mean_their_components(vary, names):
    if names is None:
        names = ("two.amount", "sample.tilt_alpha", "sample.tilt_beta", "sample.tilt_gamma", "a.field_offset")
    assert expand_vary(vary, PARAMETERS) == names


@pytest.mark.parametrize(
    ("vary", "message"),
    [
        (["cu.gz"], 'fit.vary: "cu.gz" is no parameter of this model; did you mean "cu.g'),
        (["cu"], 'fit.vary: "cu" is no parameter of this model'),
        (
            ["cu.63Cu.A_z"],
            '"cu.63Cu.A_z" is no parameter of this model; this tensor was given as cu.63Cu.A_perp, cu.63Cu.A_par',
        ),
        (["two.rhombicity"], '"two.rhombicity" is no parameter of this model; the model was given two.E'),
        (["cu.amount"], '"cu.amount" cannot be varied; the scale is free, so that the first species\' amount is fixed'),
        (["cu.spread"], 'everything in "cu.spread" is 0; name the entries to vary'),
        (["cu.63Cu.P_x", "cu.63Cu.P_y", "cu.63Cu.P_z"], "add up to 0 and cannot all vary; vary two of them"),
        (["cu.14N.P_perp", "cu.14N.P_par"], "add up to 0 and cannot all vary; vary one of them"),
        (["cu.D", "cu.B2_0"], '"cu.D" and "cu.B2_0" act alike (D = 3 B2_0) and cannot both vary'),
        (["cu.B2_2", "cu.E"], '"cu.E" and "cu.B2_2" act alike (E = B2_2) and cannot both vary'),
    ],
)
def test_what_cannot_be_varied_is_said(vary, message):
    with pytest.raises(InputError) as caught:
        expand_vary(vary, PARAMETERS)
    assert message in str(caught.value)


def test_all_components_of_a_traceless_group_are_members():
    assert members("cu.63Cu.P", PARAMETERS) == ("cu.63Cu.P_x", "cu.63Cu.P_y", "cu.63Cu.P_z")
