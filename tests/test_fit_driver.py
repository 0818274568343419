"""The fit from job to outcome, on a stand-in engine with a closed form."""

import math
from dataclasses import replace

import fit_jobs as jobs
import numpy as np
import pytest
from scipy.linalg import toeplitz
from scipy.signal import lfilter
from stub_engine import simulate

from spinfit.errors import InputError
from spinfit.fitting.data import Job, Trace
from spinfit.fitting.driver import fit as real_fit
from spinfit.fitting.residuals import Problem, full_view
from spinfit.fitting.signs import restored
from spinfit.fitting.solve import descend
from spinfit.fitting.starts import neighbours
from spinfit.species import Nucleus, Species, Spin, Width
from spinfit.spectrum import simulate as engine
from spinfit.sweep import Sample, Sweep
from spinfit.units import field_of


def fit(job, **more):
    return real_fit(job, simulate=simulate, **more)


def codes(outcome) -> set[str]:
    return {note.code for note in outcome.warnings}


@pytest.fixture(scope="module")
def outcome():
    signal, _ = jobs.noisy(21)
    trace = jobs.trace(signal, field_uncertainty=0.02, frequency_uncertainty=0.2)
    return fit(jobs.job(trace, model=(jobs.species(g=(2.001, 2.022, 2.058), width=0.6),)))


def test_values_and_quality(outcome):
    for name, true in zip(("r.g_x", "r.g_y", "r.g_z"), jobs.TRUE_G, strict=True):
        found = outcome.parameters[name]
        assert abs(found.value - true) < 4 * found.uncertainty_noise
        assert found.varied
        assert not found.tied
    assert outcome.quality.converged
    assert outcome.quality.finished
    assert outcome.quality.chi2_reduced == pytest.approx(1, abs=0.2)
    assert outcome.quality.free_parameters == 4 + 3
    assert outcome.quality.points == jobs.FIELDS.size
    assert outcome.warnings == ()


def test_field_and_frequency_combine_in_quadrature(outcome):
    """g = h nu/(muB B): u(g) = g sqrt((u_B/B)^2 + (u_nu/nu)^2) by JCGM 100:2008 (GUM) 5.1.2."""
    for name in ("r.g_x", "r.g_y", "r.g_z"):
        found = outcome.parameters[name]
        field = field_of(found.value, jobs.FREQUENCY)
        expected = found.value * math.hypot(0.02 / field, 0.2 / jobs.FREQUENCY)
        assert found.uncertainty_field == pytest.approx(expected, rel=2e-3)
        assert found.uncertainty == pytest.approx(math.hypot(found.uncertainty_noise, found.uncertainty_field))
    width = outcome.parameters["r.width.gaussian"]
    assert width.uncertainty_field < 0.02 * width.uncertainty_noise


def test_budget_sums_in_quadrature(outcome):
    for name, parts in outcome.budget.items():
        assert set(parts) == {"noise", "correlation and misfit", "field axis", "frequency"}
        total = math.sqrt(sum(part**2 for part in parts.values()))
        assert total == pytest.approx(outcome.parameters[name].uncertainty, rel=1e-9)
    # u(g) = g u_B/B of the axis and g u_nu/nu of the frequency.
    g = outcome.parameters["r.g_z"].value
    assert outcome.budget["r.g_z"]["frequency"] == pytest.approx(g * 0.2 / jobs.FREQUENCY, rel=2e-3)
    assert outcome.budget["r.g_z"]["field axis"] == pytest.approx(g * 0.02 / field_of(g, jobs.FREQUENCY), rel=2e-3)


def test_conventional_setting_is_named():
    model = (jobs.species(g=(2.02,), S=1.0, D=300.0, E=-50.0),)
    signal = jobs.clean_signal(*model)
    signal = signal + jobs.level(signal, 80) * np.random.default_rng(43).normal(size=signal.size)
    outcome = fit(jobs.job(jobs.trace(signal), model=model, vary=("r.g", "r.D")))
    note = next(n for n in outcome.warnings if n.code == "other_setting")
    assert "E = 50 MHz" in note.text


def test_curves_add_up(outcome):
    curves = outcome.curves[0]
    assert curves.fitted == pytest.approx(curves.parts["r"] + curves.baseline)
    assert curves.residual == pytest.approx(curves.measured - curves.fitted)
    baseline = 0.3 + 0.02 * (jobs.FIELDS - 335)
    assert curves.baseline == pytest.approx(baseline, abs=0.1 * np.abs(baseline).max())
    assert np.std(curves.residual) == pytest.approx(curves.noise, rel=0.15)


def test_nothing_is_nan(outcome):
    for value in outcome.parameters.values():
        for number in (value.value, value.uncertainty, value.uncertainty_noise, value.uncertainty_field):
            assert number is None or math.isfinite(number)
    assert np.all(np.isfinite(outcome.correlation_matrix))
    assert math.isfinite(outcome.quality.aicc)
    assert math.isfinite(outcome.quality.bic)


def test_same_job_same_bits():
    signal, _ = jobs.noisy(22)
    job = jobs.job(jobs.trace(signal), model=(jobs.species(g=(2.03, 2.01, 2.0), width=1.5),), start="auto")
    first, second = fit(job), fit(job)
    assert first.parameters == second.parameters
    assert first.quality == second.quality
    assert np.array_equal(first.curves[0].fitted, second.curves[0].fitted)


def test_information_criteria():
    """AICc and BIC from their definitions, with n ln(RSS/n) and the noise level as a parameter."""
    signal, _ = jobs.noisy(23)
    outcome = fit(jobs.job(jobs.trace(signal)))
    q = outcome.quality
    n, k = q.points, q.free_parameters + 1
    rss = float(np.sum((outcome.curves[0].residual / q.noise) ** 2))
    assert q.aicc == pytest.approx(n * math.log(rss / n) + 2 * k + 2 * k * (k + 1) / (n - k - 1), rel=1e-9)
    assert q.bic == pytest.approx(n * math.log(rss / n) + k * math.log(n), rel=1e-9)


def test_fractions_of_two_species():
    two = (jobs.species(), jobs.species(g=(2.005,), width=0.4, name="b", amount=0.25))
    signal = jobs.clean_signal(*two)
    noise = jobs.level(signal, 200)
    signal = signal + noise * np.random.default_rng(24).normal(size=signal.size)
    model = (two[0], replace(two[1], amount=0.5))
    outcome = fit(jobs.job(jobs.trace(signal), model=model, vary=("r.g", "b.g", "b.amount")))
    fractions = outcome.fractions
    assert sum(f.value for f in fractions.values()) == pytest.approx(1, abs=1e-12)
    assert fractions["b"].value == pytest.approx(0.2, abs=4 * fractions["b"].uncertainty)
    assert fractions["b"].uncertainty == pytest.approx(fractions["r"].uncertainty)
    amount = outcome.parameters["b.amount"]
    # f = a/(1+a): u(f) = u(a)/(1+a)^2
    assert fractions["b"].uncertainty == pytest.approx(amount.uncertainty / (1 + amount.value) ** 2, rel=1e-6)


def test_tied_parameters_share_the_uncertainty():
    signal, _ = jobs.noisy(25)
    job = jobs.job(
        jobs.trace(signal), vary=("r.g_x", "r.g_z", "r.width.gaussian"), ties={"r.g_y": "(2 * r.g_x + r.g_z) / 3"}
    )
    outcome = fit(job)
    x, y, z = (outcome.parameters[f"r.g_{c}"] for c in "xyz")
    assert y.tied
    assert not y.varied
    assert y.value == pytest.approx((2 * x.value + z.value) / 3)
    at = [outcome.correlation_names.index(f"r.g_{c}") for c in "xz"]
    correlation = outcome.correlation_matrix[at[0], at[1]]
    u = (2 * x.uncertainty / 3, z.uncertainty / 3)
    assert y.uncertainty == pytest.approx(math.sqrt(u[0] ** 2 + u[1] ** 2 + 2 * correlation * u[0] * u[1]), rel=1e-6)


def test_units_of_the_job():
    signal, _ = jobs.noisy(26)
    outcome = fit(jobs.job(jobs.trace(signal), units={"r.width.gaussian": "G"}))
    width = outcome.parameters["r.width.gaussian"]
    assert width.unit == "G"
    assert width.value == pytest.approx(8.0, abs=5 * width.uncertainty)


def test_global_fit_of_three_traces_with_their_own_offsets():
    """Three days with axes off by -0.1, 0 and 0.2 mT; the first is taken as right."""
    traces = []
    for k, (frequency, offset) in enumerate(((9400.0, 0.0), (9450.0, 0.2), (9500.0, -0.1))):
        signal, _ = jobs.noisy(30 + k, frequency=frequency)
        shifted = jobs.FIELDS + offset
        traces.append(jobs.trace(signal, fields=shifted, name=f"day_{k}", frequency=frequency))
    vary = ("r.g", "r.width.gaussian", "day_1.field_offset", "day_2.field_offset")
    outcome = fit(jobs.job(*traces, vary=vary))
    for name, true in (("day_1.field_offset", -0.2), ("day_2.field_offset", 0.1), ("r.g_z", 2.06)):
        found = outcome.parameters[name]
        assert abs(found.value - true) < 4 * found.uncertainty
    assert len(outcome.curves) == 3
    assert outcome.quality.free_parameters == 6 + 9


def test_correlated_noise_widens_and_white_noise_does_not():
    """Against G C G' with the exact C_ij = phi^|i-j| and scipy.linalg.toeplitz."""
    rng = np.random.default_rng(27)
    clean = jobs.clean_signal(jobs.species())
    noise = jobs.level(clean, 60)
    job = jobs.job(jobs.trace(clean))
    problem = Problem(job, simulate)
    view = full_view(job.traces, (noise,), 1e-4)
    response = np.linalg.pinv(problem.jacobian(problem.evaluate(problem.start, view), view, central=True))
    for phi in (0.0, 0.7):
        exact = np.sqrt(np.diag(response @ toeplitz(phi ** np.arange(clean.size)) @ response.T))
        found = []
        for _ in range(12):
            process = lfilter([math.sqrt(1 - phi**2)], [1, -phi], rng.normal(size=clean.size + 100))[100:]
            outcome = fit(jobs.job(jobs.trace(clean + noise * process)))
            found.append([outcome.parameters[name].uncertainty_noise for name in problem.names])
        assert np.mean(found, axis=0) == pytest.approx(exact, rel=0.07)


class Stop:
    """Interrupts at the n-th call, as Ctrl-C would."""

    def __init__(self, at: int) -> None:
        self.calls, self.at, self.best = 0, at, []

    def __call__(self, number, chi2, values):
        self.calls += 1
        self.best.append(chi2)
        if self.calls == self.at:
            raise KeyboardInterrupt


@pytest.mark.parametrize("at", [1, 4, 12])
def test_interrupt_keeps_the_best_so_far(at):
    signal, _ = jobs.noisy(28)
    stop = Stop(at)
    outcome = fit(
        jobs.job(jobs.trace(signal), model=(jobs.species(g=(2.001, 2.022, 2.058), width=0.6),)), progress=stop
    )
    assert not outcome.quality.finished
    assert not outcome.quality.converged
    assert "unfinished" in codes(outcome)
    assert outcome.parameters["r.g_x"].uncertainty is None
    assert math.isfinite(outcome.quality.chi2_reduced)
    assert outcome.curves[0].fitted.shape == signal.shape


def test_progress_reports_number_best_and_values():
    signal, _ = jobs.noisy(29)
    seen = []
    fit(jobs.job(jobs.trace(signal)), progress=lambda *call: seen.append(call))
    numbers = [number for number, _, _ in seen]
    assert numbers == sorted(numbers)
    assert set(seen[0][2]) == {"r.g_x", "r.g_y", "r.g_z", "r.width.gaussian"}
    assert all(b[1] <= a[1] for a, b in zip(seen, seen[1:], strict=False))


@pytest.mark.parametrize(
    ("g", "width", "start"),
    [
        ((2.004, 2.025, 2.057), 0.4, "given"),
        ((2.03, 2.01, 1.99), 1.5, "given"),
        ((2.0, 2.0, 2.0), 1.0, "auto"),
        ((2.1, 2.0, 1.93), 0.3, "auto"),
    ],
)
def test_rough_starts_end_at_the_same_values(g, width, start):
    signal, _ = jobs.noisy(31)
    reference = fit(jobs.job(jobs.trace(signal)))
    found = fit(jobs.job(jobs.trace(signal), model=(jobs.species(g=g, width=width),), start=start))
    for a, b in zip(
        sorted(reference.parameters[f"r.g_{c}"].value for c in "xyz"),
        sorted(found.parameters[f"r.g_{c}"].value for c in "xyz"),
        strict=True,
    ):
        assert abs(a - b) < 0.2 * reference.parameters["r.g_x"].uncertainty_noise
    assert found.quality.chi2_reduced == pytest.approx(reference.quality.chi2_reduced, rel=1e-3)


def test_no_temperature_leaves_the_sign_of_D():
    model = (jobs.species(g=(2.02,), S=1.0, D=300.0),)
    rng = np.random.default_rng(32)
    found = {}
    for temperature in (None, 1.0):
        signal = jobs.clean_signal(*model, temperature=temperature)
        signal = signal + jobs.level(signal, 80) * rng.normal(size=signal.size)
        trace = jobs.trace(signal, temperature=temperature)
        found[temperature] = fit(jobs.job(trace, model=model, vary=("r.g", "r.D", "r.width.gaussian")))
    assert "sign_of_D" in codes(found[None])
    assert "without a temperature" in next(n.text for n in found[None].warnings if n.code == "sign_of_D")
    assert "sign_of_D" not in codes(found[1.0])


def test_sign_of_A():
    model = (replace(jobs.species(g=(2.02,)), nuclei=(Nucleus(isotope="1H", A=(80.0,)),)),)
    signal = jobs.clean_signal(*model)
    signal = signal + jobs.level(signal, 80) * np.random.default_rng(33).normal(size=signal.size)
    outcome = fit(jobs.job(jobs.trace(signal), model=model, vary=("r.g", "r.1H.A")))
    note = next(n for n in outcome.warnings if n.code == "sign_of_A")
    assert "r.1H.A" in note.text


@pytest.mark.parametrize(("temperature", "said"), [(None, True), (1.0, False)])
def test_signs_that_are_known_against_each_other_only(temperature: float | None, said: bool) -> None:
    """H of -D, -A with the field turned round is -H but for the nuclear Zeeman term, so that at one high temperature
    the spectra agree; populations at 1 K tell them apart, and the second-order shifts tell D against A."""
    species = Species("mn", (Spin(1.0, (2.0,), D=400.0),), (Nucleus("55Mn", A=(-250.0,)),), width=Width(gaussian=1.0))
    sweep = Sweep(9500.0, (280.0, 400.0), 400, temperature=temperature)
    signal = engine(species, sweep).signal
    for one, other in ((-1, 1), (1, -1), (-1, -1)):
        flipped = replace(
            species,
            spins=(replace(species.spins[0], D=400.0 * one),),
            nuclei=(replace(species.nuclei[0], A=(-250.0 * other,)),),
        )
        far = np.abs(engine(flipped, sweep).signal - signal).max() / np.abs(signal).max()
        assert (far < 1e-3) == (one == other and said)
    noisy = signal + 0.01 * np.abs(signal).max() * np.random.default_rng(5).normal(size=signal.size)
    trace = Trace("t", sweep.fields, noisy, np.ones(400, dtype=bool), frequency=9500.0, temperature=temperature)
    outcome = real_fit(Job((species,), Sample(), (trace,), ("mn.D", "mn.55Mn.A", "mn.width.gaussian")))
    assert ("sign_of_D_and_A" in codes(outcome)) is said
    assert not {"sign_of_D", "sign_of_A"} & codes(outcome)


def test_signs_that_do_not_matter_are_those_of_the_start():
    """Without a temperature +D and -D have one trace: a descent that went through zero is turned back."""
    model = (jobs.species(g=(2.02,), S=1.0, D=300.0),)
    signal = jobs.clean_signal(*model)
    signal = signal + jobs.level(signal, 80) * np.random.default_rng(36).normal(size=signal.size)
    start = (jobs.species(g=(2.02,), S=1.0, D=280.0),)
    problem = Problem(jobs.job(jobs.trace(signal), model=start, vary=("r.g", "r.D")), simulate)
    view = full_view(problem.job.traces, problem.noises, 1e-4)
    turned = descend(problem, view, np.array([2.02, -310.0]))
    assert turned.point.free[1] < -290
    back = restored(problem, view, turned)
    assert back.point.free[1] == pytest.approx(-turned.point.free[1], rel=1e-3)
    assert back.point.chi2 == pytest.approx(turned.point.chi2, rel=1e-4)


def test_single_signs_are_named():
    """The stand-in splits by the size of A_x alone, so that its sign moves nothing."""
    model = (replace(jobs.species(g=(2.02,)), nuclei=(Nucleus(isotope="1H", A=(80.0, 60.0, 50.0)),)),)
    signal = jobs.clean_signal(*model)
    signal = signal + jobs.level(signal, 80) * np.random.default_rng(38).normal(size=signal.size)
    outcome = fit(jobs.job(jobs.trace(signal), model=model, vary=("r.g", "r.1H.A_x")))
    (note,) = [n for n in outcome.warnings if n.code == "single_signs"]
    assert "r.1H.A_x" in note.text
    assert "r.1H.A_y" not in note.text


def test_signs_that_matter_stay():
    """At 1 K the trace tells the sign of D: the start's is not put back."""
    model = (jobs.species(g=(2.02,), S=1.0, D=300.0),)
    signal = jobs.clean_signal(*model, temperature=1.0)
    signal = signal + jobs.level(signal, 80) * np.random.default_rng(37).normal(size=signal.size)
    start = (jobs.species(g=(2.02,), S=1.0, D=-280.0),)
    trace = jobs.trace(signal, temperature=1.0)
    problem = Problem(jobs.job(trace, model=start, vary=("r.g", "r.D")), simulate)
    view = full_view(problem.job.traces, problem.noises, 1e-4)
    found = descend(problem, view, np.array([2.02, 290.0]))
    assert restored(problem, view, found).point.free[1] == pytest.approx(300, abs=5)


def test_limit_that_was_hit():
    signal, _ = jobs.noisy(34)
    model = (jobs.species(width=0.7),)
    outcome = fit(jobs.job(jobs.trace(signal), model=model, limits={"r.width.gaussian": (0.5, 0.75)}))
    width = outcome.parameters["r.width.gaussian"]
    assert width.at_limit
    assert width.value == 0.75
    assert width.uncertainty is None
    assert outcome.parameters["r.g_x"].uncertainty is not None
    note = next(n for n in outcome.warnings if n.code == "at_limit")
    assert "upper limit 0.75 mT" in note.text


def test_parameters_that_cannot_be_told_apart():
    """A shift of the axis and g act alike in one trace."""
    signal, _ = jobs.noisy(35)
    model = (jobs.species(g=(2.02,)),)
    signal = jobs.clean_signal(*model)
    signal = signal + jobs.level(signal, 60) * np.random.default_rng(35).normal(size=signal.size)
    outcome = fit(jobs.job(jobs.trace(signal), model=model, vary=("r.g", "t.field_offset", "r.width.gaussian")))
    note = next(n for n in outcome.warnings if n.code == "undetermined")
    assert "r.g" in note.text
    assert "t.field_offset" in note.text
    assert outcome.parameters["r.g"].uncertainty is None
    assert outcome.parameters["r.width.gaussian"].uncertainty is not None


def test_parameter_without_effect():
    signal, _ = jobs.noisy(36)
    outcome = fit(jobs.job(jobs.trace(signal), vary=("r.g", "r.width.lorentzian")))
    assert any(n.code in ("undetermined", "at_limit") and "lorentzian" in n.text for n in outcome.warnings)


def test_trace_upside_down():
    signal, _ = jobs.noisy(37)
    outcome = fit(jobs.job(jobs.trace(-signal)))
    assert "negative_scale" in codes(outcome)
    assert outcome.curves[0].scale < 0


def test_systematic_residuals():
    """The model lacks a line that the trace has."""
    two = (jobs.species(), jobs.species(g=(2.04,), name="b", amount=0.3))
    signal = jobs.clean_signal(*two)
    signal = signal + jobs.level(signal, 100) * np.random.default_rng(38).normal(size=signal.size)
    outcome = fit(jobs.job(jobs.trace(signal)))
    assert "systematic_residuals" in codes(outcome)
    assert outcome.quality.chi2_reduced > 2


def test_over_modulation_and_lines_beyond_the_sweep():
    signal, _ = jobs.noisy(39)
    assert "over_modulation" in codes(fit(jobs.job(jobs.trace(signal, modulation=0.3))))
    assert "over_modulation" not in codes(fit(jobs.job(jobs.trace(signal, modulation=0.2))))
    cut = jobs.FIELDS < 335
    outcome = fit(jobs.job(jobs.trace(signal[cut], fields=jobs.FIELDS[cut]), vary=("r.g_y", "r.g_z")))
    assert "lines_beyond_sweep" in codes(outcome)


def test_what_cannot_be_fitted_is_refused():
    signal, _ = jobs.noisy(40)
    trace = jobs.trace(signal)
    with pytest.raises(InputError, match=r'species "r" has no line in the fitted field range \(320 to 350 mT\)'):
        fit(jobs.job(trace, model=(jobs.species(g=(4.3,)),), vary=("r.g",)))
    few = jobs.trace(signal[::100], fields=jobs.FIELDS[::100])
    with pytest.raises(InputError, match="t: 6 points to be fitted, but 7 free parameters"):
        fit(jobs.job(few))
    with pytest.raises(InputError, match="no trace"):
        fit(jobs.job())
    with pytest.raises(InputError, match='did you mean "r.g_x"'):
        fit(jobs.job(trace, vary=("r.g_xx",)))


def test_nothing_to_vary_still_solves_scale_and_baseline():
    signal, _ = jobs.noisy(41)
    outcome = fit(jobs.job(jobs.trace(signal), vary=()))
    assert outcome.quality.converged
    assert outcome.curves[0].scale == pytest.approx(jobs.SCALE, rel=0.05)
    assert outcome.correlation_names == ()


def test_exact_data():
    outcome = fit(jobs.job(jobs.trace(jobs.clean_signal(jobs.species())), model=(jobs.species(width=0.7),)))
    assert outcome.parameters["r.width.gaussian"].value == pytest.approx(0.8, rel=1e-4)
    assert math.isfinite(outcome.quality.aicc)


def test_excluded_points_do_not_count():
    signal, _ = jobs.noisy(42)
    used = np.ones(signal.size, dtype=bool)
    used[50:80] = False
    spoiled = signal.copy()
    spoiled[50:80] = 1e5
    outcome = fit(jobs.job(replace(jobs.trace(spoiled), used=used)))
    assert outcome.quality.points == signal.size - 30
    assert outcome.quality.chi2_reduced == pytest.approx(1, abs=0.2)
    assert outcome.curves[0].fitted.shape == signal.shape


@pytest.mark.parametrize("g", [2.034, 2.048])
def test_weak_line_that_starts_three_widths_away(g):
    """A broadened view sees nothing of it; the scan from the minimum without it does."""
    strong = jobs.species()
    signal = jobs.clean_signal(strong, jobs.species(g=(2.04,), width=0.3, name="b", amount=0.04))
    signal = signal + jobs.level(signal, 150) * np.random.default_rng(44).normal(size=signal.size)
    model = (jobs.species(g=(2.001, 2.021, 2.059)), jobs.species(g=(g,), width=0.3, name="b", amount=0.04))
    job = jobs.job(jobs.trace(signal), model=model, vary=("r.g", "r.width.gaussian", "b.g", "b.amount"))
    problem = Problem(job, simulate)
    view = full_view(job.traces, problem.noises, 1e-3)
    stuck = descend(problem, view, problem.start)
    assert stuck.point.chi2 > 1.5 * view.points
    assert neighbours(problem, view, stuck)[0][problem.names.index("b.g")] == pytest.approx(2.04, abs=0.0025)
    outcome = fit(job)
    found = outcome.parameters["b.g"]
    assert abs(found.value - 2.04) < 4 * found.uncertainty_noise
    assert outcome.quality.chi2_reduced == pytest.approx(1, abs=0.2)
