"""What the compiler is told about rows reaches it, and changes no value."""

from __future__ import annotations

import numba
import numpy as np
import pytest

from mcx.machine.jit import COMPILED
from mcx.machine.rows import borrowed, wide_vectors

pytestmark = pytest.mark.skipif(not COMPILED, reason="nothing is compiled")


@numba.njit
def owned_rows(table, first, last):
    return table[first:last]


@numba.njit
def lent_rows(table, first, last):
    return borrowed(table)[first:last]


@numba.njit
def doubled(x):
    wide_vectors()
    return 2.0 * x


def test_views_of_what_is_borrowed_are_not_counted():
    """They have the same values, shape and strides, also where rows lie apart; only owned ones are counted."""
    table = np.random.default_rng(70512).normal(size=(6, 9))[:, :5]
    owned, lent = owned_rows(table, 1, 4), lent_rows(table, 1, 4)
    np.testing.assert_array_equal(lent, table[1:4])
    assert lent.strides == owned.strides == table.strides
    assert ["NRT_incref" in str(rows.inspect_llvm()) for rows in (owned_rows, lent_rows)] == [True, False]


def test_wide_vectors_are_asked_for():
    """The function asks for 512 bits and gives what it gave."""
    assert doubled(1.5) == 3.0
    assert '"prefer-vector-width"="512"' in str(doubled.inspect_llvm())
