"""Which of several models of the same data is supported, and how strongly.

AICc and BIC compare any models; where one is a special case of another the F-test of nested models
says how often noise alone would make the larger one look that much better.  All three take points
as independent: where residuals hang together the evidence is weaker than the figures, and the
verdict says so.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import special

from spinfit.errors import InputError
from spinfit.fitting.outcome import Outcome

# Differences of AICc: K. P. Burnham, D. R. Anderson, Model Selection and Multimodel Inference (2002),
# from memory: below 2 substantial support for both, beyond 10 essentially none for the worse.
_WORDS = ((2.0, "cannot be told apart from"), (6.0, "is weakly preferred to"), (10.0, "is clearly preferred to"))
_STRONGEST = "is decisively preferred to"
# Tensor components and what they are special cases of.
_FINER = {"": ("_perp", "_par", "_x", "_y", "_z"), "_perp": ("_x", "_y"), "_par": ("_z",)}


@dataclass(frozen=True)
class Ranked:
    """One model among others.

    Attributes
    ----------
    name : str
    free_parameters : int
    chi2_reduced, aicc, bic : float
    aicc_above_best, bic_above_best : float
    weight : float
        exp(-aicc_above_best/2), normalised over the models.
    """

    name: str
    free_parameters: int
    chi2_reduced: float
    aicc: float
    bic: float
    aicc_above_best: float
    bic_above_best: float
    weight: float


@dataclass(frozen=True)
class Nested:
    """F-test of a model against a larger one that contains it.

    `probability` is that of an F at least as large from noise alone.
    """

    smaller: str
    larger: str
    F: float
    freedom: tuple[int, int]
    probability: float


@dataclass(frozen=True)
class Comparison:
    """Models by AICc, best first; F-tests of nested pairs; the verdict in a sentence or two."""

    models: tuple[Ranked, ...]
    tests: tuple[Nested, ...]
    verdict: str


def compare(outcomes: Sequence[Outcome]) -> Comparison:
    """Compare finished fits of the same data.

    Raises
    ------
    InputError
        For fewer than two outcomes, two of the same name, or different data.
    """
    if len(outcomes) < 2:
        raise InputError("one model only", "give two or more jobs to compare", place="compare")
    names = [outcome.name for outcome in outcomes]
    for name in names:
        if names.count(name) > 1:
            raise InputError(f'two jobs are called "{name}"', "give their files different names", place="compare")
    first = _data(outcomes[0])
    for outcome in outcomes[1:]:
        if _data(outcome) != first:
            raise InputError(
                f'"{outcome.name}" was fitted to other points than "{names[0]}"',
                "compare fits of the same traces with the same fit_range and exclude",
                place="compare",
            )
    models = _ranked(outcomes)
    by_name = {outcome.name: outcome for outcome in outcomes}
    tests = tuple(_f_test(a, b) for a in outcomes for b in outcomes if a is not b and _contains(b, a) and _larger(b, a))
    return Comparison(models, tests, _verdict(models, tests, by_name))


def _data(outcome: Outcome) -> tuple[object, ...]:
    lines = tuple((t.setting.tobytes(), np.float64(t.measured.size).tobytes()) for t in outcome.positions)
    return tuple((c.measured.tobytes(), c.used.tobytes()) for c in outcome.curves) + lines


def _ranked(outcomes: Sequence[Outcome]) -> tuple[Ranked, ...]:
    best_aicc = min(o.quality.aicc for o in outcomes)
    best_bic = min(o.quality.bic for o in outcomes)
    weights = [math.exp(-(o.quality.aicc - best_aicc) / 2) for o in outcomes]
    rows = [
        Ranked(
            o.name,
            o.quality.free_parameters,
            o.quality.chi2_reduced,
            o.quality.aicc,
            o.quality.bic,
            o.quality.aicc - best_aicc,
            o.quality.bic - best_bic,
            weight / sum(weights),
        )
        for o, weight in zip(outcomes, weights, strict=True)
    ]
    return tuple(sorted(rows, key=lambda row: row.aicc_above_best))


def _larger(large: Outcome, small: Outcome) -> bool:
    return large.quality.free_parameters > small.quality.free_parameters


def _contains(large: Outcome, small: Outcome) -> bool:
    """Whether what the small model varies is, name by name, varied by the large one too.

    A component counts as contained in finer components of the same tensor.  That fixed values are
    reachable by the larger model is taken for granted where the names are.
    """
    varied = {name for name, value in large.parameters.items() if value.varied or value.tied}
    for name, value in small.parameters.items():
        if value.varied and name not in varied and not any(fine in varied for fine in _finer(name)):
            return False
    return set(small.fractions) <= set(large.fractions)


def _finer(name: str) -> list[str]:
    for ending in ("_perp", "_par"):
        if name.endswith(ending):
            return [name.removesuffix(ending) + fine for fine in _FINER[ending]]
    return [name + fine for fine in _FINER[""]]


def _f_test(small: Outcome, large: Outcome) -> Nested:
    """F = ((chi2_s - chi2_l)/(k_l - k_s)) / (chi2_l/(n - k_l)), as in any textbook of regression."""
    n, k_small, k_large = large.quality.points, small.quality.free_parameters, large.quality.free_parameters
    chi2 = [q.chi2_reduced * max(q.points - q.free_parameters, 1) for q in (small.quality, large.quality)]
    freedom = (k_large - k_small, max(n - k_large, 1))
    F = max(chi2[0] - chi2[1], 0.0) / freedom[0] / max(chi2[1] / freedom[1], 1e-300)
    return Nested(small.name, large.name, F, freedom, float(special.fdtrc(*freedom, F)))


def _verdict(models: tuple[Ranked, ...], tests: tuple[Nested, ...], outcomes: dict[str, Outcome]) -> str:
    best, second = models[0], models[1]
    words = next((text for limit, text in _WORDS if second.aicc_above_best < limit), _STRONGEST)
    said = [f'"{best.name}" {words} "{second.name}" (AICc {second.aicc_above_best:.1f} lower).']
    if words == _WORDS[0][1] and best.free_parameters > second.free_parameters:
        said.append(f'The simpler one, "{second.name}", is then the one to report.')
    for test in tests:
        if {test.smaller, test.larger} == {best.name, second.name}:
            said.append(
                f'Noise alone would favour "{test.larger}" over "{test.smaller}" this much in '
                f"{100 * test.probability:.2g} % of traces (F = {test.F:.3g})."
            )
    if any(note.code == "systematic_residuals" for note in outcomes[best.name].warnings):
        said.append("Residuals of the best model are still systematic: the evidence is weaker than these figures.")
    return " ".join(said)
