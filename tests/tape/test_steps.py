"""Levels become steps over one grid."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from strategies import tapes

from mcx.tape.builder import Builder
from mcx.tape.interpret import interpret, outputs
from mcx.tape.ops import Op
from mcx.tape.program import Leaf, LeafKind, LevelKey, Output, Tape
from mcx.tape.rules import evaluate
from mcx.tape.steps import expand_levels
from mcx.tape.verify import problems

SPOTS = (100.0, 50.0)


def leaf_value(leaf: Leaf) -> float:
    """Made-up but consistent numbers: constant drift and covariance rates for two assets."""
    span = leaf.end - leaf.start
    match leaf.kind:
        case LeafKind.LOG_SPOT:
            return float(np.log(SPOTS[leaf.asset]))
        case LeafKind.FORWARD:
            return SPOTS[leaf.asset]
        case LeafKind.DRIFT:
            return (0.02 + 0.01 * leaf.asset) * span
        case LeafKind.VARIANCE:
            return (0.04 + 0.05 * leaf.asset) * span
        case LeafKind.FACTOR:
            return {(0, 0): 0.2, (1, 0): 0.1, (1, 1): 0.28}[leaf.asset, leaf.other] * np.sqrt(span)
        case _:
            return 0.5 + 0.1 * int(leaf.name[1:])


def test_a_level_is_a_walk_from_the_spot():
    """A level at one date is one step from the spot, printed in full."""
    tape = Builder()
    level = tape.input(Op.LEVEL, LevelKey(0, 1.0))
    paid = tape.emit(Op.MAX, tape.emit(Op.SUB, level, tape.constant(100.0)), tape.constant(0.0))
    before = tape.tape([Output("price", paid)])
    assert str(before) == (
        "v0 = level of 0 at 1\n"
        "v1 = constant 100.0\n"
        "v2 = v0 - v1\n"
        "v3 = constant 0.0\n"
        "v4 = max(v2, v3)\n"
        "price -> v4"
    )
    after, grid = expand_levels(before, nodes=[0.5])
    assert (grid.times, grid.assets, after.normals, after.uniforms) == ((0.0, 1.0), (0,), 1, 0)
    assert str(after) == (
        "v0 = leaf log_spot of 0\n"
        "v1 = leaf drift of 0 at 1\n"
        "v2 = v0 + v1\n"
        "v3 = leaf factor of 0 by 0 at 1\n"
        "v4 = normal 0\n"
        "v5 = v2 + v3 * v4\n"
        "v6 = exp(v5)\n"
        "v7 = constant 100.0\n"
        "v8 = v6 - v7\n"
        "v9 = constant 0.0\n"
        "v10 = max(v8, v9)\n"
        "price -> v10"
    )


def test_todays_level_is_the_spot():
    """At time 0 nothing is simulated, and the level is the spot to the last digit."""
    tape = Builder()
    level = tape.input(Op.LEVEL, LevelKey(1, 0.0))
    after, grid = expand_levels(tape.tape([Output("price", level)]), nodes=[])
    assert str(after) == "v0 = leaf forward of 1 at 0\nprice -> v0"
    assert grid.assets == ()


def grid_of(keys: list[tuple[Op, LevelKey]], nodes: list[float]) -> tuple[float, ...]:
    """The grid of a tape that reads these levels."""
    tape = Builder()
    values = [tape.input(op, key) for op, key in keys]
    return expand_levels(tape.tape([Output("sum", tape.fold(Op.ADD, values))]), nodes)[1].times


def test_nodes_split_watched_steps_only():
    """A curve node is a grid date strictly inside a watched stretch; elsewhere unobserved steps stay merged."""
    read = (Op.LEVEL, LevelKey(0, 3.0))
    watched = (Op.LOW, LevelKey(0, 2.0, start=1.0))
    assert grid_of([read], [0.5, 1.5, 2.5]) == (0.0, 3.0)
    assert grid_of([read, watched], [0.5, 1.0, 1.5, 2.5]) == (0.0, 1.0, 1.5, 2.0, 3.0)


def test_one_date_written_in_two_ways_is_one_date():
    """Times that differ by rounding only share a grid date, nodes too."""
    third, nearly = 1.0 / 3.0, 1.0 / 3.0 + 1e-15
    assert grid_of([(Op.LEVEL, LevelKey(0, third)), (Op.LEVEL, LevelKey(0, nearly))], []) == (0.0, third)
    assert grid_of([(Op.LOW, LevelKey(0, 1.0)), (Op.LEVEL, LevelKey(0, third))], [nearly]) == (0.0, third, 1.0)


def test_assets_that_nobody_reads_are_not_simulated():
    """Only the asset that is read has normals; its factor leaves name the assets whose normals move it."""
    tape = Builder()
    total = tape.emit(Op.ADD, tape.input(Op.LEVEL, LevelKey(2, 1.0)), tape.input(Op.LEVEL, LevelKey(0, 1.0)))
    after, grid = expand_levels(tape.tape([Output("price", total)]), nodes=[])
    factors = [(leaf.asset, leaf.other) for leaf in after.leaves if leaf.kind is LeafKind.FACTOR]
    assert (grid.assets, after.normals, factors) == ((0, 2), 2, [(0, 0), (2, 0), (2, 2)])


def test_all_who_watch_one_side_share_one_minimum():
    """Two overlapping watches of one side draw one uniform for each common step."""
    tape = Builder()
    first = tape.input(Op.LOW, LevelKey(0, 1.0))
    second = tape.input(Op.LOW, LevelKey(0, 2.0, start=0.5))
    after, grid = expand_levels(tape.tape([Output("a", first), Output("b", second)]), nodes=[])
    assert grid.times == (0.0, 0.5, 1.0, 2.0)
    assert after.uniforms == 3
    assert sum(step.op is Op.BRIDGE_LOW for step in after.instructions) == 3


def simulated(tape: Tape, normals: np.ndarray, uniforms: np.ndarray, times: tuple[float, ...]) -> dict:
    """What LEVEL, LOW and HIGH read, walked directly with the same draws."""
    assets = sorted({step.payload.asset for step in tape.instructions
                     if isinstance(step.payload, LevelKey) and (step.op is not Op.LEVEL or step.payload.time)})
    logs = {(asset, 0): np.full(normals.shape[1], np.log(SPOTS[asset])) for asset in (0, 1)}
    for step, (start, end) in enumerate(zip(times, times[1:])):
        draws = {asset: normals[step * len(assets) + row] for row, asset in enumerate(assets)}
        for asset in assets:
            moved = logs[asset, step] + leaf_value(Leaf(LeafKind.DRIFT, asset, start=start, end=end))
            for other in assets[: assets.index(asset) + 1]:
                moved = moved + leaf_value(Leaf(LeafKind.FACTOR, asset, other, start, end)) * draws[other]
            logs[asset, step + 1] = moved
    levels: dict = {}
    for step in tape.instructions:
        key = step.payload
        if step.op is Op.LEVEL:
            levels[step.op, key] = np.exp(logs[key.asset, times.index(key.time)]) if key.time else SPOTS[key.asset]
        elif step.op in (Op.LOW, Op.HIGH):
            first, last = times.index(key.start), times.index(key.time)
            bridge, join = ((Op.BRIDGE_LOW, np.minimum) if step.op is Op.LOW else (Op.BRIDGE_HIGH, np.maximum))
            variances = [leaf_value(Leaf(LeafKind.VARIANCE, key.asset, start=times[k], end=times[k + 1]))
                         for k in range(first, last)]
            drawn = [evaluate(bridge, logs[key.asset, k], logs[key.asset, k + 1], variance, uniforms[k - first])
                     for k, variance in zip(range(first, last), variances)]
            levels[step.op, key] = np.exp(join.reduce(drawn))
    return levels


@given(tapes(levels=True), st.booleans())
def test_expanding_keeps_the_meaning(tape: Tape, split: bool):
    """On levels walked directly with the same draws, the tape that reads levels has the outputs of the expanded one."""
    after, grid = expand_levels(tape, nodes=[0.4] if split else [])
    assert problems(after) == []
    draws = np.random.default_rng(33880124457001)
    normals = draws.standard_normal((max(after.normals, 1), 32))
    uniforms = draws.uniform(0.01, 0.99, (max(after.uniforms, 1), 32))
    found = outputs(after, interpret(after, [leaf_value(leaf) for leaf in after.leaves], normals, uniforms))
    levels = simulated(tape, normals, uniforms, grid.times)
    values = interpret(tape, [leaf_value(leaf) for leaf in tape.leaves], levels=levels)
    finite = np.all([np.isfinite(np.broadcast_to(value, 32)) for value in values], axis=0)
    for name, expected in outputs(tape, values).items():
        result = np.broadcast_to(found[name], 32)[finite]
        np.testing.assert_allclose(result, np.broadcast_to(expected, 32)[finite], rtol=1e-9, atol=1e-9)
