"""The adjoint of a tape: one backward sweep gives the derivative of a value by everything that it was made of.

The sweep appends instructions to a tape under construction. What is the same on every path (leaves, and what is made of
leaves alone) is evaluated once, outside the paths; so of such a value only the sum of its adjoint over the paths is
wanted, and the kernel takes that sum. From there to the leaves the sweep goes on in plain numbers, by the same rules.

Reverse accumulation: A. Griewank and A. Walther, "Evaluating Derivatives", 2nd edition (2008), chapter 3. For path-wise
derivatives of prices: M. Giles and P. Glasserman, "Smoking adjoints", Risk 19 (2006), 88-92.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TypeAlias

import numpy as np

from mcx.tape.adjoint_rules import At, Numbers, Product, rules_of
from mcx.tape.builder import Builder
from mcx.tape.ops import OPS, Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Instruction, Leaf, LeafKind, Sum, Tape
from mcx.tape.registers import uniform_values
from mcx.tape.rules import Value

Wanted: TypeAlias = Callable[[Leaf], bool]
Gradient: TypeAlias = dict[int, list[Product]]  # by value that is the same on every path: products that add up

# where a path is drawn: logs of levels and of extremes
MODEL = frozenset({Op.STEP, Op.BRIDGE_LOW, Op.BRIDGE_HIGH, Op.BRIDGE_RANGE})


def of_the_market(leaf: Leaf) -> bool:
    """Whether a leaf depends on the market: all but the terms and days of the contract do."""
    return leaf.kind not in (LeafKind.TERM, LeafKind.LENGTH)


def with_adjoint(tape: Tape, values: Iterable[int], wanted: Wanted = of_the_market) -> Tape:
    """The tape with sums for the derivatives of the total of `values` by every wanted leaf.

    Values, outputs and leaves keep their order; `leaf_sums` makes derivatives by the leaves of what the kernel returns.
    """
    builder = Builder.of(tape)
    gradient = sweep(builder, dict.fromkeys(values, builder.constant(1.0)), wanted)
    return finished(builder, tape, sums_of(gradient))


def finished(builder: Builder, tape: Tape, sums: Iterable[Sum]) -> Tape:
    """What a builder made of a tape: the same outputs, with sums, and all that was not needed left out."""
    return drop_dead_code(builder.tape(tape.outputs, tape.normals, tape.uniforms, (*tape.sums, *sums)))


def sums_of(gradient: Gradient) -> tuple[Sum, ...]:
    """The sums over the paths that a gradient needs."""
    return tuple(Sum(part.left, part.right, uniform) for uniform, parts in gradient.items() for part in parts)


def on_paths(builder: Builder, parts: Iterable[Product]) -> int:
    """One entry of a gradient as a value of the tape, on each path."""
    total: int | None = None
    for part in parts:
        total = _added(builder, total, part)
    return builder.constant(0.0) if total is None else total


def along(builder: Builder, gradient: Gradient, leaf: int) -> int:
    """The derivative by a leaf as a value of the tape, on each path: what the gradient says of values that are the same
    on every path, each times its own derivative by the leaf."""
    tangents: dict[int, int | None] = {leaf: builder.constant(1.0)}

    def tangent(value: int) -> int | None:
        if value not in tangents:
            step, total = builder.instructions[value], None
            for operand, rule in zip(step.operands, rules_of(step.op, len(step.operands)), strict=True):
                if rule and (inner := tangent(operand)) is not None:
                    part = rule(At(builder, step.operands, value, inner, True))
                    total = _added(builder, total, part)
            tangents[value] = total
        return tangents[value]

    moved = [(part, factor) for value, parts in gradient.items() if (factor := tangent(value)) is not None
             for part in parts]
    return on_paths(builder, [
        Product(part.left, factor if part.right is None else builder.emit(Op.MUL, part.right, factor))
        for part, factor in moved])


def sweep(
    builder: Builder, seeds: Mapping[int, int], wanted: Wanted = of_the_market, held: Collection[int] = ()
) -> Gradient:
    """The gradient of the sum over `seeds` of value times weight, appended to the tape under construction.

    seeds   weight (a value) of each value that is differentiated
    held    values that do not move: nothing flows through them

    Only values that are the same on every path and depend on a wanted leaf have an entry, one product for each reader.
    """
    traits = _Traits.of(builder.instructions, wanted, held)
    bars: dict[int, int] = {}
    gradient: Gradient = {}

    def give(value: int, part: Product) -> None:
        if traits.uniform[value]:
            gradient.setdefault(value, []).append(part)
        else:
            bars[value] = _added(builder, bars.get(value), part)

    for value, weight in seeds.items():
        if traits.active[value]:
            give(value, Product(weight))
    for number in range(len(traits.active) - 1, -1, -1):
        if number not in bars:
            continue
        step, bar = builder.instructions[number], bars.pop(number)
        at = At(builder, step.operands, number, bar, traits.risky[number])
        for operand, rule in zip(step.operands, rules_of(step.op, len(step.operands)), strict=True):
            if rule and traits.active[operand]:
                give(operand, rule(at))
    return gradient


def _added(builder: Builder, total: int | None, part: Product) -> int:
    if total is None:
        return part.left if part.right is None else builder.emit(Op.MUL, part.left, part.right)
    if part.right is None:
        return builder.emit(Op.ADD, total, part.left)
    return builder.emit(Op.STEP, total, part.left, part.right)  # in one instruction


POSITIVE = frozenset({LeafKind.FORWARD, LeafKind.DISCOUNT})
KEEPS_POSITIVE = frozenset({Op.ADD, Op.MUL, Op.DIV, Op.MIN, Op.MAX, Op.SQRT})


@dataclass(slots=True)
class _Traits:
    """For each value: whether it is the same on every path, whether it depends on a wanted leaf through values that
    move, and whether its operands or its derivatives may be infinite or NaN on some lane."""

    instructions: Sequence[Instruction]
    uniform: list[bool] = field(default_factory=list)
    active: list[bool] = field(default_factory=list)
    risky: list[bool] = field(default_factory=list)
    _finite: list[bool] = field(default_factory=list)
    _logs: list[bool] = field(default_factory=list)  # draws and logs of levels: numbers of ordinary size
    _positive: list[bool] = field(default_factory=list)  # levels and what keeps their sign: positive and finite

    @staticmethod
    def of(instructions: Sequence[Instruction], wanted: Wanted, held: Collection[int]) -> _Traits:
        traits = _Traits(instructions)
        for number, step in enumerate(instructions):
            traits._add(step, number not in held, wanted)
        return traits

    def _add(self, step: Instruction, moves: bool, wanted: Wanted) -> None:
        op, operands = step.op, step.operands
        if operands:
            rules = rules_of(op, len(operands))
            follows = any(rule and self.active[k] for k, rule in zip(operands, rules, strict=True))
        else:
            follows = op is Op.LEAF and wanted(step.payload)
        self.active.append(moves and follows)
        self.uniform.append(all(self.uniform[k] for k in operands) and (bool(operands) or op in (Op.CONSTANT, Op.LEAF)))
        sound = all(self._finite[k] for k in operands) and self._sound(step)
        self.risky.append(not sound)
        self._finite.append(sound or OPS[op].flag)
        made_of_logs = op in (Op.ADD, Op.MIN, Op.MAX) and all(self._logs[k] for k in operands)
        self._logs.append(op in MODEL or made_of_logs or (not operands and op is not Op.CONSTANT))
        made_of_positive = op in KEEPS_POSITIVE and all(self._positive[k] for k in operands)
        level = op is Op.EXP and self._logs[operands[0]]
        self._positive.append(level or made_of_positive or (op is Op.LEAF and step.payload.kind in POSITIVE))

    def _sound(self, step: Instruction) -> bool:
        """Whether an operation has a finite value and finite derivatives wherever its operands are finite."""
        match step.op:
            case Op.CONSTANT:
                return bool(np.isfinite(step.payload))
            case Op.DIV:
                return self.uniform[step.operands[1]] or self._positive[step.operands[1]]
            case Op.EXP:
                return self._logs[step.operands[0]]
            case Op.LOG | Op.SQRT:
                return self._positive[step.operands[0]]
            case Op.POW:
                base, exponent = step.operands
                power = self.instructions[exponent]
                whole = power.op is Op.CONSTANT and power.payload >= 1.0 and float(power.payload).is_integer()
                return whole or (self._positive[base] and self.uniform[exponent])
        return True


def leaf_sums(
    tape: Tape, leaf_values: Sequence[float] | np.ndarray, sums: np.ndarray, chosen: Iterable[int] | None = None
) -> np.ndarray:
    """Derivatives by the leaves, shape (..., leaves) in the order of `tape.leaves`, out of the kernel's sums.

    sums    (..., tape.sums): totals over the paths, for instance one row for each part of a run
    chosen  numbers of the sums that count; None: all that are derivatives (`Sum.uniform`)
    """
    known = uniform_values(tape, leaf_values)
    bars: dict[int, np.ndarray] = {}
    for number in range(len(tape.sums)) if chosen is None else chosen:
        uniform = tape.sums[number].uniform
        if uniform >= 0:
            bars[uniform] = bars.get(uniform, 0.0) + sums[..., number]
    column = {leaf: number for number, leaf in enumerate(tape.leaves)}
    found = np.zeros((*sums.shape[:-1], len(column)))
    for number in range(max(bars, default=-1), -1, -1):
        if number not in bars:
            continue
        step, bar = tape.instructions[number], bars.pop(number)
        if step.op is Op.LEAF:
            found[..., column[step.payload]] += bar
            continue
        at = At(Numbers(), tuple(known[k] for k in step.operands), known[number], bar, risky=True)
        for operand, rule in zip(step.operands, rules_of(step.op, len(step.operands)), strict=True):
            if rule:
                part = rule(at)
                bars[operand] = bars.get(operand, 0.0) + (part.left if part.right is None else part.left * part.right)
    return found



def by_normals(tape: Tape, values: Sequence[Value], result: int) -> np.ndarray:
    """The derivative of one value by every normal, (normals,), on one path; `values` those of the tape there, as
    `interpret` gives them, each a number."""
    moves = moving(tape)
    bars: dict[int, Value] = {result: np.float64(1.0)}
    found, numbers = np.zeros(tape.normals), Numbers()
    for number in range(result, -1, -1):
        if number not in bars or not moves[number]:
            continue
        step, bar = tape.instructions[number], bars.pop(number)
        if step.op is Op.NORMAL:
            found[step.payload] += bar
            continue
        at = At(numbers, tuple(values[k] for k in step.operands), values[number], bar, risky=True)
        for operand, rule in zip(step.operands, rules_of(step.op, len(step.operands)), strict=True):
            if rule and moves[operand]:
                part = rule(at)
                bars[operand] = bars.get(operand, 0.0) + (part.left if part.right is None else part.left * part.right)
    return found


def moving(tape: Tape) -> list[bool]:
    """For each value whether a normal moves it."""
    found: list[bool] = []
    for step in tape.instructions:
        found.append(step.op is Op.NORMAL or any(found[k] for k in step.operands))
    return found
