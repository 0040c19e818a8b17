"""Random tapes that keep the rules, with values that stay finite on most lanes.

Hypothesis draws a seed and numpy the tape: hypothesis alone likes small and repeated choices, and forms of operands that
want several unlike ones then hardly ever come up.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from hypothesis import strategies as st

from mcx.tape.ops import OPS, Op
from mcx.tape.program import Instruction, Leaf, LeafKind, LevelKey, Output, Tape

NORMALS, UNIFORMS, LEAVES = 3, 2, 4
TIMES = (0.0, 0.25, 0.5, 1.0)
NUMBER_OPS = (Op.ADD, Op.SUB, Op.MUL, Op.NEG, Op.MIN, Op.MAX, Op.ABS, Op.STEP, Op.SELECT)
GUARDED_OPS = (Op.DIV, Op.POW, Op.EXP, Op.LOG, Op.SQRT, Op.BRIDGE_LOW, Op.BRIDGE_HIGH)
FLAG_OPS = (Op.LT, Op.LE, Op.EQ, Op.NE, Op.AND, Op.OR, Op.NOT)


class RawTape:
    """A tape written down as it comes: no folding, no common subexpressions."""

    def __init__(self) -> None:
        self.instructions: list[Instruction] = []
        self.numbers: list[int] = []
        self.flags: list[int] = []

    def put(self, op: Op, *operands: int, payload=None) -> int:
        self.instructions.append(Instruction(op, operands, payload))
        value = len(self.instructions) - 1
        (self.flags if OPS[op].flag else self.numbers).append(value)
        return value

    def constant(self, number: float) -> int:
        return self.put(Op.CONSTANT, payload=float(number))


def tapes(levels: bool = False, most: int = 40) -> st.SearchStrategy[Tape]:
    """A random tape; with `levels` its inputs are levels of two assets and one watched stretch."""
    return st.integers(0, 2**63).map(lambda seed: random_tape(seed, levels, most))


def random_tape(seed: int, levels: bool = False, most: int = 40) -> Tape:
    """The tape of a seed. Every value that no other reads is an output, so that none is worked out for nothing."""
    rng, raw = np.random.default_rng(seed), RawTape()
    for name in range(LEAVES):
        raw.put(Op.LEAF, payload=Leaf(LeafKind.TERM, name=f"t{name}"))
    if levels:
        for _ in range(rng.integers(1, 6)):
            raw.put(Op.LEVEL, payload=LevelKey(int(rng.integers(2)), float(rng.choice(TIMES))))
        if rng.random() < 0.5:
            start, end = sorted(rng.choice(TIMES, 2, replace=False).tolist())
            side = Op.LOW if rng.random() < 0.5 else Op.HIGH
            raw.put(side, payload=LevelKey(int(rng.integers(2)), end, start))
    else:
        for number in range(NORMALS):
            raw.put(Op.NORMAL, payload=number)
    uniforms = [] if levels else [raw.put(Op.UNIFORM, payload=number) for number in range(UNIFORMS)]
    for number in (0.0, 1.0, rng.uniform(-3.0, 3.0)):
        raw.constant(number)
    raw.put(Op.LT, raw.numbers[0], raw.numbers[-1])
    raw.put(Op.LT, raw.numbers[LEAVES], raw.numbers[0])
    for _ in range(rng.integers(1, most + 1)):
        _grow(rng, raw, uniforms)
    read = {operand for step in raw.instructions for operand in step.operands}
    outputs = [Output(f"out {value}", value, value in raw.flags)
               for value in raw.numbers + raw.flags if value not in read]
    counts = (0, 0) if levels else (NORMALS, UNIFORMS)
    return Tape(tuple(raw.instructions), tuple(outputs), *counts)


def _grow(rng: np.random.Generator, raw: RawTape, uniforms: list[int]) -> None:
    """One more operation, with its operands made fit for it where it is undefined for some."""

    def one_of(values: Sequence[int | Op | float]) -> int | Op | float:
        return values[rng.integers(len(values))]

    def number() -> int:
        return one_of(raw.numbers[:-8] or raw.numbers) if rng.random() < 0.5 else one_of(raw.numbers[-8:])

    op = one_of((*NUMBER_OPS, *GUARDED_OPS, *FLAG_OPS))
    if op in (Op.AND, Op.OR):
        raw.put(op, one_of(raw.flags), one_of(raw.flags))
    elif op is Op.NOT:
        raw.put(op, one_of(raw.flags))
    elif op is Op.SELECT:
        raw.put(op, one_of(raw.flags), number(), number())
    elif op is Op.STEP and rng.random() < 0.7:  # as a model writes it, drift and deviation from the market
        drifted = raw.put(Op.ADD, number(), one_of(raw.numbers[:LEAVES]))
        raw.numbers.pop()  # the step alone reads it
        raw.put(op, drifted, one_of(raw.numbers[:LEAVES]), number())
    elif op in NUMBER_OPS or op in FLAG_OPS:
        raw.put(op, *(number() for _ in range(OPS[op].arity)))
    elif op is Op.EXP:
        raw.put(op, raw.put(Op.MIN, number(), raw.constant(2.5)))
    else:
        positive = raw.put(Op.ADD, raw.put(Op.ABS, number()), raw.constant(0.5))
        if op in (Op.LOG, Op.SQRT):
            raw.put(op, positive)
        elif op is Op.DIV:
            raw.put(op, number(), positive)
        elif op is Op.POW:
            raw.put(op, positive, raw.constant(one_of((-1.0, 0.5, 1.0, 1.5, 2.0, 3.0))))
            raw.put(op, positive, raw.put(Op.MIN, number(), raw.constant(2.0)))
        elif uniforms:
            raw.put(op, number(), number(), positive, one_of(uniforms))


def inputs_for(tape: Tape, lanes: int, seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Leaf values (leaves,), normals (tape.normals, lanes) and uniforms (tape.uniforms, lanes) for a tape."""
    draws = np.random.default_rng(seed)
    return (
        draws.uniform(0.1, 2.0, len(tape.leaves)),
        draws.standard_normal((tape.normals, lanes)),
        draws.uniform(0.001, 0.999, (tape.uniforms, lanes)),
    )
