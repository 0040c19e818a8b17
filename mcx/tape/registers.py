"""From tape to program: what is the same on every path is computed once, everything else gets a register.

A register is free again after the last use of its value; a result never goes where one of its own operands stands, so
that the kernel's loops read and write different rows. Registers freed last are taken first: they are still in the
cache.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from mcx.tape.builder import COMMUTATIVE
from mcx.tape.ops import OPS, Op
from mcx.tape.program import ALONE, Instruction, Program, Tape
from mcx.tape.rules import evaluate


@dataclass(slots=True)
class _Scalars:
    """The pool of values that are the same on every path; equal ones are held once."""

    values: list[float] = field(default_factory=list)
    numbers: dict[str, int] = field(default_factory=dict)
    tables: dict[tuple[float, ...], int] = field(default_factory=dict)

    def operand(self, value: float) -> int:
        key = float(value).hex()
        if key not in self.numbers:
            self.numbers[key] = len(self.values)
            self.values.append(float(value))
        return -1 - self.numbers[key]

    def table(self, entries: Sequence[float]) -> tuple[int, int]:
        """The first and the last of entries that stand one behind the other; equal tables are held once."""
        key = tuple(entries)
        if key not in self.tables:
            self.tables[key] = len(self.values)
            self.values.extend(key)
        return -1 - self.tables[key], -self.tables[key] - len(key)


@dataclass(slots=True)
class _Registers:
    """Work registers from `first` upwards, given out and taken back."""

    first: int
    free: list[int] = field(default_factory=list)
    used: int = 0

    def take(self) -> int:
        if self.free:
            return self.free.pop()
        self.used += 1
        return self.first + self.used - 1


def lower(tape: Tape, leaf_values: Sequence[float] | np.ndarray) -> Program:
    """The program for one set of leaf values, shape (leaves,), in the order of `tape.leaves`."""
    uniform = uniform_values(tape, leaf_values)
    tape = _chosen(tape, uniform)
    draws = tape.normals + tape.uniforms
    registers = _Registers(draws)
    scalars = _Scalars()
    ready = _ready_sums(tape, uniform)
    last_use = _last_uses(tape, ready)
    sums: dict[int, tuple[int, int, int]] = {}  # by number of the sum
    operand: dict[int, int] = {}  # value -> row, or -1 - scalar
    code: list[tuple[int, ...]] = []

    def read(value: int) -> int:
        if value not in operand:
            operand[value] = scalars.operand(uniform[value])
        return operand[value]

    def add_up(after: int) -> set[int]:
        """Note the sums that are complete after this value; the values that they read."""
        for number in ready.get(after, ()):
            left, right = tape.sums[number].left, tape.sums[number].right
            sums[number] = read(left), ALONE if right is None else read(right), len(code)
        return {value for number in ready.get(after, ()) for value in tape.sums[number].factors}

    add_up(-1)
    for number, step in enumerate(tape.instructions):
        if uniform[number] is not None or _is_choice(step, uniform):
            continue
        done = set(step.operands)
        if step.op is Op.NORMAL:
            operand[number] = step.payload
        elif step.op is Op.UNIFORM:
            operand[number] = tape.normals + step.payload
        else:
            if step.op is Op.LOOKUP:  # its entries stand together, so that the kernel counts from the first
                sources = [read(step.operands[0]), *scalars.table([uniform[k] for k in step.operands[1:]])]
            else:
                sources = [read(k) for k in step.operands]
            if step.op in COMMUTATIVE and sources[0] < 0:
                sources.reverse()
            operand[number] = registers.take()
            code.append((int(step.op), operand[number], *sources, *(0,) * (4 - len(sources))))
            done.add(number)  # nothing may read it: the register is then free at once
        for value in sorted(done | add_up(number)):
            if last_use[value] == number and operand.get(value, -1) >= draws:  # entries of a table have no operand
                registers.free.append(operand[value])
    outputs = [read(output.value) for output in tape.outputs]
    return Program(
        code=np.array(code, dtype=np.int32).reshape(-1, 6),
        scalars=np.array(scalars.values, dtype=np.float64),
        outputs=np.array(outputs, dtype=np.int32),
        normals=tape.normals,
        uniforms=tape.uniforms,
        rows=draws + registers.used,
        sums=np.array([sums[number] for number in range(len(sums))], dtype=np.int32).reshape(-1, 3),
    )


READS_LEVELS = frozenset({Op.MOMENT, Op.UNHIT})  # besides their operands


def uniform_values(
    tape: Tape, leaf_values: Sequence[float] | np.ndarray, flags: Sequence[float | None] = ()
) -> list[float | None]:
    """For each value of the tape the number that it is on every path, or None where it depends on the draws. Flags that
    are such a number are taken from `flags` where that is given: values found with other leaves."""
    leaves = dict(zip(tape.leaves, leaf_values, strict=True))
    known: list[float | None] = []
    for number, step in enumerate(tape.instructions):
        if flags and OPS[step.op].flag:
            known.append(flags[number])
        elif step.op is Op.CONSTANT:
            known.append(step.payload)
        elif step.op is Op.LEAF:
            known.append(float(leaves[step.payload]))
        elif step.operands and step.op not in READS_LEVELS and all(known[k] is not None for k in step.operands):
            known.append(float(evaluate(step.op, *(known[k] for k in step.operands))))
        elif _is_choice(step, known):
            known.append(known[_choice(step, known)])
        else:
            known.append(None)
    return known


def _is_choice(step: Instruction, uniform: Sequence[float | None]) -> bool:
    """Whether a choice is the same on every path."""
    return step.op is Op.SELECT and uniform[step.operands[0]] is not None


def _choice(step: Instruction, uniform: Sequence[float | None]) -> int:
    """What such a choice takes."""
    return step.operands[1 if uniform[step.operands[0]] else 2]


def _chosen(tape: Tape, uniform: Sequence[float | None]) -> Tape:
    """The tape with what a choice takes read in its place, where that is the same on every path."""
    same = list(range(len(tape.instructions)))
    for number, step in enumerate(tape.instructions):
        if uniform[number] is None and _is_choice(step, uniform):
            same[number] = same[_choice(step, uniform)]
    if same == list(range(len(same))):
        return tape
    return replace(
        tape, instructions=tuple(replace(step, operands=tuple(same[k] for k in step.operands))
                                 for step in tape.instructions),
        outputs=tuple(output.at(same[output.value]) for output in tape.outputs),
        sums=tuple(replace(each, left=same[each.left], right=None if each.right is None else same[each.right])
                   for each in tape.sums))


def _last_uses(tape: Tape, ready: dict[int, list[int]]) -> list[int]:
    """For each value the last instruction that reads it (itself if none does); outputs are read at the very end."""
    last = list(range(len(tape.instructions)))
    for number, step in enumerate(tape.instructions):
        for operand in step.operands:
            last[operand] = number
    for number, parts in ready.items():
        for value in {value for part in parts for value in tape.sums[part].factors}:
            last[value] = max(last[value], number)
    for output in tape.outputs:
        last[output.value] = len(tape.instructions)
    return last


def _ready_sums(tape: Tape, uniform: Sequence[float | None]) -> dict[int, list[int]]:
    """The numbers of the sums by the value after which they can be taken: their last factor; -1: from the start."""
    ready: dict[int, list[int]] = {}
    for number, part in enumerate(tape.sums):
        ready.setdefault(max((k for k in part.factors if uniform[k] is None), default=-1), []).append(number)
    return ready
