"""Exponential, logarithm and inverse normal against scipy and numpy's extended precision."""

from __future__ import annotations

import numpy as np
import pytest
from made_programs import many
from scipy.special import ndtri

from mcx.machine.special import exp_row, log_row, normal_row

TINY = np.finfo(np.float64).tiny


def exponential(x: np.ndarray) -> np.ndarray:
    y = np.empty(len(x))
    exp_row(y, x, len(x))
    return y


def logarithm(x: np.ndarray) -> np.ndarray:
    y = np.empty(len(x))
    log_row(y, x, len(x))
    return y


def normal(words: np.ndarray) -> np.ndarray:
    z = np.empty(len(words))
    normal_row(z, words.astype(np.int32), len(words))
    return z


def ulps(found: np.ndarray, exact: np.ndarray) -> float:
    """The largest distance in units of the last place; exact in extended precision."""
    return float(np.max(np.abs(found - exact) / np.spacing(np.abs(exact.astype(np.float64)))))


@pytest.mark.skipif(np.finfo(np.longdouble).eps > 2e-19, reason="numpy has no extended precision here")
@pytest.mark.parametrize("width", [0.3, 1.0, 20.0, 707.0])
def test_exponential_to_two_units(width: float):
    """exp is within two units in the last place wherever it is a normal number."""
    x = np.random.default_rng(83012244017).uniform(-width, width, many(1 << 18))
    assert ulps(exponential(x), np.exp(x.astype(np.longdouble))) < 2.0


@pytest.mark.skipif(np.finfo(np.longdouble).eps > 2e-19, reason="numpy has no extended precision here")
@pytest.mark.parametrize("width", [0.01, 0.5, 5.0, 700.0])
def test_logarithm_to_two_units(width: float):
    """log is within two units in the last place, also next to 1, where it vanishes."""
    x = np.exp(np.random.default_rng(29917450032).uniform(-width, width, many(1 << 18)))
    assert ulps(logarithm(x), np.log(x.astype(np.longdouble))) < 2.0


@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_exponential_at_the_ends():
    """Overflow, gradual underflow, infinities and NaN come out as IEEE has them, beside usual lanes."""
    x = np.array([0.0, -0.0, 1.0, 709.78, 709.79, 710.0, 1e300, np.inf, -708.5, -745.1, -745.2, -750.0, -np.inf,
                  np.nan])
    np.testing.assert_allclose(exponential(x), np.exp(x), rtol=5e-16)


@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_logarithm_at_the_ends():
    """Zero, negative numbers, the smallest and the largest, infinity and NaN come out as IEEE has them."""
    x = np.array([0.0, -0.0, -1.0, -TINY, -np.inf, 5e-324, TINY / 3, TINY, 1.0, np.finfo(np.float64).max, np.inf,
                  np.nan])
    np.testing.assert_allclose(logarithm(x), np.log(x), rtol=5e-16)


def expected_normal(words: np.ndarray) -> np.ndarray:
    """scipy's inverse normal of (k + 1/2) / 2^32, taken from the nearer end so that its argument is exact."""
    lower = np.where(words < 0, words + 2.0**31, 2.0**31 - 1.0 - words) + 0.5
    return np.sign(words + 0.5) * -ndtri(lower / 2.0**32)


def test_inverse_normal_in_the_bulk():
    """Up to three standard deviations the inverse normal is within 1e-12 of scipy's, relative and absolute."""
    words = np.random.default_rng(5518203377401).integers(-(2**31), 2**31, many(1 << 20))
    z, expected = normal(words), expected_normal(words)
    near = np.abs(expected) < 3.0
    np.testing.assert_allclose(z[near], expected[near], rtol=1e-12, atol=0.0)
    np.testing.assert_allclose(z[near], expected[near], rtol=0.0, atol=1e-12)


def test_inverse_normal_in_the_tails():
    """From the first words to the last ones, and where the two formulas meet, it is within 1e-9 of scipy's."""
    ends = np.concatenate([np.arange(512), np.geomspace(600, 2**31 - 1, 512).astype(np.int64)])
    meet = int((1.0 - np.sqrt(0.99)) * 2**31) + np.arange(-256, 256)
    lower = np.concatenate([ends, meet])
    words = np.concatenate([lower - 2**31, 2**31 - 1 - lower])
    np.testing.assert_allclose(normal(words), expected_normal(words), rtol=1e-12)


def test_inverse_normal_is_odd():
    """Word k and its mirror image give the same number with opposite signs, to the last bit."""
    words = np.random.default_rng(7739120045).integers(0, 2**31, 1 << 10)
    np.testing.assert_array_equal(normal(words), -normal(-1 - words))


@pytest.mark.parametrize("lanes", [64, 192])
def test_lanes_beyond_stay_as_they_were(lanes: int):
    """Only the lanes asked for are written."""
    row = np.linspace(0.1, 2.0, 256)
    for function, argument in ((exp_row, row), (log_row, row), (normal_row, np.arange(256, dtype=np.int32))):
        y = np.full(256, -7.0)
        function(y, argument, lanes)
        assert np.all(y[lanes:] == -7.0) and np.all(y[:lanes] != -7.0)
