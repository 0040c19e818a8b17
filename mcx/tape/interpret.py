"""The slow and obvious interpreter: one NumPy operation for each instruction, over arrays of lanes.

It is the definition that the passes and the kernel are tested against, and it can run a tape that still reads levels
(the contract's own tape) on levels given from outside.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from mcx.tape.ops import Op
from mcx.tape.program import LevelKey, Tape
from mcx.tape.rules import Value, evaluate


def interpret(
    tape: Tape,
    leaf_values: Sequence[float] | np.ndarray = (),
    normals: np.ndarray | None = None,
    uniforms: np.ndarray | None = None,
    levels: Mapping[tuple[Op, LevelKey], Value] | None = None,
) -> list[Value]:
    """Every value of the tape, in order: shape (paths,), or a scalar where it is the same on every path.

    leaf_values (leaves,) in the order of `tape.leaves`; normals (tape.normals, paths); uniforms (tape.uniforms, paths);
    levels: what LEVEL, LOW, HIGH and MOMENT read, keyed by operation and key, for a tape whose levels are not expanded
    yet.
    """
    leaves = dict(zip(tape.leaves, leaf_values, strict=True))
    values: list[Value] = []
    for step in tape.instructions:
        match step.op:
            case Op.CONSTANT:
                value = np.float64(step.payload)
            case Op.LEAF:
                value = np.float64(leaves[step.payload])
            case Op.LEVEL | Op.LOW | Op.HIGH | Op.MOMENT:
                value = np.asarray(levels[step.op, step.payload], dtype=np.float64)[()]
            case Op.NORMAL:
                value = normals[step.payload]
            case Op.UNIFORM:
                value = uniforms[step.payload]
            case _:
                value = evaluate(step.op, *(values[k] for k in step.operands))
        values.append(value)
    return values


def outputs(tape: Tape, values: Sequence[Value]) -> dict[str, Value]:
    """The outputs by name, out of what `interpret` returned."""
    return {output.name: values[output.value] for output in tape.outputs}
