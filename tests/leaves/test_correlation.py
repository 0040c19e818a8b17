"""Correlation matrices and the factor of a step's covariance."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.checked.market import Quoted
from mcx.faults import Place
from mcx.leaves.correlation import correlation_matrix, lower_factor

HERE = Place("market.yaml", 1, 1)


def test_pairs_may_be_written_in_either_order():
    """a/b and b/a are one pair, and the diagonal is 1."""
    pairs = {("b", "a"): Quoted(0.3, HERE), ("a", "c"): Quoted(-0.2, HERE), ("b", "c"): Quoted(0.1, HERE)}
    matrix = correlation_matrix(pairs, ["a", "b", "c"])
    assert matrix.tolist() == [[1.0, 0.3, -0.2], [0.3, 1.0, 0.1], [-0.2, 0.1, 1.0]]


def test_a_pair_that_is_not_stated_is_an_error():
    """There is no default correlation."""
    with pytest.raises(KeyError):
        correlation_matrix({}, ["a", "b"])


@given(st.integers(1, 5), st.integers(1, 5), st.integers(0, 2**63))
def test_the_factor_gives_the_covariance_back(size: int, rank: int, seed: int):
    """L is lower-triangular with L L' = C for random positive semi-definite C, singular ones included."""
    loadings = np.random.default_rng(seed).standard_normal((size, rank))
    covariance = loadings @ loadings.T
    factor = lower_factor(covariance)
    assert np.all(np.triu(factor, 1) == 0.0) and np.all(np.isfinite(factor))
    np.testing.assert_allclose(factor @ factor.T, covariance, atol=1e-6 * np.max(covariance))


def test_an_asset_that_all_but_follows_another_keeps_what_is_its_own():
    """At a correlation of 99.999 % two hundred-thousandths of the variance are left, and they are not rounding."""
    factor = lower_factor(np.array([[0.04, 0.99999 * 0.06], [0.99999 * 0.06, 0.09]]))
    assert factor[1, 1] == pytest.approx(0.3 * math.sqrt(1.0 - 0.99999**2), rel=1e-9)


def test_rounding_is_no_randomness():
    """What rounding leaves of the variance of an asset that follows another is dropped, with all that it would move."""
    deviations = np.array([0.17, 0.23, 0.31, 0.4])
    correlation = np.array([[1.0, 0.1, 0.1, 0.1], [0.1, 1.0, 1.0, 0.5], [0.1, 1.0, 1.0, 0.5], [0.1, 0.5, 0.5, 1.0]])
    covariance = correlation * np.outer(deviations, deviations)
    factor = lower_factor(covariance)
    assert factor[2, 2] == 0.0 and factor[3, 2] == 0.0
    np.testing.assert_allclose(factor @ factor.T, covariance, rtol=1e-12)


def test_perfectly_correlated_assets_share_their_randomness():
    """With correlation 1 the second asset moves by the first one's normal alone; without vol it does not move."""
    deviations = np.array([0.2, 0.3, 0.0])
    factor = lower_factor(np.outer(deviations, deviations))
    np.testing.assert_allclose(factor, [[0.2, 0.0, 0.0], [0.3, 0.0, 0.0], [0.0, 0.0, 0.0]], atol=1e-15)
