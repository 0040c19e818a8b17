"""Every operation of the kernel against numpy, with rows and scalars in every place, and results put on operands."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from itertools import product

import numpy as np
import pytest
from made_programs import on_rows, outputs_and_sums, program

from mcx.tape.bridges import bridge_corridor, bridge_moment, bridge_range, range_below
from mcx.tape.ops import OPS, Op
from mcx.tape.program import ALONE
from mcx.tape.rules import RULES

NAN, INF = np.nan, np.inf


def bridge(sign: float) -> Callable[..., np.ndarray]:
    """The extreme of a Brownian bridge by inversion of its law."""
    return lambda x0, x1, v, u: 0.5 * (x0 + x1 + sign * np.sqrt((x1 - x0) ** 2 - 2.0 * v * np.log(u)))


PLAIN: dict[Op, Callable[..., np.ndarray]] = {
    Op.ADD: np.add,
    Op.SUB: np.subtract,
    Op.MUL: np.multiply,
    Op.DIV: np.divide,
    Op.NEG: np.negative,
    Op.POW: np.power,
    Op.MIN: np.minimum,
    Op.MAX: np.maximum,
    Op.ABS: np.abs,
    Op.EXP: np.exp,
    Op.LOG: np.log,
    Op.SQRT: np.sqrt,
    Op.LT: np.less,
    Op.LE: np.less_equal,
    Op.EQ: np.equal,
    Op.NE: np.not_equal,
    Op.AND: np.logical_and,
    Op.OR: np.logical_or,
    Op.NOT: np.logical_not,
    Op.SELECT: lambda c, a, b: np.where(c != 0.0, a, b),
    Op.STEP: lambda x, s, z: x + s * z,
    Op.BRIDGE_LOW: bridge(-1.0),
    Op.BRIDGE_HIGH: bridge(1.0),
    Op.BRIDGE_CLEAR: lambda d0, d1, v: np.where((d0 > 0) & (d1 > 0), 1.0 - np.exp(-2.0 * d0 * d1 / v), 0.0),
    Op.BRIDGE_CORRIDOR: bridge_corridor,
    Op.BRIDGE_RANGE: bridge_range,
    Op.BRIDGE_MOMENT: bridge_moment,
}
SPECIAL = (0.0, -0.0, 1.0, -1.0, 2.0, 0.5, NAN, INF, -INF, 1e-310, 1e300, -3.0)


def operand_rows(op: Op) -> np.ndarray:
    """Rows for each operand, (arity, 64): random numbers, then pairs of special ones."""
    rng = np.random.default_rng(9067114500213 + op)
    rows = rng.choice([-2.0, -1.0, 0.0, 1.0, 2.0], (4, 64)) * rng.uniform(0.5, 1.5, (4, 64))
    rows[:, :12] = np.round(rows[:, :12])  # so that equal ones meet
    if op in (Op.BRIDGE_LOW, Op.BRIDGE_HIGH):
        rows[2], rows[3] = np.abs(rows[2]), rng.uniform(0.0, 1.0, 64)
        rows[2, :8] = 0.0  # no variance: the ends themselves
    elif op in (Op.BRIDGE_CLEAR, Op.BRIDGE_CORRIDOR, Op.BRIDGE_RANGE, Op.BRIDGE_MOMENT):
        rows[2:] = np.abs(rows[2:]) + 0.1
        rows[2 if op is Op.BRIDGE_RANGE else OPS[op].arity - 1, :4] = 0.0  # no variance
        if op is Op.BRIDGE_CORRIDOR:
            rows[:2, 32:] = np.abs(rows[:2, 32:]) * 0.3
            rows[3, 16:] *= 10.0 ** rng.uniform(-2.0, 1.0, 48)  # short steps and long ones
            rows[2, 60:] = INF, INF, -1.0, 1e-3
        elif op is Op.BRIDGE_MOMENT:
            rows[3] = rng.uniform(0.0, 1.0, 64)
        elif op is Op.BRIDGE_RANGE:
            rows[:2], rows[3] = np.abs(rows[:2]), rng.uniform(0.0, 1.0, 64)
    elif op is Op.POW:
        rows[0] = np.abs(rows[0])
    else:
        for k, row in enumerate(rows):
            row[40:] = np.resize(np.roll(SPECIAL, 5 * k), 24)
    if op is Op.STEP:  # fused, a product never overflows by itself, so that infinity less it is no NaN
        rows[rows == 1e300] = 1e100
    return rows[: OPS[op].arity]


def expect(op: Op, operands: list[np.ndarray | float]) -> np.ndarray:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        return np.broadcast_to(PLAIN[op](*(np.asarray(v) for v in operands)), 64).astype(float)


def check(op: Op, found: np.ndarray, expected: np.ndarray) -> None:
    """Operations of one rounding agree to the last bit, the others to a few units."""
    exact = op not in (Op.EXP, Op.LOG, Op.POW, Op.STEP, Op.BRIDGE_LOW, Op.BRIDGE_HIGH)
    scale = 0.0 if exact else 1e-15
    if op >= Op.BRIDGE_CLEAR:
        rtol = 1e-9 if op is Op.BRIDGE_RANGE else 0.0
        return np.testing.assert_allclose(found, expected, rtol=rtol, atol=1e-14)
    np.testing.assert_allclose(found, expected, rtol=0.0 if exact else 1e-14, atol=scale)


def test_every_operation_has_a_plain_meaning_here():
    """No operation of the kernel is left out of these tests."""
    slopes = {Op.CORRIDOR_BY_START, Op.CORRIDOR_BY_WIDTH, Op.CORRIDOR_BY_ENDS, Op.RANGE_BY_START}
    assert set(PLAIN) == set(RULES) - {Op.LOOKUP} - slopes


@pytest.mark.parametrize("op", PLAIN, ids=lambda op: op.name)
def test_operation_with_rows_and_scalars(op: Op):
    """Every mixture of rows and scalars, scalars of every kind, gives what numpy gives."""
    rows = operand_rows(op)
    for kinds in product("rs", repeat=len(rows)):
        for lane in (0, 3, 20, 30, 41, 46, 47, 60):  # whose values stand in for the scalars
            scalars = rows[:, lane]
            operands = [k if kind == "r" else -1 - k for k, kind in enumerate(kinds)]
            made = program([(op, 5, *operands)], rows=6, outputs=[5], scalars=scalars)
            values = [rows[k] if kind == "r" else scalars[k] for k, kind in enumerate(kinds)]
            check(op, on_rows(made, rows)[0], expect(op, values))


@pytest.mark.parametrize("op", PLAIN, ids=lambda op: op.name)
def test_operation_onto_one_of_its_operands(op: Op):
    """The result may go where any operand stands, and is found there by the next instruction."""
    rows = operand_rows(op)
    for to in range(len(rows)):
        made = program([(op, to, *range(len(rows))), (Op.MUL, 5, to, -1)], rows=6, outputs=[to, 5], scalars=[1.0])
        expected = expect(op, list(rows))
        for found in on_rows(made, rows):
            check(op, found, expected)


@pytest.mark.parametrize("op", [op for op in PLAIN if OPS[op].arity == 2], ids=lambda op: op.name)
def test_operation_on_one_row_twice(op: Op):
    """Both operands may be the same row, and the result may go there too."""
    rows = operand_rows(op)[:1]
    for to in (0, 1):
        check(op, on_rows(program([(op, to, 0, 0)], rows=2, outputs=[to]), rows)[0], expect(op, [rows[0], rows[0]]))


@pytest.mark.parametrize("exponent", [-8, -3, -1, 0, 1, 2, 3, 5, 7, 8, 9, 0.5, -0.5, 1.7])
def test_scalar_powers(exponent: float):
    """Whole powers by multiplications and the square root are np.power to rounding, from 0 to infinity."""
    x = np.concatenate([np.random.default_rng(70124).uniform(0.1, 3.0, 60), [0.0, 1.0, INF, NAN]])[None]
    made = program([(Op.POW, 1, 0, -1)], rows=2, outputs=[1], scalars=[exponent])
    check(Op.POW, on_rows(made, x)[0], expect(Op.POW, [x[0], exponent]))


def test_negative_bases_with_whole_powers():
    """A negative number has whole powers, with the right sign."""
    x = -np.random.default_rng(80551).uniform(0.1, 3.0, (1, 64))
    for exponent in (-3.0, -2.0, 1.0, 2.0, 3.0, 11.0):
        made = program([(Op.POW, 1, 0, -1)], rows=2, outputs=[1], scalars=[exponent])
        np.testing.assert_allclose(on_rows(made, x)[0], x[0] ** exponent, rtol=1e-14)


def test_select_keeps_the_branch_not_taken_out():
    """Neither NaN nor infinity comes through from the other branch; a condition that is NaN counts as true."""
    rows = np.zeros((3, 64))
    rows[0, ::2], rows[0, 1] = 1.0, NAN
    rows[1], rows[2] = np.where(rows[0] != 0.0, 5.0, NAN), np.where(rows[0] != 0.0, INF, 7.0)
    found = on_rows(program([(Op.SELECT, 3, 0, 1, 2)], rows=4, outputs=[3]), rows)[0]
    np.testing.assert_array_equal(found, np.where(rows[0] != 0.0, 5.0, 7.0))


def test_bridge_without_variance_ends_at_its_ends():
    """With no variance the minimum is the lower end and the maximum the higher one, exactly."""
    x0, x1 = np.random.default_rng(41188290).normal(size=(2, 64))
    rows = np.array([x0, x1, np.full(64, 0.3)])
    for op, plain in ((Op.BRIDGE_LOW, np.minimum), (Op.BRIDGE_HIGH, np.maximum)):
        made = program([(op, 3, 0, 1, -1, 2)], rows=4, outputs=[3], scalars=[0.0])
        np.testing.assert_allclose(on_rows(made, rows)[0], plain(x0, x1), rtol=0.0, atol=5e-16)


def test_long_program_against_numpy():
    """Two hundred random instructions on six rows that are written again and again agree with numpy."""
    rng = np.random.default_rng(3360117450987)
    ops = [Op.ADD, Op.SUB, Op.MUL, Op.MIN, Op.MAX, Op.ABS, Op.NEG, Op.LT, Op.SELECT, Op.STEP, Op.NOT]
    scalars = rng.normal(size=5)
    start = rng.normal(size=(6, 64))
    rows, lines = start.copy(), []
    for op in rng.choice(ops, 200):
        op, to = Op(op), int(rng.integers(0, 6))
        operands = [int(k) for k in rng.integers(-5, 6, OPS[op].arity)]
        lines += [(op, to, *operands), (Op.MIN, to, to, -6), (Op.MAX, to, to, -7)]  # kept small
        value = expect(op, [rows[k] if k >= 0 else scalars[-1 - k] for k in operands])
        rows[to] = np.clip(value, -4.0, 4.0)
    made = program(lines, rows=6, outputs=range(6), scalars=[*scalars, 4.0, -4.0])
    np.testing.assert_allclose(on_rows(made, start), rows, rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("lanes", [64, 37, 1])
def test_sums_over_lanes(lanes: int):
    """A row, a product of rows, a scalar and a product with one are added up over the lanes that count."""
    rows = np.random.default_rng(70030021).normal(size=(3, 64))
    counted = rows[:, :lanes]
    made = program([(Op.ADD, 3, 0, 1)], rows=4, outputs=[3], scalars=[2.5],
                   sums=[(3, ALONE, 1), (0, 2, 0), (-1, ALONE, 0), (1, -1, 0), (1, 1, 0)])
    found = outputs_and_sums(made, counted)[1]
    x, y, z = counted
    expected = [(x + y).sum(), (x * z).sum(), 2.5 * lanes, 2.5 * y.sum(), (y * y).sum()]
    np.testing.assert_allclose(found, expected, rtol=1e-13, atol=1e-13)


def test_a_sum_is_taken_before_its_row_is_written_again():
    """Sums stand between the instructions where they were asked for, also between a drift and its step."""
    lines = [(Op.ADD, 3, 0, -1), (Op.STEP, 4, 3, -2, 1), (Op.MUL, 3, 4, 4), (Op.MUL, 4, 3, 3)]
    rows = np.random.default_rng(3004417).normal(size=(2, 64))
    sums = [(4, ALONE, 2), (4, ALONE, 4), (3, 4, 3), (3, ALONE, 1)]
    found = outputs_and_sums(program(lines, rows=5, outputs=[4], scalars=[0.5, 2.0], sums=sums), rows)[1]
    moved = rows[0] + 0.5
    step = moved + 2.0 * rows[1]
    expected = [step.sum(), (step**4).sum(), (step**3).sum(), moved.sum()]
    np.testing.assert_allclose(found, expected, rtol=1e-12)


def test_lookup_counts_entries():
    """The whole part of x counts the entries, which stand one behind the other; beyond them the first or the last."""
    x = np.resize([-3.0, -0.5, 0.0, 0.9, 1.0, 1.7, 2.0, 2.5, 9.0, 1e300, -1e300], 64)[None]
    made = program([(Op.LOOKUP, 1, 0, -2, -4)], rows=2, outputs=[1], scalars=[7.0, 10.0, 20.0, 30.0, 8.0])
    expected = np.array([10.0, 20.0, 30.0])[np.clip(np.floor(x[0]), 0, 2).astype(int)]
    np.testing.assert_array_equal(on_rows(made, x)[0], expected)


def test_drawn_ranges_are_the_quantiles_of_their_law():
    """What is drawn for u has the probability u below it, from 1e-9 to almost 1, whatever the ends."""
    rng = np.random.default_rng(552913047)
    rows = np.array([rng.exponential(size=64), rng.exponential(size=64), 10.0 ** rng.uniform(-9.0, -1e-9, 64)])
    made = program([(Op.BRIDGE_RANGE, 3, 0, 1, -1, 2)], rows=4, outputs=[3], scalars=[0.7])
    found = range_below(on_rows(made, rows)[0], rows[0], rows[1], 0.7)
    np.testing.assert_allclose(found, rows[2], rtol=1e-6, atol=1e-12)


@pytest.mark.parametrize("spread", [1e-3, 0.01, 0.049, 0.2, 0.59, 0.61, 3.0])
def test_corridor_in_every_kind_of_step(spread: float):
    """Short steps, longer and long ones have loops of their own; bridges along a barrier and from one barrier to the
    other are where images count."""
    rng = np.random.default_rng(771320947)
    near, width = 10.0 ** rng.uniform(-4.0, -0.5, (2, 64)), 0.8
    rows = np.where(rng.uniform(size=(2, 64)) < 0.5, near, width - near)
    made = program([(Op.BRIDGE_CORRIDOR, 2, 0, 1, -1, -2)], rows=3, outputs=[2], scalars=[width, spread * width**2])
    expected = bridge_corridor(rows[0], rows[1], width, spread * width**2)
    np.testing.assert_allclose(on_rows(made, rows)[0], expected, rtol=0.0, atol=1e-14)
    assert np.count_nonzero((expected > 1e-10) & (expected < 0.999)) > 5


@pytest.mark.parametrize("op", [Op.CORRIDOR_BY_START, Op.CORRIDOR_BY_WIDTH, Op.CORRIDOR_BY_ENDS])
@pytest.mark.parametrize("spread", [1e-3, 0.02, 0.3, 0.59, 0.61, 3.0])
def test_slopes_of_a_corridor(op: Op, spread: float):
    """The images that count in a step are enough, inside and outside; and where the upper barrier is none."""
    rng = np.random.default_rng(5210773)
    rows = np.vstack([rng.uniform(-0.1, 0.9, (2, 64)), np.full((1, 64), 0.8)])
    rows[2, :8] = np.inf
    made = program([(op, 3, 0, 1, 2, -1)], rows=4, outputs=[3], scalars=[spread * 0.64])
    expected = RULES[op].value(*rows, spread * 0.64)
    np.testing.assert_allclose(on_rows(made, rows)[0], expected, rtol=1e-9, atol=1e-10)
    assert np.count_nonzero(expected) > 5


def test_slopes_of_a_range():
    """Wherever draws come to: the minimum of a bridge is not far below both ends."""
    rng = np.random.default_rng(30275110)
    rows = np.array([rng.exponential(size=64), rng.exponential(size=64), rng.uniform(0.01, 0.99, 64)])
    lines = [(Op.BRIDGE_RANGE, 3, 0, 1, -1, 2), (Op.RANGE_BY_START, 4, 0, 1, -1, 3)]
    found, slopes = on_rows(program(lines, rows=5, outputs=[3, 4], scalars=[0.7]), rows)
    np.testing.assert_allclose(slopes, RULES[Op.RANGE_BY_START].value(rows[0], rows[1], 0.7, found), rtol=1e-9)
