"""From `Program` to the code that the kernel runs: one pass that picks a form for each instruction.

On the way a drift and the step after it become one instruction, scalars are filled into a spare row where no
form takes them, and an instruction that would write a row it reads is given another to write.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np

from mcx.machine.forms import FORMS, Form, kinds
from mcx.tape.bridges import IMAGES, LEAST_EXPONENT, LONG_STEP
from mcx.tape.ops import OPS, Op
from mcx.tape.program import ALONE, Program

WIDTH = 6  # form, destination, up to four operands
_WHOLE_POWERS = range(-8, 9)  # x ** n by multiplications
_TABLE = 3  # operands of a LOOKUP: what it counts, its first entry and its last


@dataclass(frozen=True, slots=True)
class KernelCode:
    """What the kernel reads.

    code     (instructions, 6) int32: form, destination row, operands (rows or scalars, as the form says)
    scalars  (scalars,) float64
    outputs  (outputs,) int32: the row of each output
    sums     how many sums the code takes
    rows     rows of the register file, spare ones included; the first normals + uniforms hold the draws
    """

    code: np.ndarray
    scalars: np.ndarray
    outputs: np.ndarray
    normals: int
    uniforms: int
    rows: int
    sums: int = 0


def prepare(program: Program) -> KernelCode:
    """The kernel's code for a program; takes some microseconds an instruction."""
    writer = _Writer(program)
    for form, destination, operands in _join_drifts(program):
        if isinstance(form, Form) and form >= Form.SUM_R:
            writer.sum(form, destination, operands)
        else:
            writer.instruction(form, destination, operands)
    outputs = [writer.output(operand) for operand in program.outputs.tolist()]
    return KernelCode(
        code=np.array(writer.code, dtype=np.int32).reshape(-1, WIDTH),
        scalars=np.array(writer.scalars, dtype=np.float64),
        outputs=np.array(outputs, dtype=np.int32),
        normals=program.normals,
        uniforms=program.uniforms,
        rows=writer.rows,
        sums=len(program.sums),
    )


def _join_drifts(program: Program) -> Iterator[tuple[Op | Form, int, tuple[int, ...]]]:
    """The instructions, with x + m and the step that alone reads it made one: the step then loads x once; and the sums
    between them, each as soon as it can be taken."""
    lines = [
        (Op(op), destination, tuple(operands[: _TABLE if op == Op.LOOKUP else OPS[Op(op)].arity]))
        for op, destination, *operands in program.code.tolist()
    ]
    sums = deque(sorted(enumerate(program.sums.tolist()), key=lambda part: part[1][2]))
    once = _read_once(lines, program)
    number = 0
    while number < len(lines):
        yield from _sums_until(number, sums)
        op, row, operands = lines[number]
        if op is Op.ADD and operands[1] < 0 <= operands[0] and number in once and number + 1 < len(lines):
            next_op, destination, step = lines[number + 1]
            if next_op is Op.STEP and step[0] == row and step[1] < 0 <= step[2] != row:
                yield from _sums_until(number + 1, sums)
                yield Form.DRIFT_STEP_RSSR, destination, (*operands, *step[1:])
                number += 2
                continue
        yield op, row, operands
        number += 1
    yield from _sums_until(number, sums)


def _sums_until(line: int, sums: deque[tuple[int, list[int]]]) -> Iterator[tuple[Form, int, tuple[int, ...]]]:
    """Those of the sums that are taken when this many instructions have run, or before."""
    while sums and sums[0][1][2] <= line:
        number, (left, right, _) = sums.popleft()
        yield (Form.SUM_R, number, (left,)) if right == ALONE else (Form.SUM_RR, number, (left, right))


def _read_once(lines: Sequence[tuple[Op, int, tuple[int, ...]]], program: Program) -> set[int]:
    """Numbers of the instructions whose value is read exactly once."""
    reads = [0] * len(lines)
    writer: dict[int, int] = {}  # by row: the instruction that wrote it last
    summed: dict[int, list[int]] = {}
    for left, right, line in program.sums.tolist():
        summed.setdefault(line, []).extend((left, right))
    for number, (_, destination, operands) in enumerate(lines):
        for row in (*operands, *summed.get(number, ())):
            if row in writer:
                reads[writer[row]] += 1
        writer[destination] = number
    for row in (*program.outputs.tolist(), *summed.get(len(lines), ())):
        if row in writer:
            reads[writer[row]] += 1
    return {number for number, count in enumerate(reads) if count == 1}


@cache
def _form_of(op: Op, scalar: tuple[bool, ...]) -> tuple[Form, frozenset[int]]:
    """The form that takes these operands, each a scalar or not, with the fewest scalars filled into rows; and which."""
    scalars = {position for position, is_scalar in enumerate(scalar) if is_scalar}
    wanted = {form: {k for k, kind in enumerate(kinds(form)) if kind == "S"} for form in FORMS[op]}
    form = min((f for f in wanted if wanted[f] <= scalars), key=lambda f: len(scalars - wanted[f]))
    return form, frozenset(scalars - wanted[form])


class _Writer:
    """Writes the kernel's code. An operand here is a row of the register file or -1 - the number of a scalar.

    `place` says where each of the program's rows is at the moment: an instruction whose result would go where
    one of its operands stands writes the spare row, and the row it would have gone to becomes the spare one.
    """

    def __init__(self, program: Program):
        self.code: list[tuple[int, ...]] = []
        self.scalars: list[float] = program.scalars.tolist()
        self.place = list(range(program.rows))
        self.spare = program.rows
        self.rows = program.rows + 1
        self.first_scratch = self.rows
        self.scratch_taken = 0

    def instruction(self, op: Op | Form, destination: int, operands: Sequence[int]) -> None:
        """One instruction of the program, as one or a few of the kernel's."""
        self.scratch_taken = 0
        sources = [self.place[k] if k >= 0 else k for k in operands]
        if self.place[destination] in sources:
            self.place[destination], self.spare = self.spare, self.place[destination]
        self.write(op, self.place[destination], *sources)

    def sum(self, form: Form, number: int, operands: Sequence[int]) -> None:
        """Add up a row, or the products of two, over the paths."""
        self.scratch_taken = 0
        self.emit(form, number, *(self.place[k] if k >= 0 else self.filled(k) for k in operands))

    def output(self, operand: int) -> int:
        """The row of an output; a scalar gets a row of its own."""
        if operand >= 0:
            return self.place[operand]
        self.rows += 1
        self.emit(Form.FILL_S, self.rows - 1, operand)
        return self.rows - 1

    def write(self, op: Op | Form, to: int, *sources: int) -> None:
        """Write what has no form of its own by what has."""
        match op, *sources:
            case Form(), *_:
                self.emit(op, to, *sources)
            case (Op.ADD | Op.MUL | Op.MIN | Op.MAX | Op.EQ | Op.NE), a, b if a < 0 <= b:
                self.choose(op, to, b, a)
            case Op.SUB, a, b if b < 0 <= a:
                self.emit(Form.ADD_RS, to, a, self.constant(-self.scalars[-1 - b]))
            case Op.NEG, a:
                self.choose(Op.MUL, to, a, self.constant(-1.0))
            case Op.NOT, a:
                self.choose(Op.EQ, to, a, self.constant(0.0))
            case Op.POW, a, b if b < 0 and self.scalars[-1 - b] == 0.5:
                self.choose(Op.SQRT, to, a)
            case Op.POW, a, b if b < 0 <= a and self.scalars[-1 - b] in _WHOLE_POWERS:
                self.power(to, a, int(self.scalars[-1 - b]))
            case Op.STEP, x, s, z if s >= 0 > z:
                self.choose(op, to, x, z, s)
            case (Op.BRIDGE_LOW | Op.BRIDGE_HIGH), x0, x1, variance, u:
                log = self.scratch()
                self.choose(Op.LOG, log, u)
                if variance >= 0:
                    product = self.scratch()
                    self.emit(Form.MUL_RR, product, variance, log)
                    variance, log = self.constant(1.0), product
                self.choose(op, to, x0, x1, variance, log)
            case Op.BRIDGE_CLEAR, d0, d1, variance if variance < 0:
                rate = self.constant(-2.0 / self.scalars[-1 - variance] if self.scalars[-1 - variance] else -np.inf)
                self.emit(Form.CLEAR_RRS, to, self.row(d0), self.row(d1), rate)
            case Op.BRIDGE_CORRIDOR, d0, d1, width, variance if width < 0 and variance < 0:
                self.corridor(to, d0, d1, width, self.scalars[-1 - variance])
            case _:
                self.choose(op, to, *sources)

    def corridor(self, to: int, d0: int, d1: int, width: int, variance: float) -> None:
        """The images of `tape.bridges.bridge_corridor` in vector loops, as many as count for this step; where the
        step is long for its width, or one of them is no usual number, lane by lane."""
        w = self.scalars[-1 - width]
        usual = np.isfinite(w) and w > 0.0 and variance > 0.0
        if not usual or variance / (w * w) > LONG_STEP:
            return self.choose(Op.BRIDGE_CORRIDOR, to, d0, d1, width, self.constant(variance))
        d0, d1 = self.row(d0), self.row(d1)
        reach, rate = 2.0 * w * w / variance, self.constant(-2.0 / variance)
        if reach > -LEAST_EXPONENT:
            return self.emit(Form.CORRIDOR_RRSS, to, d0, d1, width, rate)
        exponent, image, other, total = (self.scratch() for _ in range(4))
        numbers = sorted(range(-IMAGES, IMAGES + 1), key=abs)
        for n in (n for n in numbers if min(n * n, (n + 1) ** 2) * reach < -LEAST_EXPONENT):
            self.emit(Form.IMAGE_RRSS, exponent, d0, d1, self.constant(n * w), rate)
            self.emit(Form.EXP_R, image, exponent)
            if n == 0:
                self.emit(Form.SUB_SR, other, self.constant(1.0), image)
            else:
                self.emit(Form.SUB_RR, other, total, image)
            total, other = other, total
        for n, sign in ((n, sign) for n in numbers if n > 0 for sign in (1, -1)):
            if (n * n - n * (sign > 0)) * reach < -LEAST_EXPONENT:
                first = self.constant(-n * n * reach)
                self.constant(sign * n * reach / w)
                self.emit(Form.FAR_RRRS, other, total, d0, d1, first)
                total, other = other, total
        self.emit(Form.INSIDE_RRRS, to, total, d0, d1, width)

    def row(self, source: int) -> int:
        """The row of an operand; a scalar is filled into one."""
        return source if source >= 0 else self.filled(source)

    def power(self, to: int, x: int, exponent: int) -> None:
        """x ** exponent by multiplications."""
        if exponent == 0:
            return self.emit(Form.FILL_S, to, self.constant(1.0))
        if exponent == 1:
            return self.emit(Form.MUL_RS, to, x, self.constant(1.0))
        if exponent == 2:
            return self.emit(Form.MUL_RR, to, x, x)
        part = self.scratch()
        if exponent < 0:
            self.power(part, x, -exponent)
            return self.emit(Form.DIV_SR, to, self.constant(1.0), part)
        if exponent % 2:
            self.power(part, x, exponent - 1)
            return self.emit(Form.MUL_RR, to, part, x)
        self.power(part, x, exponent // 2)
        return self.emit(Form.MUL_RR, to, part, part)

    def choose(self, op: Op, to: int, *sources: int) -> None:
        """Emit the form that takes these operands with the fewest scalars filled into rows."""
        form, filled = _form_of(op, tuple(source < 0 for source in sources))
        self.emit(form, to, *[self.filled(v) if k in filled else v for k, v in enumerate(sources)])

    def emit(self, form: Form, to: int, *sources: int) -> None:
        slots = (source if source >= 0 else -1 - source for source in sources)
        self.code.append((form, to, *slots, *(0,) * (WIDTH - 2 - len(sources))))

    def filled(self, scalar: int) -> int:
        row = self.scratch()
        self.emit(Form.FILL_S, row, scalar)
        return row

    def scratch(self) -> int:
        """A row that is free until the end of this instruction."""
        row = self.first_scratch + self.scratch_taken
        self.scratch_taken += 1
        self.rows = max(self.rows, row + 1)
        return row

    def constant(self, value: float) -> int:
        self.scalars.append(value)
        return -len(self.scalars)
