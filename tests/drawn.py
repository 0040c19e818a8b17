"""Gives the reference the numbers that the machine drew for a path.

Which dimension is which is read off the tape: normals are numbered step by step, within a step by moving asset; the
uniform of a watched extreme stands beside it in the bridge instruction.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from helpers import Ready
from reference import Reference, Result

from mcx.machine.run import draws
from mcx.tape.ops import Op

SIDES = {Op.BRIDGE_LOW: "low", Op.BRIDGE_HIGH: "high", Op.BRIDGE_RANGE: "high"}


def uniform_dimensions(ready: Ready) -> dict[tuple[int, int, str], int]:
    """The uniform's dimension for each (step, asset, side) that the tape draws an extreme of."""
    steps, found = ready.unrolled.tape.instructions, {}
    ends = ready.unrolled.grid.times[1:]
    for step in steps:
        if step.op in SIDES:
            _, _, variance, uniform = (steps[operand].payload for operand in step.operands)
            found[ends.index(variance.end), variance.asset, SIDES[step.op]] = uniform
    return found


def reference_results(ready: Ready, numbers: Sequence[int], seed: int) -> list[Result]:
    """What the second implementation pays on these paths of the machine's main run."""
    grid = ready.unrolled.grid
    reference = Reference(ready.dated, ready.market, grid.times[1:], grid.assets)
    drawn = draws(ready.program, seed=seed, stream=0, numbers=numbers)
    dimensions, width = uniform_dimensions(ready), len(grid.assets)

    def one(row: np.ndarray) -> Result:
        normals, uniforms = row[: ready.program.normals].tolist(), row[ready.program.normals :].tolist()

        def normal(step: int, k: int) -> float:
            return normals[step * width + k]

        def uniform(step: int, asset: int, side: str) -> float:
            return uniforms[dimensions[step, asset, side]] if (step, asset, side) in dimensions else np.nan

        spare = set(range(len(uniforms))) - set(dimensions.values())  # a hit's moment takes one, and the last normal
        return reference.path(normal, uniform, (normals[-1], uniforms[spare.pop()]) if spare else (np.nan, np.nan))

    return [one(row) for row in drawn]
