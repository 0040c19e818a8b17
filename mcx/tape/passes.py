"""Dead code: what no output and no sum depends on is taken out, the rest keeps its order."""

from __future__ import annotations

from dataclasses import replace

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
    sums = tuple(
        Sum(renumbered[part.left], renumbered.get(part.right), renumbered.get(part.uniform, -1)) for part in tape.sums
    )
    return replace(tape, instructions=tuple(kept), outputs=outputs, sums=sums)


def _values_of(part: Sum) -> tuple[int, ...]:
    """What must stay for a sum: its factors, and the value that it is a derivative with respect to."""
    return part.factors if part.uniform < 0 else (*part.factors, part.uniform)
