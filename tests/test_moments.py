"""Compiled moments and their numpy twin give what a plain product of matrices gives."""

import numpy as np
import pytest

from spinfit import moments

TWINS = [moments.moments_numpy, moments.moments]


def problem(n: int, dense: bool) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return eigenvectors of 7 random matrices, Zeeman matrices and two sets of directions."""
    rng = np.random.default_rng(n)
    raw = rng.normal(size=(10, n, n)) + 1j * rng.normal(size=(10, n, n))
    hermitian = raw + raw.conj().swapaxes(-1, -2)
    zeeman = hermitian[7:]
    if not dense:
        zeeman = zeeman * (np.abs(np.subtract.outer(np.arange(n), np.arange(n))) == 1)
    unit = rng.normal(size=(2, 7, 3))
    unit[0, 0] = 0.0, 0.0, 1.0
    unit /= np.linalg.norm(unit, axis=-1, keepdims=True)
    return np.linalg.eigh(hermitian[:7])[1], zeeman, *unit


def plain(vectors: np.ndarray, zeeman: np.ndarray, along: np.ndarray) -> np.ndarray:
    """Return <i|along.zeeman|j> of one point."""
    return vectors.conj().T @ np.tensordot(along, zeeman, 1) @ vectors


@pytest.mark.parametrize("twin", TWINS)
@pytest.mark.parametrize(("n", "dense"), [(2, True), (3, False), (5, True), (8, False)])
def test_slopes_and_intensities(twin, n: int, dense: bool) -> None:
    vectors, zeeman, unit, waves = problem(n, dense)
    alone, none = twin(vectors, zeeman, unit, None)
    assert none is None
    for microwave in ("perpendicular", "parallel", waves):
        slope, intensity = twin(vectors, zeeman, unit, microwave)
        assert slope == pytest.approx(alone, abs=1e-12)
        for p in range(7):
            parallel = plain(vectors[p], zeeman, unit[p])
            if isinstance(microwave, np.ndarray):
                want = np.abs(plain(vectors[p], zeeman, waves[p])) ** 2
            elif microwave == "parallel":
                want = np.abs(parallel) ** 2
            else:  # two directions normal to the field, from the null space of the first
                normal = np.linalg.svd(unit[p][None])[2][1:]
                want = 0.5 * sum(np.abs(plain(vectors[p], zeeman, one)) ** 2 for one in normal)
            assert slope[p] == pytest.approx(np.diag(parallel).real, abs=1e-12)
            assert intensity[p] == pytest.approx(want, abs=1e-10)


@pytest.mark.parametrize("twin", TWINS)
def test_arrays_that_are_not_contiguous_or_not_writeable(twin) -> None:
    vectors, zeeman, unit, _ = problem(4, True)
    want = twin(vectors, zeeman, unit, "perpendicular")
    turned = np.asfortranarray(vectors)
    fixed = zeeman.copy()
    fixed.flags.writeable = False
    got = twin(turned, fixed, unit, "perpendicular")
    assert all(a == pytest.approx(b, abs=1e-12) for a, b in zip(got, want, strict=True))
