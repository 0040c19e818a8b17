"""Programs written by hand, and the kernel on rows of one's own instead of draws."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from mcx.machine.forward import forward
from mcx.machine.jit import COMPILED
from mcx.machine.prepare import prepare
from mcx.tape.ops import Op
from mcx.tape.program import ALONE, Program

SEED = 8190432761550329847  # of every run in these tests, unless another is wanted


def many(paths: int) -> int:
    """A number of paths, far smaller where kernels run as plain Python."""
    return paths if COMPILED else max(paths >> 8, 130)


def program(
    lines: Sequence[tuple[int, ...]],
    *,
    rows: int,
    outputs: Sequence[int],
    scalars: Sequence[float] = (),
    normals: int = 0,
    uniforms: int = 0,
    sums: Sequence[tuple[int, int, int]] = (),
) -> Program:
    """A program of lines (op, destination, operands) and sums (first, second, instructions run)."""
    code = [(*line, *(0,) * (6 - len(line))) for line in lines]
    return Program(
        code=np.array(code, dtype=np.int32).reshape(-1, 6),
        scalars=np.array(scalars, dtype=np.float64),
        outputs=np.array(outputs, dtype=np.int32),
        normals=normals,
        uniforms=uniforms,
        rows=rows,
        sums=np.array(sums, dtype=np.int32).reshape(-1, 3),
    )


def summed(made: Program) -> Program:
    """The same program with three sums: of its first output, of its square, and of a number."""
    return replace(made, sums=np.array([(row, other, len(made.code)) for row, other in (
        (made.outputs[0], ALONE), (made.outputs[0], made.outputs[0]), (-1, ALONE))], dtype=np.int32))


def asian(dates: int, spot: float = 100.0, strike: float = 100.0, rate: float = 0.03, vol: float = 0.2) -> Program:
    """The discounted payoff of an arithmetic Asian call over one year, and whether it ends in the money."""
    dt = 1.0 / dates
    drift, deviation = (rate - 0.5 * vol * vol) * dt, vol * np.sqrt(dt)
    scalars = (np.log(spot) + drift, drift, deviation, 1.0 / dates, strike, 0.0, np.exp(-rate))
    start, m, s, weight, k, zero, discount = (-1 - number for number in range(len(scalars)))
    x, moved, level, total = range(dates, dates + 4)
    lines = [(Op.STEP, x, start, s, 0), (Op.EXP, total, x)]
    for date in range(1, dates):
        lines += [(Op.ADD, moved, x, m), (Op.STEP, x, moved, s, date), (Op.EXP, level, x),
                  (Op.ADD, total, total, level)]
    lines += [
        (Op.MUL, total, total, weight),
        (Op.SUB, total, total, k),
        (Op.LT, level, zero, total),
        (Op.MAX, total, total, zero),
        (Op.MUL, total, total, discount),
    ]
    return program(lines, rows=dates + 4, outputs=(total, level), scalars=scalars, normals=dates)


def on_rows(made: Program, rows: np.ndarray) -> np.ndarray:
    """The outputs of a program whose first registers hold `rows`, shape (outputs, lanes); lanes at most 64."""
    return outputs_and_sums(made, rows)[0]


def outputs_and_sums(made: Program, rows: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The outputs of `on_rows`, and the sums over its lanes, shape (sums,)."""
    code = prepare(made)
    registers, sums = np.full((code.rows, 72), 777.0), np.full((1, code.sums), 777.0)
    registers[: len(rows), : rows.shape[1]] = rows
    forward(registers, code.code, code.scalars, 64, rows.shape[1], sums)
    return registers[code.outputs, : rows.shape[1]], sums[0]
