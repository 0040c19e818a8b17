"""Antithetic pairs: each path beside its mirror image, on the same draws (J. Hammersley, K. Morton, 1956).

The mirror is a second copy of the tape on negated normals and on 1 - u for uniforms; an output is the mean of the two,
so that the machine's error is that of independent pairs. The generator and the inverse normal serve both. Where a
level is exp(c + x) with x symmetric, its mirror is exp(2 c) over it: neither the steps nor the exponential run again.
"""

from __future__ import annotations

from dataclasses import replace

from mcx.estimators.reduction.scheme import Case, Draft, Method, Stage
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Sum, Tape


def change(_: Case, draft: Draft) -> Draft:
    return replace(draft, tape=paired(draft.tape), each=2 * draft.each)


def paired(tape: Tape) -> Tape:
    """The tape whose outputs, sums and draws are those of `tape`, each the mean over a path and its mirror.

    Each instruction is followed by its mirror, and each sum by its own, so that no value has to be kept for long.
    """
    builder = Builder()
    own: list[int] = []
    mirror: list[int] = []
    centres: list[int | None] = []  # the value less its symmetric part, where it is a sum of normals
    half = builder.constant(0.5)
    ready: dict[int, list[int]] = {}  # sums by the value after which they can be taken
    for number, part in enumerate(tape.sums):
        ready.setdefault(max(part.factors), []).append(number)
    sums: dict[int, Sum] = {}

    def mean(value: int) -> int:
        if mirror[value] == own[value]:
            return own[value]
        return builder.emit(Op.MUL, half, builder.emit(Op.ADD, own[value], mirror[value]))

    def mean_sum(part: Sum) -> Sum:
        one, *rest = sorted(part.factors, key=lambda k: mirror[k] == own[k])
        if not rest or mirror[rest[0]] == own[rest[0]]:  # at most one of the factors has a mirror of its own
            return Sum(mean(one), own[rest[0]] if rest else None)
        (other,) = rest
        product = builder.emit(Op.STEP, builder.emit(Op.MUL, own[one], own[other]), mirror[one], mirror[other])
        return Sum(builder.emit(Op.MUL, half, product))

    for number, step in enumerate(tape.instructions):
        here = builder.copy(step, tuple(own[k] for k in step.operands))
        there = tuple(mirror[k] for k in step.operands)
        centre = None
        if step.op is Op.NORMAL:
            image = builder.emit(Op.NEG, here)
        elif step.op is Op.UNIFORM:
            image = builder.emit(Op.SUB, builder.constant(1.0), here)
        elif all(own[k] == mirror[k] for k in step.operands):  # no draw comes into it
            image = centre = here
        elif step.op is Op.STEP and tape.instructions[step.operands[2]].op is Op.NORMAL:
            x, scale, normal = step.operands
            image = builder.emit(Op.STEP, mirror[x], builder.emit(Op.NEG, mirror[scale]), own[normal])
            centre = centres[x] if mirror[scale] == own[scale] else None
        elif step.op is Op.EXP and centres[step.operands[0]] is not None:
            middle = centres[step.operands[0]]
            square = builder.emit(Op.EXP, builder.emit(Op.ADD, middle, middle))
            image = builder.emit(Op.DIV, square, here, place=step.place)
        else:
            image = builder.emit(step.op, *there, place=step.place)
            if step.op is Op.ADD:
                sides = [centres[k] for k in step.operands]
                centre = None if None in sides else builder.emit(Op.ADD, *sides)
        own.append(here)
        mirror.append(image)
        centres.append(centre)
        sums |= {k: mean_sum(tape.sums[k]) for k in ready.get(number, ())}
    outputs = [replace(output, value=mean(output.value), flag=False) for output in tape.outputs]
    taken = [replace(sums[k], uniform=own[part.uniform] if part.uniform >= 0 else -1) for k, part in enumerate(tape.sums)]
    return drop_dead_code(builder.tape(outputs, tape.normals, tape.uniforms, taken))


ANTITHETIC = Method("antithetic", "each path beside its mirror image", Stage.NORMALS, change)
