"""Dead code: what no output and no sum depends on is taken out, the rest keeps its order. And an order that frees
registers."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Mapping
from dataclasses import replace

from mcx.tape.ops import Op
from mcx.tape.program import Sum, Tape


def drop_dead_code(tape: Tape) -> Tape:
    """The same outputs and sums from only the instructions they need. Draws keep their dimensions."""
    needed = bytearray(len(tape.instructions))
    for value in (*(output.value for output in tape.outputs), *(k for part in tape.sums for k in _values_of(part))):
        needed[value] = 1
    for number in range(len(tape.instructions) - 1, -1, -1):
        if needed[number]:
            for operand in tape.instructions[number].operands:
                needed[operand] = 1
    if all(needed):
        return tape
    renumbered: dict[int, int] = {}
    kept = []
    for number, step in enumerate(tape.instructions):
        if needed[number]:
            renumbered[number] = len(kept)
            operands = tuple(renumbered[k] for k in step.operands)
            kept.append(step if operands == step.operands else replace(step, operands=operands))
    outputs = tuple(replace(output, value=renumbered[output.value]) for output in tape.outputs)
    return replace(tape, instructions=tuple(kept), outputs=outputs, sums=_moved(tape.sums, renumbered))


def _values_of(part: Sum) -> tuple[int, ...]:
    """What must stay for a sum: its factors, and the value that it is a derivative with respect to."""
    return part.factors if part.uniform < 0 else (*part.factors, part.uniform)


def _moved(sums: Iterable[Sum], renumbered: Mapping[int, int]) -> tuple[Sum, ...]:
    return tuple(Sum(renumbered[part.left], renumbered.get(part.right), renumbered.get(part.uniform, -1))
                 for part in sums)


def in_order_of_steps(tape: Tape, step_of: Callable[[int], int]) -> Tape:
    """The same tape with every value as soon as the steps that it depends on are made; `step_of` gives the step of a
    normal. Chances that are multiplied up at the end would else keep the levels of all steps in registers."""
    level: list[int] = []
    for step in tape.instructions:
        own = step_of(step.payload) if step.op is Op.NORMAL else 0
        level.append(max([own, *(level[k] for k in step.operands)]))
    uses = Counter(k for step in tape.instructions for k in step.operands)
    wanted: dict[int, int] = {}  # of values that need no step: the first that needs them
    for number in range(len(level) - 1, -1, -1):
        if level[number] == 0:
            level[number] = wanted.get(number, 0)
        for k in tape.instructions[number].operands:
            wanted[k] = min(level[number], wanted.get(k, level[number]))
    for number, step in enumerate(tape.instructions):  # a drift stays beside the step that it alone belongs to
        if step.op is Op.STEP and uses[step.operands[0]] == 1:
            level[step.operands[0]] = level[number]
    order = sorted(range(len(level)), key=level.__getitem__)  # stable: operands stay before what reads them
    renumbered = {old: new for new, old in enumerate(order)}
    moved = (tape.instructions[old] for old in order)
    instructions = tuple(replace(step, operands=tuple(renumbered[k] for k in step.operands)) for step in moved)
    return replace(tape, instructions=instructions, sums=_moved(tape.sums, renumbered),
                   outputs=tuple(output.at(renumbered[output.value]) for output in tape.outputs))
