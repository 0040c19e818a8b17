"""The put whose derivative in strike is a jump of the price at the contract's last date.

A price that jumps by J where a level falls below K holds J digitals there. A digital is the derivative in strike of the
put, so under vols by strike it is that of a put whose vol goes along with its strike: Black's term plus the vega times
the slope of vol. J may hang on all that happened before, and the level may be that of several assets (the worst of
them): the put then pays J times what the compared value lacks of the level, in shares of it.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Output, Tape
from mcx.tape.strikes import Strike, Turn, difference, levels_read, values_at

BESIDE = 1e-9  # relative: where the price is taken on both sides of the level
SMALL, LARGE = 1e-7, 1e-3  # relative: moves at which a compared value must be seen to move in proportion
NO_JUMP = 1e-7  # relative: what a price without a jump changes by between the two sides
LANES, SEED, SPREAD = 256, 20261201, 0.35  # trial paths on which a jump is looked for


def jump_put(tape: Tape, known: Sequence[float | None], strike: Strike, last: float, spots: Sequence[float]
             ) -> Tape | None:
    """The put as a tape that reads levels, its price the one output; None where the price does not jump at the strike
    on the last date, or not because a level of that date alone is compared with it. `tape` has the price alone."""
    reads = levels_read(tape, known)
    levels = dict(strike.levels)
    turn = next((turn for turn in strike.turns if not strike.forward_start and turn.time == last and turn.alone
                 and all(op is Op.LEVEL for _, _, op in reads[turn.value]) and _moves(tape, known, turn, levels)), None)
    if turn is None:
        return None
    builder = Builder.of(tape)
    below, above = (_with_levels(builder, tape, levels, last, 1.0 + side * BESIDE) for side in (-1.0, 1.0))
    jump = builder.emit(Op.SUB, below, above)
    if not _jumps(builder, tape, known, jump, spots):
        return None
    operands = tape.instructions[turn.value].operands
    gap = builder.emit(Op.SUB, *operands) if len(operands) == 2 else operands[0]
    reach = _reach(tape, known, turn, levels, SMALL)
    lacking = builder.emit(Op.MAX, builder.emit(Op.MUL, gap, builder.constant(-1.0 / reach)), builder.constant(0.0))
    price = Output.of("price", builder.emit(Op.MUL, jump, lacking))
    return drop_dead_code(builder.tape((price,)))


def _reach(tape: Tape, known: Sequence[float | None], turn: Turn, levels: dict[int, float], move: float) -> float:
    """What the compared difference changes by for a whole share of the levels."""
    scales = np.array([1.0 - move, 1.0 + move])
    values = values_at(tape, known, lambda key: levels.get(key.asset, 1.0) * scales)
    low, high = np.broadcast_to(difference(tape, turn.value, values), (2,))
    return float(high - low) / (2.0 * move)


def _moves(tape: Tape, known: Sequence[float | None], turn: Turn, levels: dict[int, float]) -> bool:
    """Whether what is compared moves in proportion to the levels: a level itself, not a count of what it did."""
    small, large = (_reach(tape, known, turn, levels, move) for move in (SMALL, LARGE))
    return large != 0.0 and abs(small / large - 1.0) < 0.01


def _with_levels(builder: Builder, tape: Tape, levels: dict[int, float], last: float, scale: float) -> int:
    """The price where the levels of the last date stand at these."""
    made: list[int] = []
    for step in tape.instructions:
        if step.op is Op.LEVEL and step.payload.time == last and step.payload.asset in levels:
            made.append(builder.constant(levels[step.payload.asset] * scale))
        else:
            made.append(builder.copy(step, tuple(made[k] for k in step.operands)))
    return made[tape.outputs[0].value]


def _jumps(builder: Builder, tape: Tape, known: Sequence[float | None], jump: int, spots: Sequence[float]) -> bool:
    """Whether the price differs on the two sides on some of the trial paths."""
    trial = drop_dead_code(builder.tape((Output.of("price", jump), tape.outputs[0].at(tape.outputs[0].value))))
    leaves = {step.payload: known[number] for number, step in enumerate(tape.instructions) if step.op is Op.LEAF}
    fixed = [leaves[step.payload] if step.op is Op.LEAF else step.payload if step.op is Op.CONSTANT else None
             for step in trial.instructions]
    draws = np.random.default_rng(SEED)
    seen: dict = {}

    def level(key) -> np.ndarray:
        if key not in seen:
            seen[key] = spots[key.asset] * np.exp(SPREAD * draws.standard_normal(LANES))
        return seen[key]

    values = values_at(trial, fixed, level)
    size, price = (np.max(np.abs(values[output.value])) for output in trial.outputs)
    return bool(size > NO_JUMP * max(price, 1e-300))
