"""Hypothesis strategies: random tapes that keep the rules, with values that stay finite on most lanes."""

from __future__ import annotations

import numpy as np
from hypothesis import strategies as st

from mcx.tape.ops import OPS, Op
from mcx.tape.program import Instruction, Leaf, LeafKind, LevelKey, Output, Tape

NORMALS, UNIFORMS, LEAVES = 3, 2, 4
TIMES = (0.0, 0.25, 0.5, 1.0)
NUMBER_OPS = (Op.ADD, Op.SUB, Op.MUL, Op.NEG, Op.MIN, Op.MAX, Op.ABS, Op.STEP, Op.SELECT)
GUARDED_OPS = (Op.DIV, Op.POW, Op.EXP, Op.LOG, Op.SQRT, Op.BRIDGE_LOW, Op.BRIDGE_HIGH, Op.BRIDGE_CLEAR,
               Op.BRIDGE_CORRIDOR, Op.LOOKUP)
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


@st.composite
def tapes(draw: st.DrawFn, levels: bool = False, most: int = 40) -> Tape:
    """A random tape with a few outputs; with `levels` its inputs are levels of two assets and one watched stretch."""
    raw = RawTape()
    for name in range(LEAVES):
        raw.put(Op.LEAF, payload=Leaf(LeafKind.TERM, name=f"t{name}"))
    if levels:
        for _ in range(draw(st.integers(1, 5))):
            key = LevelKey(draw(st.integers(0, 1)), draw(st.sampled_from(TIMES)))
            raw.put(Op.LEVEL, payload=key)
        if draw(st.booleans()):
            start, end = sorted(draw(st.lists(st.sampled_from(TIMES), min_size=2, max_size=2, unique=True)))
            raw.put(draw(st.sampled_from([Op.LOW, Op.HIGH])), payload=LevelKey(draw(st.integers(0, 1)), end, start))
    else:
        for number in range(NORMALS):
            raw.put(Op.NORMAL, payload=number)
    uniforms = [] if levels else [raw.put(Op.UNIFORM, payload=number) for number in range(UNIFORMS)]
    for number in (0.0, 1.0, draw(st.floats(-3.0, 3.0))):
        raw.constant(number)
    raw.put(Op.LT, raw.numbers[0], raw.numbers[-1])
    for _ in range(draw(st.integers(1, most))):
        _grow(draw, raw, uniforms)
    chosen = draw(st.lists(st.sampled_from(raw.numbers + raw.flags), min_size=1, max_size=4))
    outputs = [Output(f"out {number}", value, value in raw.flags) for number, value in enumerate(chosen)]
    counts = (0, 0) if levels else (NORMALS, UNIFORMS)
    return Tape(tuple(raw.instructions), tuple(outputs), *counts)


def _grow(draw: st.DrawFn, raw: RawTape, uniforms: list[int]) -> None:
    """One more operation, with its operands made fit for it where it is undefined for some."""
    number = st.sampled_from(raw.numbers)
    flag = st.sampled_from(raw.flags)
    op = draw(st.sampled_from([*NUMBER_OPS, *GUARDED_OPS, *FLAG_OPS]))
    if op in (Op.AND, Op.OR):
        raw.put(op, draw(flag), draw(flag))
    elif op is Op.NOT:
        raw.put(op, draw(flag))
    elif op is Op.SELECT:
        raw.put(op, draw(flag), draw(number), draw(number))
    elif op is Op.STEP and draw(st.booleans()):  # as a model writes it, drift and deviation from the market
        leaf = st.sampled_from(raw.numbers[:LEAVES])
        raw.put(op, raw.put(Op.ADD, draw(number), draw(leaf)), draw(leaf), draw(number))
    elif op in NUMBER_OPS or op in FLAG_OPS:
        raw.put(op, *(draw(number) for _ in range(OPS[op].arity)))
    elif op is Op.EXP:
        raw.put(op, raw.put(Op.MIN, draw(number), raw.constant(2.5)))
    else:
        positive = raw.put(Op.ADD, raw.put(Op.ABS, draw(number)), raw.constant(0.5))
        if op in (Op.LOG, Op.SQRT):
            raw.put(op, positive)
        elif op is Op.DIV:
            raw.put(op, draw(number), positive)
        elif op is Op.BRIDGE_CLEAR:
            raw.put(op, draw(number), draw(number), positive)
        elif op is Op.BRIDGE_CORRIDOR:
            raw.put(op, draw(number), draw(number), positive, raw.put(Op.ADD, positive, raw.constant(0.1)))
        elif op is Op.LOOKUP:  # its entries are the same on every path
            raw.put(op, draw(number), *(raw.constant(entry) for entry in (1.5, -2.0, 0.25)))
        elif op is Op.POW:
            raw.put(op, positive, raw.constant(draw(st.sampled_from([0.5, 1.0, -1.0, 1.5]))))
        elif uniforms:
            raw.put(op, draw(number), draw(number), positive, draw(st.sampled_from(uniforms)))


def inputs_for(tape: Tape, lanes: int, seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Leaf values (leaves,), normals (tape.normals, lanes) and uniforms (tape.uniforms, lanes) for a tape."""
    draws = np.random.default_rng(seed)
    return (
        draws.uniform(0.1, 2.0, len(tape.leaves)),
        draws.standard_normal((tape.normals, lanes)),
        draws.uniform(0.001, 0.999, (tape.uniforms, lanes)),
    )
