"""How fine the steps must be where several assets are watched together, so that the two bounds are close enough.

What of several assets happens within a step is known between bounds only, and the bounds close as the steps shorten.
Steps are halved until the bounds of the price are closer than a share of the error that the run aims at, by a pilot run of a
fixed size from its own stream: the same seed and wish give the same steps.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from mcx.estimators.estimate import Estimate, estimates
from mcx.machine.run import Stream, run
from mcx.machine.sizes import cost
from mcx.tape.program import Program
from mcx.tape.unroll import Unrolled

PIECES = (1, *(1 << k for k in range(4, 11)))  # of the time that is watched, tried one after the other
MOST_NORMALS = 4096  # of a path: more would not stay in the cache
PILOT = 1 << 14


@dataclass(frozen=True, slots=True)
class Refinement:
    """The steps that were taken and why.

    pieces   of the time that is watched; steps: of the whole grid, unrefined: as they would be without refining
    target   how close the bounds of the price should be; `width` how close the pilot found them, `reached` whether that
             is closer
    cost     of a path, over that of a path without refining, from the fixed table of costs
    """

    pieces: int
    steps: int
    unrefined: int
    target: float
    width: Estimate
    reached: bool
    cost: float


def refine(
    make: Callable[[int], tuple[Unrolled, Program]], target: float, *, seed: int, threads: int | None = None,
    pieces: int | None = None,
) -> tuple[Unrolled, Program, Refinement]:
    """The tape with steps fine enough for a target, or with the number of `pieces` asked for.

    `make(pieces)` gives tape and program of a contract refined so far.
    """
    first, coarse = make(1)
    unrefined = len(first.grid.times) - 1
    for number in PIECES if pieces is None else (pieces,):
        unrolled, program = (first, coarse) if number == 1 else make(number)
        if program.normals > MOST_NORMALS and number > 1 and pieces is None:
            break
        width = _width(unrolled, program, seed, threads)
        found = (unrolled, program, Refinement(
            number, len(unrolled.grid.times) - 1, unrefined, target, width,
            width.value + 2.0 * width.standard_error <= target, cost(program) / cost(coarse)))
        if found[2].reached:
            break
    return found


def _width(unrolled: Unrolled, program: Program, seed: int, threads: int | None) -> Estimate:
    """How far the bounds of the price are apart, by the pilot."""
    number = next((k for k, output in enumerate(unrolled.tape.outputs)
                   if output.kind == "gap" and output.subject == "price"), None)
    if number is None:  # the legs cancel
        return Estimate(0.0, 0.0, PILOT)
    alone = replace(program, outputs=np.array([program.outputs[number]], dtype=np.int32))
    sums = run(alone, seed=seed, paths=PILOT, stream=Stream.PILOT, threads=threads)
    return estimates(sums.paths, sums.mean, sums.m2)[0]
