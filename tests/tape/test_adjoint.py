"""The adjoint: rules by differences, rules planted wrong, undefined branches, whole tapes, the way to the leaves."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from helpers import document, prepare
from hypothesis import assume, given
from scipy.special import ndtr
from strategies import inputs_for, tapes

from mcx.leaves.market_map import MarketMap
from mcx.machine.run import run
from mcx.tape.adjoint import Gradient, finished, leaf_sums, on_paths, sums_of, sweep, with_adjoint
from mcx.tape.adjoint_rules import ADJOINTS, At, Numbers, Product, Rule, rules_of
from mcx.tape.builder import Builder
from mcx.tape.interpret import interpret
from mcx.tape.ops import OPS, Op
from mcx.tape.program import Leaf, LeafKind, Output, Sum, Tape
from mcx.tape.registers import lower
from mcx.tape.rules import RULES, evaluate
from mcx.tape.verify import problems

LANES = 50
SLOPES = (Op.CORRIDOR_BY_WIDTH, Op.CORRIDOR_BY_ENDS, Op.RANGE_BY_START)  # of which no derivative is taken
DIFFERENTIABLE = [op for op in Op if any(ADJOINTS.get(op, ()))]


def every_leaf(leaf: Leaf) -> bool:
    return True


def number(name: str) -> Leaf:
    return Leaf(LeafKind.TERM, name=name)


# Rules one by one


def operands_of(op: Op) -> np.ndarray:
    """Operands that an operation is defined and smooth on, (arity, lanes)."""
    draws = np.random.default_rng(5520031964 + op)
    rows = draws.normal(size=(OPS[op].arity, LANES))
    if op in (Op.BRIDGE_LOW, Op.BRIDGE_HIGH):
        rows[2], rows[3] = draws.uniform(0.01, 0.5, LANES), draws.uniform(0.01, 0.99, LANES)
    elif op in (Op.LOG, Op.SQRT, Op.POW, Op.DIV):
        rows = np.abs(rows) + 0.2
    elif op is Op.BRIDGE_CLEAR:
        rows = draws.uniform(0.1, 1.0, (3, LANES))
    elif op in (Op.BRIDGE_CORRIDOR, Op.CORRIDOR_BY_START):  # short steps and long ones
        rows[2], rows[3] = draws.uniform(0.5, 2.0, LANES), 10.0 ** draws.uniform(-1.5, 0.5, LANES)
        rows[:2] = rows[2] * draws.uniform(0.05, 0.95, (2, LANES))
    elif op is Op.BRIDGE_RANGE:
        rows = draws.uniform(0.1, 1.0, (4, LANES))
    elif op is Op.SELECT:
        rows[0] = rows[0] > 0.0
    return rows


def off_by(op: Op, rules: tuple[Rule | None, ...], risky: bool) -> float:
    """How far the adjoint of an operation is from central differences, relatively, in random directions."""
    draws = np.random.default_rng(8810340551 + op)
    x, bar = operands_of(op), draws.normal(size=LANES)
    at = At(Numbers(), tuple(x), evaluate(op, *x), bar, risky)
    parts = [rule and rule(at) for rule in rules]
    worst = 0.0
    for _ in range(3):
        direction = draws.normal(size=x.shape) * np.array([[rule is not None] for rule in rules])
        step = 1e-6 * direction
        expected = bar * (evaluate(op, *(x + step)) - evaluate(op, *(x - step))) / 2e-6
        found = sum(along * np.multiply(part.left, 1.0 if part.right is None else part.right)
                    for along, part in zip(direction, parts, strict=True) if part)
        worst = max(worst, float(np.max(np.abs(found - expected) / (1e-3 + np.abs(expected)))))
    return worst


def test_the_table_is_complete():
    """Every operation with operands has a rule, or None, for each of them, and nothing else has."""
    assert set(ADJOINTS) == set(RULES) - {Op.LOOKUP}  # which has any number
    assert len(rules_of(Op.LOOKUP, 5)) == 5
    assert all(len(rules) == OPS[op].arity for op, rules in ADJOINTS.items())


@pytest.mark.parametrize("risky", [False, True])
@pytest.mark.parametrize("op", DIFFERENTIABLE, ids=lambda op: op.name)
def test_a_rule_is_the_derivative(op: Op, risky: bool):
    """Projected on random directions the rules agree with central differences, guarded or not."""
    assert off_by(op, ADJOINTS[op], risky) < 1e-5


@pytest.mark.parametrize("op", DIFFERENTIABLE, ids=lambda op: op.name)
def test_a_rule_wrong_by_a_thousandth_is_caught(op: Op):
    """Each rule of an operation, made wrong by a thousandth, is told from the right one by the same check."""
    def wrong(rule: Rule) -> Rule:
        return lambda at: Product(1.001 * rule(at).left, rule(at).right)

    for position, rule in enumerate(ADJOINTS[op]):
        if rule:
            planted = (*ADJOINTS[op][:position], wrong(rule), *ADJOINTS[op][position + 1:])
            assert off_by(op, planted, False) > 1e-4


@pytest.mark.parametrize("op", [op for op in ADJOINTS if op not in (*DIFFERENTIABLE, *SLOPES, Op.BRIDGE_MOMENT)],
                         ids=lambda op: op.name)
def test_what_has_no_rule_is_flat(op: Op):
    """A small move of the operands of a comparison or of logic changes nothing."""
    x = operands_of(op)
    assert np.array_equal(evaluate(op, *x), evaluate(op, *(x + 1e-9)))


def test_a_table_gives_its_adjoint_to_the_entry_that_is_counted():
    """Beyond the table that is the first entry or the last; what counts has no derivative."""
    x, bar = np.array([-3.0, 0.0, 0.5, 1.0, 1.9, 2.0, 7.0]), np.arange(1.0, 8.0)
    at = At(Numbers(), (x, 4.0, 5.0, 6.0), np.zeros(7), bar, False)
    rules = rules_of(Op.LOOKUP, 4)
    assert rules[0] is None
    counted = evaluate(Op.LOOKUP, x, 0.0, 1.0, 2.0)
    for number, rule in enumerate(rules[1:]):
        np.testing.assert_array_equal(rule(at).left, np.where(counted == number, bar, 0.0))


@pytest.mark.parametrize("ends", [(-0.1, 0.3), (0.3, -0.1), (0.0, 0.2), (0.9, 0.2), (0.2, 0.9)])
@pytest.mark.parametrize("variance", [0.0, 0.04])
@pytest.mark.parametrize("op", [Op.BRIDGE_CLEAR, Op.BRIDGE_CORRIDOR])
def test_a_chance_that_is_decided_has_no_derivative(op: Op, variance: float, ends: tuple[float, float]):
    """Where a barrier is reached at an end, or there is no variance, every part is 0 and none NaN."""
    operands = (*ends, variance) if op is Op.BRIDGE_CLEAR else (*ends, 0.8, variance)
    decided = variance == 0.0 or min(ends) <= 0.0 or (op is Op.BRIDGE_CORRIDOR and max(ends) >= 0.8)
    at = At(Numbers(), tuple(map(np.float64, operands)), evaluate(op, *operands), np.float64(2.0), True)
    with np.errstate(all="ignore"):
        parts = [rule(at) for rule in ADJOINTS[op]]
    found = [part.left * (1.0 if part.right is None else part.right) for part in parts]
    assert np.isfinite(found).all()
    assert decided == (np.abs(found).max() == 0.0)


@pytest.mark.parametrize(("op", "taken"), [(Op.MIN, 0), (Op.MAX, 0)])
def test_at_a_tie_the_first_operand_takes_all(op: Op, taken: int):
    """Where both operands are equal the adjoint is given once."""
    at = At(Numbers(), (2.0, 2.0), 2.0, 5.0, False)
    assert [rule(at).left for rule in ADJOINTS[op]] == [5.0 * (k == taken) for k in range(2)]


# Branches that are not taken


def gradient_on_paths(tape: Tape, leaves: np.ndarray, normals: np.ndarray, uniforms: np.ndarray,
                      value: int) -> dict[Leaf, np.ndarray]:
    """The derivatives of a value by the leaves on each path, through the interpreter."""
    builder = Builder.of(tape)
    gradient = sweep(builder, {value: builder.constant(1.0)}, every_leaf)
    entries = {uniform: on_paths(builder, parts) for uniform, parts in gradient.items()}
    swept = builder.tape(tape.outputs, tape.normals, tape.uniforms)
    assert problems(swept) == []
    values = interpret(swept, leaves, normals, uniforms)
    width = normals.shape[1]
    found = {leaf: np.zeros(width) for leaf in tape.leaves}
    for lane in range(width):
        made = Tape(swept.instructions, (), sums=tuple(Sum(entries[u], None, u) for u in entries))
        row = np.array([np.broadcast_to(values[entries[u]], width)[lane] for u in entries])
        for leaf, derivative in zip(tape.leaves, leaf_sums(made, leaves, row), strict=True):
            found[leaf][lane] = derivative
    return found


UNDEFINED = {
    "log": lambda t, x, a: t.emit(Op.LOG, t.emit(Op.MUL, x, a)),
    "root": lambda t, x, a: t.emit(Op.SQRT, t.emit(Op.MUL, x, a)),
    "reciprocal": lambda t, x, a: t.emit(Op.DIV, a, t.emit(Op.MAX, x, t.constant(0.0))),
    "quotient": lambda t, x, a: t.emit(Op.DIV, t.emit(Op.MUL, x, a), t.emit(Op.MAX, x, t.constant(0.0))),
    "power": lambda t, x, a: t.emit(Op.POW, t.emit(Op.MAX, x, t.constant(0.0)), t.emit(Op.NEG, a)),
    "exponential": lambda t, x, a: t.emit(Op.EXP, t.emit(Op.MUL, a, t.emit(Op.DIV, t.constant(1.0), x))),
    "product with infinity": lambda t, x, a: t.emit(
        Op.MUL, a, t.emit(Op.DIV, t.constant(1.0), t.emit(Op.MAX, x, t.constant(0.0)))),
    "extreme of infinity": lambda t, x, a: t.emit(
        Op.MIN, t.emit(Op.DIV, a, t.emit(Op.MAX, x, t.constant(0.0))), t.emit(Op.ADD, a, t.constant(1e6))),
    "absolute": lambda t, x, a: t.emit(Op.ABS, t.emit(Op.LOG, t.emit(Op.MUL, x, a))),
    "sum": lambda t, x, a: t.emit(Op.ADD, t.emit(Op.MUL, t.emit(Op.LOG, x), a), t.emit(Op.SQRT, x)),
    "difference": lambda t, x, a: t.emit(Op.SUB, t.emit(Op.SQRT, x), t.emit(Op.MUL, t.emit(Op.LOG, x), a)),
    "negative": lambda t, x, a: t.emit(Op.NEG, t.emit(Op.MUL, t.emit(Op.LOG, x), a)),
    "step": lambda t, x, a: t.emit(Op.STEP, t.emit(Op.LOG, x), a, t.emit(Op.SQRT, x)),
    "choice": lambda t, x, a: t.emit(Op.SELECT, t.emit(Op.LT, x, a), t.emit(Op.LOG, t.emit(Op.MUL, x, a)), a),
}


@pytest.mark.parametrize("way", ["conditional", "ended"])
@pytest.mark.parametrize("name", UNDEFINED)
def test_what_is_not_taken_puts_no_nan_in(name: str, way: str):
    """Where an operation is undefined and its result not used, by a conditional or because the contract has ended, the
    derivative is 0 there, and elsewhere what differences give."""
    tape = Builder()
    z, a = tape.input(Op.NORMAL, 0), tape.leaf(number("a"))
    x = tape.emit(Op.MIN, z, tape.emit(Op.ADD, z, tape.constant(1.0)))  # the normal, but no draw to the analysis
    x = tape.emit(Op.SUB, tape.emit(Op.ADD, x, tape.constant(1.0)), tape.constant(1.0))
    flag = tape.emit(Op.LT, tape.constant(0.0), x)
    made = UNDEFINED[name](tape, x, a)
    if way == "ended":
        made = tape.emit(Op.MUL, made, tape.constant(0.5))
    price = tape.emit(Op.SELECT, flag, made, tape.constant(0.0))
    built = tape.tape([Output("price", price)], normals=1)
    normals = np.array([[-1.5, 0.0, -1e-320, 0.7, 1.9, -0.2, 0.3]])
    at, h = np.array([1.3]), 1e-6
    found = gradient_on_paths(built, at, normals, np.empty((0, 7)), price)[number("a")]
    up, down = (interpret(built, at + move, normals)[price] for move in (h, -h))
    assert np.all(np.isfinite(found)) and np.all(found[normals[0] <= 0.0] == 0.0)
    np.testing.assert_allclose(found, (up - down) / (2.0 * h), rtol=1e-6, atol=1e-8)


def test_the_root_of_what_stays_zero_is_flat():
    """sqrt(max(x, 0) * a) has the derivative 0 by a where x is negative, not 0 times infinity."""
    tape = Builder()
    x, a = tape.input(Op.NORMAL, 0), tape.leaf(number("a"))
    inner = tape.emit(Op.MUL, tape.emit(Op.MAX, x, tape.constant(0.0)), a)
    for root in (tape.emit(Op.SQRT, inner), tape.emit(Op.POW, inner, tape.constant(0.7))):
        built = tape.tape([Output("price", root)], normals=1)
        found = gradient_on_paths(built, np.array([2.0]), np.array([[-1.0, 1.0]]), np.empty((0, 2)), root)
        assert found[number("a")][0] == 0.0 and found[number("a")][1] > 0.1


@pytest.mark.parametrize("op", [Op.BRIDGE_LOW, Op.BRIDGE_HIGH])
def test_a_bridge_that_cannot_move(op: Op):
    """Without variance and move the extreme follows both ends half, and nothing is NaN."""
    at = At(Numbers(), (0.3, 0.3, 0.0, 0.4), 0.3, 1.0, True)
    assert [rule(at).left for rule in ADJOINTS[op][:3]] == [0.5, 0.5, 0.0]


# Whole tapes


@given(tapes())
def test_random_tapes(tape: Tape):
    """On every path where both one-sided differences agree, the gradient of a random tape is their value."""
    leaves, normals, uniforms = inputs_for(tape, 16, seed=90122375503)
    value, h = tape.outputs[0].value, 1e-6
    assume(not OPS[tape.instructions[value].op].flag)
    found = gradient_on_paths(tape, leaves, normals, uniforms, value)
    middle = np.broadcast_to(interpret(tape, leaves, normals, uniforms)[value], 16)
    for k, leaf in enumerate(tape.leaves):
        move = np.where(np.arange(len(leaves)) == k, h, 0.0)
        up, down = (np.broadcast_to(interpret(tape, leaves + way, normals, uniforms)[value], 16)
                    for way in (move, -move))
        right, left = (up - middle) / h, (middle - down) / h
        scale = 1.0 + np.abs(right) + np.abs(middle)
        smooth = np.isfinite(scale) & (np.abs(right - left) < 1e-4 * scale) & (scale < 1e4)
        np.testing.assert_array_less(np.abs(found[leaf] - 0.5 * (right + left))[smooth], (1e-3 * scale)[smooth])


def test_the_sweep_in_full():
    """The adjoint of a call, printed: what it appends is one product for each reader of a leaf."""
    tape = Builder()
    log = tape.emit(Op.ADD, tape.leaf(Leaf(LeafKind.LOG_SPOT, 0)), tape.leaf(Leaf(LeafKind.DRIFT, 0, end=1.0)))
    log = tape.emit(Op.STEP, log, tape.leaf(Leaf(LeafKind.FACTOR, 0, 0, end=1.0)), tape.input(Op.NORMAL, 0))
    gain = tape.emit(Op.SUB, tape.emit(Op.EXP, log), tape.leaf(number("strike")))
    price = tape.emit(Op.MUL, tape.emit(Op.MAX, gain, tape.constant(0.0)), tape.leaf(Leaf(LeafKind.DISCOUNT, end=1.0)))
    swept = with_adjoint(tape.tape([Output("price", price)], normals=1), [price])
    assert str(swept).splitlines()[-8:] == [
        "v13 = constant 1.0",
        "v14 = v9 <= v8",
        "v15 = v11 if v14 else v9",
        "v16 = v6 * v15",
        "price -> v12",
        "sum by v11 -> v13 * v10",
        "sum by v2 -> v16",
        "sum by v3 -> v16 * v4",
    ]


def test_values_that_are_held_do_not_move():
    """Nothing flows through a held value, nor into leaves that are not wanted."""
    tape = Builder()
    a, b = tape.leaf(number("a")), tape.leaf(number("b"))
    x = tape.emit(Op.MUL, a, tape.input(Op.NORMAL, 0))
    price = tape.emit(Op.MUL, tape.emit(Op.ADD, x, b), a)
    one = tape.constant(1.0)
    assert set(sweep(tape, {price: one}, every_leaf)) == {a, b}
    assert set(sweep(tape, {price: one}, lambda leaf: leaf.name == "b")) == {b}
    parts = sweep(tape, {price: one}, every_leaf, held={x})
    assert len(parts[a]) == 1 and set(parts) == {a, b}
    assert sweep(tape, {price: one}, every_leaf, held={price}) == {}


def test_from_values_common_to_all_paths_to_the_leaves():
    """What leaves combine to before any path is drawn is differentiated in plain numbers, for every part of a run."""
    tape = Builder()
    a, b = tape.leaf(number("a")), tape.leaf(number("b"))
    mixed = tape.emit(Op.MUL, tape.emit(Op.EXP, a), tape.emit(Op.SQRT, b))
    capped = tape.emit(Op.MIN, mixed, tape.emit(Op.POW, b, a))
    price = tape.emit(Op.ADD, tape.emit(Op.MUL, capped, tape.input(Op.NORMAL, 0)), tape.emit(Op.DIV, a, b))
    built = tape.tape([Output("price", price)], normals=1)
    swept, at, h = with_adjoint(built, [price], every_leaf), np.array([0.4, 1.7]), 1e-6
    sums = run(lower(swept, at), seed=71, paths=640)
    parts = leaf_sums(swept, at, sums.sums)
    assert parts.shape == (64, 2) and np.all(parts[10:] == 0.0)
    for k in range(2):
        up, down = (run(lower(built, at + way * h * np.eye(2)[k]), seed=71, paths=640).mean[0] for way in (1, -1))
        assert parts.sum(axis=0)[k] / 640 == pytest.approx((up - down) / (2 * h), rel=1e-7)


def test_a_value_that_no_path_moves():
    """The price of a bond is the same on every path; its derivative is a sum of ones."""
    tape = Builder()
    bond = tape.emit(Op.MUL, tape.leaf(number("notional")), tape.leaf(Leaf(LeafKind.DISCOUNT, end=1.0)))
    built = tape.tape([Output("price", bond), Output("z", tape.input(Op.NORMAL, 0))], normals=1)
    swept = with_adjoint(built, [bond])
    sums = run(lower(swept, [100.0, 0.9]), seed=3, paths=200)
    assert leaf_sums(swept, [100.0, 0.9], sums.sums.sum(axis=0)).tolist() == [200 * 0.9, 200 * 100.0]


def test_outputs_stay_as_they_were():
    """With sums the outputs have the same digits, and leaves the same order."""
    ready = prepare(document("asian", side="call", average_type="arithmetic", strike_type="fixed", strike=100,
                             averaging="{count: 12, until: 1y}", expiry="1y") + MARKET)
    tape = ready.unrolled.tape
    swept = with_adjoint(tape, [tape.outputs[0].value])
    leaves = MarketMap(ready.market, ready.dated.contract).values(tape.leaves)
    assert problems(swept) == [] and swept.leaves == tape.leaves
    plain, more = (run(lower(each, leaves), seed=5, paths=1000) for each in (tape, swept))
    assert plain.mean.tobytes() == more.mean.tobytes() and plain.m2.tobytes() == more.m2.tobytes()


MARKET = """
---
market: 0y
rates: {EUR: 3%}
funding: {EUR: 0 bp}
assets:
  harbour: {spot: 100, yield: 1%, vol: 20%}
"""


def test_a_call_against_the_closed_form():
    """Derivatives of a European call by the log of the spot, the drift, the step's deviation and the discount factor,
    against those of the formula of Black and Scholes (1973), within 4 errors from the parts of the run."""
    ready = prepare(document("european", side="call", expiry="1y", strike=95) + MARKET)
    tape = ready.unrolled.tape
    swept = with_adjoint(tape, [output.value for output in tape.outputs if output.kind == "leg"])
    leaves = MarketMap(ready.market, ready.dated.contract).values(tape.leaves)
    sums = run(lower(swept, leaves), seed=0x2B992DDFA23249D6, paths=1 << 18)
    parts = leaf_sums(swept, leaves, sums.sums) / sums.batch_paths[:, None]
    found, error = parts.mean(axis=0), parts.std(axis=0, ddof=1) / 8.0
    forward, strike, deviation, discount = 100.0 * np.exp(0.02), 95.0, 0.2, np.exp(-0.03)
    d1 = np.log(forward / strike) / deviation + 0.5 * deviation
    by_log = discount * forward * ndtr(d1)  # at a fixed drift
    by_deviation = discount * forward * np.exp(-0.5 * d1 * d1) / np.sqrt(2.0 * np.pi) + by_log * deviation
    exact = {
        LeafKind.LOG_SPOT: by_log,
        LeafKind.DRIFT: by_log,
        LeafKind.FACTOR: by_deviation,  # the drift is a leaf of its own: it does not follow the deviation
        LeafKind.DISCOUNT: forward * ndtr(d1) - strike * ndtr(d1 - deviation),
    }
    checked = [leaf.kind for leaf in tape.leaves if leaf.kind in exact]
    assert sorted(checked, key=str) == sorted(exact, key=str)
    for leaf, value, spread in zip(tape.leaves, found, error, strict=True):
        if leaf.kind in exact:
            assert abs(value - exact[leaf.kind]) < 4.0 * spread < 0.05 * exact[leaf.kind]


def test_sums_of_several_sweeps():
    """Sweeps of different values on one tape are told apart by the numbers of their sums."""
    tape = Builder()
    a = tape.leaf(number("a"))
    x = tape.emit(Op.MUL, a, tape.input(Op.NORMAL, 0))
    square = tape.emit(Op.MUL, x, x)
    built = tape.tape([Output("x", x), Output("square", square)], normals=1)
    builder = Builder.of(built)
    sums: list[Sum] = []
    chosen = []
    for value in (x, square):
        gradient: Gradient = sweep(builder, {value: builder.constant(1.0)}, every_leaf)
        made = sums_of(gradient)
        chosen.append(range(len(sums), len(sums) + len(made)))
        sums += made
    swept = finished(builder, replace(built, sums=()), sums)
    reached = run(lower(swept, [2.0]), seed=9, paths=4096)
    first, second = (leaf_sums(swept, [2.0], reached.sums.sum(axis=0), part)[0] / 4096 for part in chosen)
    assert first == pytest.approx(reached.mean[0] / 2.0) and second == pytest.approx(reached.mean[1])
