"""Importance sampling: paths drawn where the contract pays, each with the weight that keeps the mean.

Normals are shifted to the mode of log |payoff| - |z|^2 / 2, where payoff times density is largest (P. Glasserman, P.
Heidelberger, P. Shahabuddin, "Asymptotically optimal importance sampling and stratification for pricing path-dependent
options", Mathematical Finance 9 (1999)). The payoff is counted from its value far away, so that a bond beside an option
does not hide it. The mode is climbed to, by the slopes that the adjoint of the tape gives, from the best of straight
paths, where something is paid: a pilot would see only zeros. Every output carries the weight, exp(-shift z -
|shift|^2 / 2), so that a probability or a life is as unbiased as the price; the weight itself, whose mean is 1, is a
control. Probabilities and lives are weighted as their distance from what they are on the middle path, so that what is
sure on every path stays sure.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from mcx.estimators.nets import clock
from mcx.estimators.reduction.fit import CONTROLLED
from mcx.estimators.reduction.scheme import Case, Control, Draft, Inapplicable, Method, Stage
from mcx.tape.adjoint import by_normals
from mcx.tape.builder import Builder
from mcx.tape.interpret import interpret
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Output, Tape
from mcx.tape.rules import Value

FARTHEST = 12.0  # standard deviations along a straight path
STEPS, COARSE = 481, 97  # along one; along each of several
DIRECTIONS = 16  # of straight paths, where there are several assets, besides each alone and all together
CLIMBS, MOVES = 25, 12
ENOUGH = 1e-4  # of the log of payoff times density, that a climb gains at least
SMALLEST = 0.3  # a mode nearer than this is where plain paths are anyway
TINY = 1e-290


def change(case: Case, draft: Draft) -> Draft:
    tape = draft.tape
    if not tape.normals:
        raise Inapplicable("no normals are drawn")
    shift = mode(case)
    size = float(np.linalg.norm(shift))
    if size < SMALLEST:
        raise Inapplicable("the contract pays most where paths are drawn anyway")
    note = f"importance: paths are drawn {size:.2f} standard deviations away"
    weighted, weight = shifted(tape, shift, _middle(case, tape))
    outputs = (*weighted.outputs, Output.of("control", weight, "weight"))
    controls = (*draft.controls, Control("weight of a path", 1.0, asked=False))
    return replace(draft, tape=drop_dead_code(replace(weighted, outputs=outputs)), controls=controls).noted(note)


def _middle(case: Case, tape: Tape) -> list[float]:
    """The outputs of a tape on the path of no surprise."""
    values = interpret(tape, case.ready.market.values(tape.leaves), np.zeros((tape.normals, 1)),
                       np.full((tape.uniforms, 1), 0.5))
    found = [float(np.ravel(values[output.value])[0]) for output in tape.outputs]
    return [round(value, 8) if np.isfinite(value) else 0.0 for value in found]


def shifted(tape: Tape, shift: np.ndarray, middle: Sequence[float]) -> tuple[Tape, int]:
    """The tape on normals moved by shift (normals,), its outputs times the weight, and the weight's value. What no draw
    decides, such as the life of a note that cannot end early, needs no weight; legs keep theirs, as their sum does.
    What takes no controls is weighted as its distance from the number in `middle` (outputs,)."""
    builder = Builder()
    made: list[int] = []
    drawn: list[bool] = []
    for step in tape.instructions:
        drawn.append(step.op in (Op.NORMAL, Op.UNIFORM) or any(drawn[k] for k in step.operands))
        operands = tuple(made[k] for k in step.operands)
        normal = tape.instructions[step.operands[2]] if step.op is Op.STEP else None
        if normal is not None and normal.op is Op.NORMAL:
            x, scale, _ = operands
            moved = builder.emit(Op.MUL, scale, builder.constant(float(shift[normal.payload])))
            z = builder.input(Op.NORMAL, normal.payload)
            made.append(builder.emit(Op.STEP, builder.emit(Op.ADD, x, moved), scale, z))
        elif step.op is Op.NORMAL:
            z = builder.copy(step, ())
            made.append(builder.emit(Op.ADD, z, builder.constant(float(shift[step.payload]))))
        else:
            made.append(builder.copy(step, operands))
    exponent = builder.constant(-0.5 * float(shift @ shift))
    for dimension, size in enumerate(shift.tolist()):
        if size:
            exponent = builder.emit(Op.STEP, exponent, builder.constant(-size), builder.input(Op.NORMAL, dimension))
    weight = builder.emit(Op.EXP, exponent)

    def weighted(output: Output, centre: float) -> Output:
        value = made[output.value]
        if output.kind in CONTROLLED:
            return replace(output, value=builder.emit(Op.MUL, value, weight), flag=False)
        if not drawn[output.value]:
            return output.at(value)
        away = builder.emit(Op.MUL, builder.emit(Op.SUB, value, builder.constant(centre)), weight)
        return replace(output, value=builder.emit(Op.ADD, away, builder.constant(centre)), flag=False)

    outputs = list(map(weighted, tape.outputs, middle))
    return builder.tape(outputs, tape.normals, tape.uniforms), weight


def mode(case: Case) -> np.ndarray:
    """Where payoff times density is largest, (normals,); zeros where every straight path pays the same."""
    unrolled, market = case.ready.unrolled, case.ready.market
    price = drop_dead_code(replace(unrolled.tape, outputs=unrolled.tape.outputs[:1]))
    half = np.full((price.uniforms, 1), 0.5)
    leaves = market.values(price.leaves)
    result = price.outputs[0].value

    def values(normals: np.ndarray) -> list[Value]:
        """Every value of the tape at each point, normals (normals, points)."""
        return interpret(price, leaves, normals, half)

    def paid(values: list[Value], points: int) -> np.ndarray:
        return np.broadcast_to(np.asarray(values[result], dtype=float), (points,))

    variances = clock(market, unrolled.grid)  # (steps, assets)
    straight = np.sqrt(variances / np.maximum(variances.sum(axis=0), TINY))  # (steps, assets), of length 1 each
    ways = _directions(variances.shape[1])
    away = np.linspace(-FARTHEST, FARTHEST, STEPS if len(ways) == 1 else COARSE)
    lines = _lines(straight, ways, away, price.normals)
    prices = paid(values(lines), lines.shape[1])
    finite = np.isfinite(prices)
    if not finite.any() or np.ptp(prices[finite]) == 0.0:
        return np.zeros(price.normals)
    base = _base(prices)
    if len(ways) > 1:  # the best of the directions, in finer steps
        way = ways[[int(np.argmax(_heights(prices, base, lines))) // len(away)]]
        lines = _lines(straight, way, np.linspace(-FARTHEST, FARTHEST, STEPS), price.normals)
        prices = paid(values(lines), lines.shape[1])
    start = lines[:, int(np.argmax(_heights(prices, base, lines)))]

    def look(points: np.ndarray) -> tuple[int, float, np.ndarray]:
        """The highest of some points, how high it is, and which way is up from there."""
        found = values(points)
        heights = _heights(paid(found, points.shape[1]), base, points)
        highest = int(np.argmax(heights))
        there = [value if np.ndim(value) == 0 else value[highest % value.shape[-1]] for value in found]
        slope = by_normals(price, there, result) / (there[result] - base)
        return highest, float(heights[highest]), np.where(np.isfinite(slope), slope, 0.0) - points[:, highest]

    found = np.round(_climbed(start, look), 8)  # nothing hangs on the order in which a library adds
    return np.where(np.abs(found) > 1e-4, found, 0.0)


def _lines(straight: np.ndarray, ways: np.ndarray, away: np.ndarray, normals: int) -> np.ndarray:
    """Straight paths (normals, directions * distances): straight (steps, assets), ways (directions, assets), away
    (distances,), in deviations; a normal that moves no step is 0."""
    steps = straight.size
    lines = (straight[:, :, None] * ways.T).reshape(steps, len(ways), 1) * away
    return np.concatenate([lines.reshape(steps, -1), np.zeros((normals - steps, lines[0].size))])


def _heights(prices: np.ndarray, base: float, normals: np.ndarray) -> np.ndarray:
    """The log of what is paid beyond the base, and of the density."""
    gain = np.abs(prices - base)
    return np.log(np.maximum(np.where(np.isfinite(gain), gain, 0.0), TINY)) - 0.5 * (normals**2).sum(axis=0)


def _base(prices: np.ndarray) -> float:
    """What is paid as a rule: the commonest price where many are the same, else the smallest."""
    finite = prices[np.isfinite(prices)]
    values, counts = np.unique(np.round(finite, 12), return_counts=True)
    return float(values[counts.argmax()]) if counts.max() > 0.05 * len(finite) else float(finite.min())


def _directions(assets: int) -> np.ndarray:
    """Directions of equal spread, (directions, assets); one asset has one."""
    if assets == 1:
        return np.ones((1, 1))
    drawn = np.random.Generator(np.random.Philox(key=[5, assets])).standard_normal((DIRECTIONS, assets))
    whole = np.concatenate([np.eye(assets), np.ones((1, assets)), drawn])
    return whole / np.linalg.norm(whole, axis=1, keepdims=True)


def _climbed(start: np.ndarray, look: Callable[[np.ndarray], tuple[int, float, np.ndarray]]) -> np.ndarray:
    """Uphill from a point along the slope, which the adjoint gives; several lengths of a move are lanes of one pass."""
    point, step = start, 1.0
    _, best, slope = look(point[:, None])
    for _ in range(CLIMBS):
        lengths = step * 0.5 ** np.arange(MOVES)
        points = point[:, None] + slope[:, None] * lengths
        highest, height, ahead = look(points)
        if not height > best + ENOUGH:
            break
        point, best, slope = points[:, highest], height, ahead
        step = min(2.0 * lengths[highest], 1.0)
    return point


IMPORTANCE = Method("importance", "paths drawn where the contract pays, weighted", Stage.NORMALS, change)
