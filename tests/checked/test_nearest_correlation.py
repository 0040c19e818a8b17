"""Correlation matrices: the test for validity and the nearest valid one."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.checked.nearest_correlation import nearest_correlation, smallest_eigenvalue


def test_nearest_of_a_published_example():
    """Higham (2002), section 4, the 3 x 3 example, from memory: off-diagonals 0.7607, 0.1573, 0.7607."""
    nearest = nearest_correlation([[1, 1, 0], [1, 1, 1], [0, 1, 1]])
    assert [nearest[0][1], nearest[0][2], nearest[1][2]] == pytest.approx([0.7607, 0.1573, 0.7607], abs=5e-5)


def test_smallest_eigenvalue():
    """Three assets, all pairs at rho: the eigenvalues are 1 - rho twice and 1 + 2 rho."""
    for rho in (0.3, -0.4, -0.6):
        rows = [[1.0 if i == j else rho for j in range(3)] for i in range(3)]
        assert smallest_eigenvalue(rows) == pytest.approx(min(1 - rho, 1 + 2 * rho), abs=1e-14)


def test_rounding_is_forgiven():
    """A singular matrix is valid, whatever rounding makes of its smallest eigenvalue."""
    assert smallest_eigenvalue([[1.0] * 4] * 4) >= 0


@given(st.integers(3, 7), st.integers(0, 2**32))
def test_the_nearest_stays_valid_when_it_is_printed(size: int, seed: int):
    """Rounded to six decimals, as it is printed, the nearest matrix passes the test that its original
    failed."""
    rows = np.random.default_rng(seed).uniform(-1, 1, (size, size))
    rows = np.tril(rows, -1) + np.tril(rows, -1).T + np.eye(size)
    printed = np.round(nearest_correlation(rows), 6)
    assert np.array_equal(np.diag(printed), np.ones(size))
    assert np.abs(printed).max() <= 1
    assert smallest_eigenvalue(printed) >= 0
