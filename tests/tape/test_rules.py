"""The value rules of the operations."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from mcx.tape.ops import OPS, Op
from mcx.tape.rules import RULES, evaluate


def test_the_table_is_complete():
    """Every operation with operands has a rule but those that are replaced before a tape runs; nothing else has."""
    assert set(RULES) == {op for op, row in OPS.items() if row.arity != 0} - {Op.UNHIT, Op.MOMENT}
    assert set(OPS) == set(Op)


@pytest.mark.parametrize("op", [op for op, row in OPS.items() if row.flag])
def test_flags_are_zero_or_one(op: Op):
    """A flag is 0.0 or 1.0, also where an operand is not a number."""
    numbers = np.array([0.0, 1.0, 0.5, np.nan])
    operands = [numbers, numbers[::-1]][: OPS[op].arity]
    assert set(evaluate(op, *operands)) <= {0.0, 1.0}


def test_strict_and_not_strict_comparisons_differ_at_equality():
    """`<` is false and `<=` true between equal numbers."""
    assert (evaluate(Op.LT, 2.0, 2.0), evaluate(Op.LE, 2.0, 2.0)) == (0.0, 1.0)


def test_select_keeps_out_what_is_not_taken():
    """A branch that is not taken does not matter, even where it is not a number."""
    chosen = evaluate(Op.SELECT, np.array([1.0, 0.0]), np.array([7.0, np.nan]), np.array([np.nan, 8.0]))
    assert chosen.tolist() == [7.0, 8.0]


@pytest.mark.parametrize("op", [Op.BRIDGE_LOW, Op.BRIDGE_HIGH])
def test_bridge_extremes_follow_their_law(op: Op):
    """The drawn extreme of a bridge has P(min <= m) = exp(-2 (x0 - m)(x1 - m) / v) (Glasserman 2003, section 6.4)."""
    x0, x1, variance, sign = 0.1, -0.2, 0.09, 1.0 if op is Op.BRIDGE_LOW else -1.0
    uniforms = np.random.default_rng(84213376120459).uniform(size=20_000)
    drawn = evaluate(op, sign * x0, sign * x1, variance, uniforms) * sign
    assert np.all(drawn <= min(x0, x1))
    law = stats.kstest(drawn, lambda m: np.exp(-2.0 * (x0 - m) * (x1 - m) / variance))
    assert law.pvalue > 1e-3
