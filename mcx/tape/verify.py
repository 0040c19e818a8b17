"""The rules every tape keeps, checked after each pass in the tests: a pass that breaks one is caught where it did."""

from __future__ import annotations

from mcx.tape.ops import ANY, OPS, Op
from mcx.tape.program import Leaf, LevelKey, Tape, Unhit

PAYLOADS: dict[Op, type] = {
    Op.CONSTANT: float,
    Op.LEAF: Leaf,
    Op.LEVEL: LevelKey,
    Op.LOW: LevelKey,
    Op.HIGH: LevelKey,
    Op.UNHIT: Unhit,
    Op.MOMENT: LevelKey,
    Op.NORMAL: int,
    Op.UNIFORM: int,
}
FLAG_OPERANDS: dict[Op, tuple[int, ...]] = {
    Op.AND: (0, 1),
    Op.OR: (0, 1),
    Op.NOT: (0,),
    Op.SELECT: (0,),
}


def flags_of(tape: Tape) -> list[bool]:
    """For each value, whether it can only be 0 or 1."""
    flags: list[bool] = []
    for step in tape.instructions:
        if step.op is Op.CONSTANT:
            flags.append(step.payload in (0.0, 1.0))
        elif step.op in (Op.SELECT, Op.MIN, Op.MAX, Op.MUL):
            flags.append(all(flags[k] for k in step.operands))
        else:
            flags.append(OPS[step.op].flag)
    return flags


def problems(tape: Tape) -> list[str]:
    """What is wrong with the tape, one sentence each; empty for a tape that keeps the rules."""
    found: list[str] = []
    for number, step in enumerate(tape.instructions):
        name = f"v{number} ({step.op.name})"
        if OPS[step.op].arity != ANY and len(step.operands) != OPS[step.op].arity:
            found.append(f"{name} has {len(step.operands)} operands, not {OPS[step.op].arity}")
        if not all(0 <= k < number for k in step.operands):
            found.append(f"{name} reads a value that is not defined before it")
        payload = PAYLOADS.get(step.op)
        if payload is None and step.payload is not None:
            found.append(f"{name} has a payload")
        elif payload is not None and not isinstance(step.payload, payload):
            found.append(f"{name} has a payload that is no {payload.__name__}")
        limit = {Op.NORMAL: tape.normals, Op.UNIFORM: tape.uniforms}.get(step.op)
        if limit is not None and not 0 <= step.payload < limit:
            found.append(f"{name} reads dimension {step.payload} of {limit}")
    for output in tape.outputs:
        if not 0 <= output.value < len(tape.instructions):
            found.append(f"output '{output.name}' is no value of the tape")
    for part in tape.sums:
        if not all(-1 <= k < len(tape.instructions) for k in (*part.factors, part.uniform)) or min(part.factors) < 0:
            found.append(f"{part} is of no values of the tape")
    names = [output.name for output in tape.outputs]
    found += [f"two outputs are called '{name}'" for name in sorted({n for n in names if names.count(n) > 1})]
    return found or _flag_problems(tape)


def _flag_problems(tape: Tape) -> list[str]:
    flags = flags_of(tape)
    found = [
        f"v{number} ({step.op.name}) takes v{step.operands[k]} as a flag"
        for number, step in enumerate(tape.instructions)
        for k in FLAG_OPERANDS.get(step.op, ())
        if not flags[step.operands[k]]
    ]
    return found + [
        f"output '{output.name}' is no flag" for output in tape.outputs if output.flag and not flags[output.value]
    ]
