"""Estimates: means, errors, intervals and distances in standard errors."""

from __future__ import annotations

from math import inf, sqrt

import numpy as np
import pytest
from scipy import stats

from mcx.estimators.estimate import NORMAL_95, Estimate, estimates

SEED = 0xB5C0FBCFEC4D3B2F


def test_normal_point_is_scipys():
    """The 97.5 % point of the standard normal."""
    assert NORMAL_95 == pytest.approx(stats.norm.ppf(0.975), rel=1e-15)


def test_mean_and_error_are_those_of_the_sample():
    """From the sums of squares about the mean, as numpy finds them from the sample; an interval as scipy does."""
    sample = np.random.default_rng(SEED).exponential(2.0, (2, 500))
    mean = sample.mean(axis=1)
    for found, row in zip(estimates(500, mean, ((sample - mean[:, None]) ** 2).sum(axis=1)), sample, strict=True):
        assert (found.value, found.paths) == (row.mean(), 500)
        assert found.standard_error == pytest.approx(stats.sem(row), rel=1e-13)
        assert found.interval95 == pytest.approx(stats.norm.interval(0.95, row.mean(), stats.sem(row)), rel=1e-13)


def test_rounding_below_zero_is_no_spread():
    """A sum of squares that rounding made negative has the error 0."""
    (found,) = estimates(64, [1.0], [-1e-18])
    assert found.standard_error == 0.0


def test_distance_in_standard_errors():
    """0 where the difference is rounding; infinite where an exact estimate misses."""
    assert Estimate(1.02, 0.01, 100).z(1.0) == pytest.approx(2.0)
    assert Estimate(1.0 + 1e-15, 0.0, 100).z(1.0) == 0.0
    assert (Estimate(1.1, 0.0, 100).z(1.0), Estimate(0.9, 0.0, 100).z(1.0)) == (inf, -inf)


def test_multiples():
    """A fixed factor scales value and error; the error stays positive."""
    assert Estimate(2.0, 0.5, 9).times(-3.0) == Estimate(-6.0, 1.5, 9)
    assert Estimate(2.0, 0.5, 9).half_width == pytest.approx(0.5 * stats.norm.ppf(0.975))
    assert sqrt(2.0) == pytest.approx(Estimate(0.0, 1.0, 2).times(sqrt(2.0)).standard_error)
