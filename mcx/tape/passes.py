"""Dead code: what no output depends on is taken out, the rest keeps its order."""

from __future__ import annotations

from dataclasses import replace

from mcx.tape.program import Tape


def drop_dead_code(tape: Tape) -> Tape:
    """The same outputs from only the instructions they need. Draws keep their dimensions."""
    needed = bytearray(len(tape.instructions))
    for output in tape.outputs:
        needed[output.value] = 1
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
    return replace(tape, instructions=tuple(kept), outputs=outputs)
