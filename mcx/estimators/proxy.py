"""A smooth stand-in for payments that jump. It is differentiated pathwise and by likelihood ratio, which agree in the
mean: the difference is a control for the likelihood ratio of the payments themselves.

It is a sum of calls and puts on the last levels, with coefficients from a regression on the pilot's paths: fixed before
the run that counts, so that nothing is biased.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

import numpy as np

from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import LeafKind, Output, Tape

STRIKES = (1.0, 0.8, 0.6)  # of the lowest of the assets, over its spot
LEAST_SHARE = 0.1  # of the variance that must be explained for the stand-in to be worth its cost

ByPath = Callable[[Tape], np.ndarray]  # the outputs of a tape on each path of the pilot, (outputs, paths)


def with_proxy(
    tape: Tape, payments: Sequence[int], log_spots: Mapping[int, float], by_path: ByPath
) -> tuple[Tape, int | None]:
    """The tape with the stand-in for the sum of the payments as its last value, and its number; None where too little
    is explained. `log_spots`: today's, by asset, as plain numbers."""
    builder = Builder.of(tape)
    basis = _basis(builder, last_logs(tape), log_spots)
    total = builder.fold(Op.ADD, payments)
    outputs = [Output("", value) for value in (total, *basis)]
    values = by_path(builder.tape(outputs, tape.normals, tape.uniforms))
    weights, explained = _regressed(values[0], values[1:])
    if explained < LEAST_SHARE:
        return tape, None
    parts = [builder.emit(Op.MUL, value, builder.constant(weight)) for value, weight in zip(basis, weights, strict=True)
             if weight != 0.0]
    number = builder.fold(Op.ADD, parts)
    return replace(builder.tape(tape.outputs, tape.normals, tape.uniforms)), number


def last_logs(tape: Tape) -> dict[int, int]:
    """By asset the log of its level at the last date that the tape draws."""
    last: dict[int, tuple[float, int]] = {}
    for number, step in enumerate(tape.instructions):
        if step.op is Op.STEP:
            factor = tape.instructions[step.operands[1]].payload
            if factor.kind is LeafKind.FACTOR and factor.asset == factor.other:  # the last normal of its step
                last[factor.asset] = max(last.get(factor.asset, (0.0, 0)), (factor.end, number))
    return {asset: number for asset, (_, number) in sorted(last.items())}


def _basis(builder: Builder, logs: Mapping[int, int], log_spots: Mapping[int, float]) -> list[int]:
    """Performances, puts on each at its spot, and puts on the lowest."""
    emit, constant = builder.emit, builder.constant
    performances = [emit(Op.EXP, emit(Op.SUB, log, constant(log_spots[asset]))) for asset, log in logs.items()]
    worst = builder.fold(Op.MIN, performances)
    puts = [(performance, 1.0) for performance in performances] + [(worst, strike) for strike in STRIKES]
    found = [emit(Op.MAX, emit(Op.SUB, constant(strike), value), constant(0.0)) for value, strike in puts]
    return list(dict.fromkeys([*performances, *found]))


def _regressed(wanted: np.ndarray, basis: np.ndarray) -> tuple[np.ndarray, float]:
    """Least squares about the means, and the share of the variance that is explained."""
    left, right = wanted - wanted.mean(), (basis - basis.mean(axis=1, keepdims=True)).T
    if not left.any():
        return np.zeros(len(basis)), 0.0
    weights = np.linalg.lstsq(right, left, rcond=1e-8)[0]
    rest = left - right @ weights
    return weights, 1.0 - float(rest @ rest) / float(left @ left)
