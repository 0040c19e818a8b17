"""What the compiler is told about rows reaches it, and changes no value."""

from __future__ import annotations

import numba
import numpy as np
import pytest

from mcx.machine.jit import COMPILED, jit
from mcx.machine.rows import wide_vectors

pytestmark = pytest.mark.skipif(not COMPILED, reason="nothing is compiled")


@jit
def rows_between(table, first, last):
    return table[first:last].sum()


@numba.njit
def doubled(x):
    wide_vectors()
    return 2.0 * x


def test_views_of_rows_are_not_counted():
    """A kernel holds no reference counts; numba's usual way does. Both are compiled anew: code from a cache shows nothing."""
    wanted = {key: rows_between.targetoptions[key] for key in ("error_model", "fastmath", "nogil", "_nrt")}
    usual, ours = numba.njit(rows_between.py_func), numba.njit(**wanted)(rows_between.py_func)
    table = np.random.default_rng(70512).normal(size=(6, 9))
    assert rows_between(table, 1, 4) == usual(table, 1, 4) == ours(table, 1, 4)
    assert ["NRT_incref" in str(rows.inspect_llvm()) for rows in (usual, ours)] == [True, False]


def test_wide_vectors_are_asked_for():
    """The function asks for 512 bits and gives what it gave."""
    assert doubled(1.5) == 3.0
    assert '"prefer-vector-width"="512"' in str(doubled.inspect_llvm())
