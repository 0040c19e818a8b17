"""Importance sampling: paths drawn where the contract pays, each with the weight that keeps the mean.

Normals are shifted to the mode of log |payoff| - |z|^2 / 2, where payoff times density is largest (P. Glasserman, P.
Heidelberger, P. Shahabuddin, "Asymptotically optimal importance sampling and stratification for pricing path-dependent
options", Mathematical Finance 9 (1999)). The payoff is counted from its value far away, so that a bond beside an option
does not hide it. The mode is climbed to from the best of straight paths, where something is paid: a pilot
would see only zeros. Every output carries the weight, exp(-shift z - |shift|^2 / 2), so that a probability or a life is
as unbiased as the price; the weight itself, whose mean is 1, is a control.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from mcx.estimators.nets import clock
from mcx.estimators.reduction.scheme import Case, Control, Draft, Inapplicable, Method, Stage
from mcx.tape.builder import Builder
from mcx.tape.interpret import interpret
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Output, Tape

FARTHEST = 12.0  # standard deviations along a straight path
STEPS = 481
DIRECTIONS = 64  # of straight paths, where there are several assets
MOST_CLIMBED = 256  # normals: beyond, the best straight path is taken
CLIMBS = 60
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
    weighted, weight = shifted(tape, shift)
    outputs = (*weighted.outputs, Output.of("control", weight, "weight"))
    controls = (*draft.controls, Control("weight of a path", 1.0, asked=False))
    return replace(draft, tape=drop_dead_code(replace(weighted, outputs=outputs)), controls=controls).noted(note)


def shifted(tape: Tape, shift: np.ndarray) -> tuple[Tape, int]:
    """The tape on normals moved by shift (normals,), its outputs times the weight, and the weight's value."""
    builder = Builder()
    made: list[int] = []
    for step in tape.instructions:
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
    outputs = [replace(output, value=builder.emit(Op.MUL, made[output.value], weight), flag=False)
               for output in tape.outputs]
    return builder.tape(outputs, tape.normals, tape.uniforms), weight


def mode(case: Case) -> np.ndarray:
    """Where payoff times density is largest, (normals,); zeros where every straight path pays the same."""
    unrolled, market = case.ready.unrolled, case.ready.market
    price = drop_dead_code(replace(unrolled.tape, outputs=unrolled.tape.outputs[:1]))
    leaves = market.values(price.leaves)
    variances = clock(market, unrolled.grid)  # (steps, assets)

    def paid(normals: np.ndarray) -> np.ndarray:
        """The price at each point, normals (normals, points)."""
        half = np.full((price.uniforms, normals.shape[1]), 0.5)
        found = interpret(price, leaves, normals, half)[price.outputs[0].value]
        return np.broadcast_to(np.asarray(found, dtype=float), (normals.shape[1],))

    straight = np.sqrt(variances / np.maximum(variances.sum(axis=0), TINY))  # (steps, assets), of length 1 each
    away = np.linspace(-FARTHEST, FARTHEST, STEPS)
    directions = _directions(variances.shape[1])
    lines = np.einsum("sa,da,k->sadk", straight, directions, away).reshape(price.normals, -1)
    prices = paid(lines)
    if not np.isfinite(prices).any() or np.ptp(prices[np.isfinite(prices)]) == 0.0:
        return np.zeros(price.normals)
    base = _base(prices)

    def height(normals: np.ndarray) -> np.ndarray:
        gain = np.abs(paid(normals) - base)
        found = np.log(np.maximum(np.where(np.isfinite(gain), gain, 0.0), TINY)) - 0.5 * (normals**2).sum(axis=0)
        return found

    heights = height(lines)
    start = lines[:, int(np.argmax(heights))]
    found = _climbed(start, height) if price.normals <= MOST_CLIMBED else start
    found = np.round(found, 8)  # nothing hangs on the order in which a library adds
    return np.where(np.abs(found) > 1e-4, found, 0.0)


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


def _climbed(start: np.ndarray, height: Callable[[np.ndarray], np.ndarray]) -> np.ndarray:
    """Uphill from a point by central differences, all points of a gradient as lanes of one pass."""
    point, step, size = start, 1.0, 1e-4
    best = float(height(point[:, None])[0])
    moves = size * np.eye(len(point))
    for _ in range(CLIMBS):
        both = height(np.concatenate([point[:, None] + moves, point[:, None] - moves], axis=1))
        slope = (both[: len(point)] - both[len(point) :]) / (2.0 * size)
        trials = step * 0.5 ** np.arange(12)
        heights = height(point[:, None] + slope[:, None] * trials)
        highest = int(np.argmax(heights))
        if not heights[highest] > best + 1e-9:
            break
        point, best = point + trials[highest] * slope, float(heights[highest])
        step = min(2.0 * trials[highest], 1.0)
    return point


IMPORTANCE = Method("importance", "paths drawn where the contract pays, weighted", Stage.NORMALS, change)
