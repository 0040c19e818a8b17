"""Runs a program over many paths, with progress, interruption and snapshots; and over a few, path by path."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from enum import IntEnum

import numpy as np

from mcx.machine.prepare import KernelCode, prepare
from mcx.machine.sizes import GROUP, batch_for
from mcx.tape.program import Program

COMPILING = "compiling the kernels once for this machine, which takes about half a minute"


class Stream(IntEnum):
    """The last word of the generator's counter: runs of different streams share no number. Replicate r of a
    run is stream REPLICATE + r."""

    MAIN = 0
    PILOT = 1
    REPLICATE = 1 << 16


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What a run had reached after some of its paths."""

    paths: int
    mean: np.ndarray  # (outputs,)
    m2: np.ndarray  # (outputs,): sum of squares about the mean

    @property
    def variance(self) -> np.ndarray:
        """(outputs,): of one path; NaN for a single path."""
        return self.m2 / (self.paths - 1) if self.paths > 1 else np.full_like(self.m2, np.nan)

    @property
    def standard_error(self) -> np.ndarray:
        """(outputs,): of the mean."""
        return np.sqrt(self.variance / self.paths)


@dataclass(frozen=True, slots=True)
class BlockSums(Snapshot):
    """The result of a run; `snapshots` are what it had reached on the way; `interrupted`: paths are missing."""

    snapshots: tuple[Snapshot, ...] = ()
    interrupted: bool = False


class NonFinitePath(ArithmeticError):
    """A path gave an output that is infinite or not a number; `levels` replays it alone.

    path, output, seed, stream: int, the first such path, its first such output, and the run it belongs to.
    """

    def __init__(self, path: int, output: int, seed: int, stream: int):
        self.path, self.output, self.seed, self.stream = path, output, seed, stream
        super().__init__(f"output {output} is not finite on path {path} (seed {seed}, stream {stream})")


Progress = Callable[[int, float, float], None]
Notice = Callable[[str], None]


def run(
    program: Program,
    *,
    seed: int,
    paths: int,
    stream: int = Stream.MAIN,
    first_path: int = 0,
    threads: int | None = None,
    lanes: int | None = None,
    progress: Progress | None = None,
    snapshots: Sequence[int] = (),
    notice: Notice | None = None,
) -> BlockSums:
    """Mean and spread of every output over paths first_path .. first_path + paths - 1.

    seed        0 .. 2^64 - 1; with it, the stream and the path numbers every digit is fixed
    threads     None: all that the process may use; no digit depends on it, nor on `lanes`, a multiple of 64
    progress    called after each batch with the paths done and the mean and standard error of output 0
    snapshots   numbers of paths at which to note the sums; each is rounded up to a whole group of 64
    notice      called with a sentence if the kernels have to be compiled first

    Raises NonFinitePath for the first path with an output that is not finite, and KeyboardInterrupt if that
    comes before the first batch is done; later the sums so far are returned, marked as interrupted.
    """
    if paths < 1:
        raise ValueError(f"a run needs at least one path, not {paths}")
    code = prepare(program)
    reached: BlockSums | None = None  # replaced as a whole: an interruption cannot find it half made
    with _crew(code, seed, stream, threads, lanes, notice) as crew:
        from mcx.machine.sums import Totals

        totals = Totals(len(code.outputs), paths, snapshots)
        batch = batch_for(code, crew.lanes)
        try:
            for first in range(0, paths, batch):
                count = min(batch, paths - first)
                means, squares, bad = crew.run(range(first_path + first, first_path + first + count))
                _refuse_bad(bad, first_path + first, code, seed, stream)
                totals.add(count, means, squares)
                noted = tuple(Snapshot(*sums) for sums in totals.noted)
                reached = BlockSums(totals.paths, totals.mean, totals.squares, noted)
                if progress:
                    progress(reached.paths, float(reached.mean[0]), float(reached.standard_error[0]))
        except KeyboardInterrupt:
            if reached is None:
                raise
            return replace(reached, interrupted=reached.paths < paths)
    return reached


def levels(
    program: Program,
    *,
    seed: int,
    numbers: Sequence[int] | np.ndarray,
    stream: int = Stream.MAIN,
    threads: int | None = None,
    lanes: int | None = None,
) -> np.ndarray:
    """All outputs of the given path numbers, each run as in the run it belongs to; shape (paths, outputs)."""
    code = prepare(program)
    numbers = np.array(numbers, dtype=np.uint64)
    values = np.empty((len(numbers), len(code.outputs)))
    with _crew(code, seed, stream, threads, lanes) as crew:
        crew.run(numbers, values)
    return values


def values_by_path(
    program: Program, *, seed: int, paths: int, stream: int = Stream.MAIN, threads: int | None = None
) -> np.ndarray:
    """All outputs of the first paths, shape (outputs, paths)."""
    return levels(program, seed=seed, stream=stream, numbers=np.arange(paths), threads=threads).T


def draws(
    program: Program, *, seed: int, numbers: Sequence[int] | np.ndarray, stream: int = Stream.MAIN
) -> np.ndarray:
    """What the paths draw, normals first, then uniforms; shape (paths, draws)."""
    nothing = Program(
        code=np.empty((0, 6), dtype=np.int32),
        scalars=np.empty(0),
        outputs=np.arange(program.draws, dtype=np.int32),
        normals=program.normals,
        uniforms=program.uniforms,
        rows=program.draws,
    )
    return levels(nothing, seed=seed, stream=stream, numbers=numbers)


def available_threads() -> int:
    """How many processors this process may run on."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _crew(code: KernelCode, seed: int, stream: int, threads: int | None, lanes: int | None,
          notice: Notice | None = None):
    """The crew of a run; numba is imported only now, and compiles only now."""
    from mcx.machine.jit import is_cold

    if notice and is_cold("sweep"):
        notice(COMPILING)
    from mcx.machine.blocks import Crew

    return Crew(code, seed, stream, threads or available_threads(), lanes)


def _refuse_bad(bad: np.ndarray, first: int, code: KernelCode, seed: int, stream: int) -> None:
    found = np.flatnonzero(bad >= 0)
    if len(found):
        path, output = divmod(int(bad[found[0]]), len(code.outputs))
        raise NonFinitePath(first + GROUP * int(found[0]) + path, output, seed, stream)
