"""The compiled kernels give what their numpy twins give, and both what a plain loop gives."""

import numpy as np
import pytest
from scipy.interpolate import BSpline

from spinfit import kernels, sheets
from spinfit.orientations import Mesh

DEPOSITS = [kernels.deposit_numpy, kernels.deposit]
SMEARED = [kernels.deposit_smeared_numpy, kernels.deposit_smeared]


def points(count: int) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(7)
    return rng.uniform(-3.0, count + 3.0, 500), rng.normal(size=500)


def spline(x: float, i: int) -> float:
    """Return the cubic B-spline centred on i at x, from scipy."""
    return float(np.nan_to_num(BSpline.basis_element(np.arange(i - 2.0, i + 3.0), extrapolate=False)(x)))


@pytest.mark.parametrize("deposit", DEPOSITS)
def test_deposit(deposit) -> None:
    x, w = points(40)
    rows = np.arange(500) % 3
    got = np.zeros((3, 40))
    deposit(got, rows, x, w)
    want = np.zeros((3, 40))
    for row, place, weight in zip(rows, x, w, strict=True):
        if 1 <= place < 37:
            want[row] += [weight * spline(place, i) for i in range(40)]
    assert got == pytest.approx(want, abs=1e-12)


@pytest.mark.parametrize("deposit", DEPOSITS)
def test_deposit_in_one_row(deposit) -> None:
    x, w = points(30)
    got, want = np.zeros((1, 30)), np.zeros((1, 30))
    deposit(got, np.intp(0), x, w)
    kernels.deposit_numpy(want, np.zeros(500, dtype=np.intp), x, w)
    assert got == pytest.approx(want, abs=1e-12)


@pytest.mark.parametrize("deposit", SMEARED)
def test_smeared(deposit) -> None:
    x, w = points(40)
    smear = np.concatenate([np.zeros(50), np.geomspace(1e-3, 100.0, 450)])
    got = np.zeros((6, 40))
    deposit(got, x, w, smear, 0.4, 1.6)
    want = np.zeros((6, 40))
    for place, weight, size in zip(x, w, smear, strict=True):
        if not 1 <= place < 37:
            continue
        rung = size / 0.4 if size < 0.4 else 1 + np.log(size / 0.4) / np.log(1.6)
        rung = min(rung, 5 - 1e-9)
        row, part = int(rung), rung - int(rung)
        shares = np.array([weight * spline(place, i) for i in range(40)])
        upper = part**2 * (3 - 2 * part)
        want[row] += (1 - upper) * shares
        want[row + 1] += upper * shares
    assert got == pytest.approx(want, abs=1e-12)


def test_nothing_is_lost() -> None:
    got = np.zeros((4, 50))
    rng = np.random.default_rng(3)
    kernels.deposit_smeared(got, rng.uniform(5, 40, 100), np.ones(100), rng.uniform(0, 3, 100), 0.4, 1.6)
    assert got.sum() == pytest.approx(100.0, rel=1e-12)


@pytest.mark.parametrize("deposit", [kernels.deposit_changes_numpy, kernels.deposit_changes])
def test_changes_of_a_deposit(deposit) -> None:
    x, w = points(40)
    rng = np.random.default_rng(8)
    weights, moves = rng.normal(size=(2, 3, 500))
    rows = np.arange(500) % 2
    got = np.zeros((3, 2, 40))
    deposit(got, rows, x, weights, moves)
    for k in range(3):
        # a quadratic in the step, whose central difference is exact to the third derivative of the spline
        step = 1e-4
        sides = np.zeros((2, 2, 40))
        inside = (x >= 1.01) & (x < 36.99)
        for side, sign in zip(sides, (1, -1), strict=True):
            place = x + sign * step * moves[k] / w
            kernels.deposit_numpy(side, rows[inside], place[inside], (w + sign * step * weights[k])[inside])
        only = np.zeros((3, 2, 40))
        deposit(only, rows[inside], x[inside], weights[:, inside], moves[:, inside])
        assert only[k] == pytest.approx((sides[0] - sides[1]) / (2 * step), abs=2e-4 * np.abs(only[k]).max())
    rest = np.zeros((3, 2, 40))
    deposit(rest, rows, np.where((x >= 1) & (x < 37), x, 0.0), weights, moves)
    assert got == pytest.approx(rest, abs=1e-12)


@pytest.mark.parametrize("kind", ["axial", "octant", "quarter", "half"])
@pytest.mark.parametrize("close", [0.05, 5.0])
def test_branches_over_a_mesh(kind: str, close: float) -> None:
    """Both twins, against one point after the other of the fields that the branches stand for."""
    mesh = Mesh(kind, 6, 1 if kind == "axial" else 5)
    shape = (3, *mesh.weights().shape)
    rng = np.random.default_rng(3)
    fields, weights = 20.0 + 0.5 * rng.normal(size=shape), rng.normal(size=shape)
    inverse = np.array([True, False, True])
    x = np.where(inverse[:, None, None], fields**-2, fields)
    y = np.where(inverse[:, None, None], weights * fields**-3, weights)
    around = {"axial": sheets.ALONE, "octant": sheets.CLOSED}.get(kind, sheets.PERIODIC)
    want = np.zeros((5, 60))
    apart = sheets.spacing(fields, mesh)
    ratio = (apart / close) ** 2
    smear = np.where(apart.max(axis=(1, 2), keepdims=True) > 1.05 * close, 0.6 * apart * ratio / (ratio + 0.3), 0.0)
    share = (weights * mesh.weights()).ravel()
    kernels.deposit_smeared_numpy(want, (2.0 * fields - 10.0).ravel(), share, smear.ravel(), 0.1, 1.6)
    for deposit in (sheets.deposit_sheets_numpy, sheets.deposit_sheets):
        got = np.zeros((5, 60))
        deposit(got, (2.0, -10.0), x, y, inverse, mesh.weights(), around, (close, 0.6, 0.1, 1.6))
        assert got == pytest.approx(want, abs=1e-12)
    assert want[1:].any() == (close < 1)


@pytest.mark.parametrize("inverse", [False, True])
@pytest.mark.parametrize("smeared", [False, True])
@pytest.mark.parametrize("deposit", [kernels.deposit_sheet_changes_numpy, kernels.deposit_sheet_changes])
def test_changes_of_a_sheet(deposit, inverse: bool, smeared: bool) -> None:
    """The change of a deposit of fields and weights that are moved either way, by the kernels that deposit them."""
    rng = np.random.default_rng(9)
    field, weight, share = rng.uniform(5.0, 15.0, 300), rng.normal(size=300), rng.uniform(0.1, 1.0, 300)
    smear = np.geomspace(1e-2, 20.0, 300) if smeared else np.empty(0)
    change_b, change_w = rng.normal(size=(2, 2, 300))
    factor, origin = 2.5, -10.0
    got = np.zeros((2, 6, 60))
    by_field, by_weight = change_b, change_w
    if inverse:  # of x = B^-2 and y = W B^-3
        by_field = -2 * change_b / field**3
        by_weight = (change_w - 3 * weight * change_b / field) / field**3
    deposit(got, (factor, origin), (field, weight, share, smear), (by_field, by_weight), inverse, 0.4, 1.6)
    step = 1e-5
    for k in range(2):
        sides = np.zeros((2, 6, 60))
        for side, sign in zip(sides, (1, -1), strict=True):
            place = (field + sign * step * change_b[k]) * factor + origin
            weights = (weight + sign * step * change_w[k]) * share
            if smeared:
                kernels.deposit_smeared_numpy(side, place, weights, smear, 0.4, 1.6)
            else:
                kernels.deposit_numpy(side, np.intp(0), place, weights)
        assert got[k] == pytest.approx((sides[0] - sides[1]) / (2 * step), abs=1e-6 * np.abs(got[k]).max())
