"""Runs a program over many paths, with progress, interruption and snapshots; and over a few, path by path."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from enum import IntEnum

import numpy as np

from mcx.machine.draw_plan import PLAIN, DrawPlan, point_numbers
from mcx.machine.prepare import KernelCode, prepare
from mcx.machine.sizes import BATCHES, GROUP, batch_for
from mcx.tape.program import Program

COMPILING = "compiling the kernels once for this machine, which takes about half a minute"


class Stream(IntEnum):
    """The last word of the generator's counter: runs of different streams share no number. Replicate r of a
    run is stream REPLICATE + r."""

    MAIN = 0
    PILOT = 1
    COEFFICIENTS = 2
    CHOICE = 3
    FRESH = 4
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
    """The result of a run; `snapshots` are what it had reached on the way; `interrupted`: paths are missing.

    batch_paths (64,) and sums (64, sums): the sums that the program asks for, over each of 64 fixed parts of the run,
    and how many paths each part has (none, where the run has fewer than 64 groups of paths).
    """

    snapshots: tuple[Snapshot, ...] = ()
    interrupted: bool = False
    batch_paths: np.ndarray = field(default_factory=lambda: np.zeros(BATCHES, dtype=np.int64))
    sums: np.ndarray = field(default_factory=lambda: np.zeros((BATCHES, 0)))


@dataclass(frozen=True, slots=True)
class ScrambleSums:
    """The result of a run over scrambled points: means, and squares about them, (scrambles, outputs), each over
    `points` points.

    `interrupted`: scrambles are missing; those here are whole. sums (scrambles, sums): those that the program asks for.
    """

    points: int
    means: np.ndarray
    squares: np.ndarray
    interrupted: bool = False
    sums: np.ndarray = field(default_factory=lambda: np.zeros((0, 0)))


class NonFinitePath(ArithmeticError):
    """A path gave an output that is infinite or not a number; `levels` replays it alone.

    path, output, seed, stream: int, the first such path, its first such output, and the run it belongs to.
    """

    def __init__(self, path: int, output: int, seed: int, stream: int):
        self.path, self.output, self.seed, self.stream = path, output, seed, stream
        super().__init__(f"output {output} is not finite on path {path} (seed {seed}, stream {stream})")


class NonFiniteSum(ArithmeticError):
    """A sum over paths that is infinite or not a number while every output is finite.

    sum, first_path, seed, stream: int, the first such sum, the first of the 64 paths, and the run they belong to.
    """

    def __init__(self, number: int, first_path: int, seed: int, stream: int):
        self.sum, self.first_path, self.seed, self.stream = number, first_path, seed, stream
        last = first_path + GROUP - 1
        super().__init__(f"sum {number} is not finite over paths {first_path} to {last} (seed {seed}, stream {stream})")


Progress = Callable[[int, float, float], None]
Notice = Callable[[str], None]


def run(
    program: Program,
    *,
    seed: int,
    paths: int,
    stream: int = Stream.MAIN,
    plan: DrawPlan = PLAIN,
    first_path: int = 0,
    threads: int | None = None,
    lanes: int | None = None,
    progress: Progress | None = None,
    snapshots: Sequence[int] = (),
    notice: Notice | None = None,
) -> BlockSums:
    """Mean and spread of every output over paths first_path .. first_path + paths - 1.

    seed        0 .. 2^64 - 1; with it, the stream, the plan of draws and the path numbers every digit is fixed
    threads     None: all that the process may use; no digit depends on it, nor on `lanes`, a multiple of 64
    progress    called after each batch with the paths done and the mean and standard error of output 0
    snapshots   numbers of paths at which to note the sums; each is rounded up to a whole group of 64
    notice      called with a sentence if the kernels have to be compiled first

    Raises NonFinitePath for the first path with an output that is not finite, and KeyboardInterrupt if that
    comes before the first batch is done, and NonFiniteSum; later the sums so far are returned, marked as interrupted.
    """
    if paths < 1:
        raise ValueError(f"a run needs at least one path, not {paths}")
    code = prepare(program)
    reached: BlockSums | None = None  # replaced as a whole: an interruption cannot find it half made
    with _crew(code, seed, stream, threads, lanes, notice, plan) as crew:
        from mcx.machine.sums import Batches, Totals

        parts = Batches(code.sums, first_path // GROUP)
        totals = Totals(len(code.outputs), paths, snapshots)
        batch = batch_for(code, crew.lanes)
        try:
            for first in range(0, paths, batch):
                count = min(batch, paths - first)
                numbers = range(first_path + first, first_path + first + count)
                means, squares, bad, sums = crew.run(numbers)
                _refuse_bad(bad, numbers, code, seed, stream)
                _refuse_bad_sum(sums, numbers, seed, stream)
                totals.add(count, means, np.zeros_like(squares) if plan.strata else squares)
                parts.add(count, sums)
                noted = tuple(Snapshot(*reached_then) for reached_then in totals.noted)
                reached = BlockSums(totals.paths, totals.mean, totals.squares, noted, batch_paths=parts.paths.copy(),
                                    sums=parts.sums)
                if progress:
                    progress(reached.paths, float(reached.mean[0]), float(reached.standard_error[0]))
        except KeyboardInterrupt:
            if reached is None:
                raise
            return replace(reached, interrupted=reached.paths < paths)
    return reached


def run_scrambles(
    program: Program,
    *,
    seed: int,
    plan: DrawPlan,
    points: int,
    stream: int = Stream.MAIN,
    threads: int | None = None,
    lanes: int | None = None,
    progress: Progress | None = None,
    notice: Notice | None = None,
) -> ScrambleSums:
    """The mean of every output over the first `points` points, whole groups of 64, of each scramble of the plan.

    `progress` is called with the paths done, and the mean and standard error of output 0 over the scrambles that are
    whole, once there are two. The rest is as in `run`; after an interruption there is a result from two scrambles on.
    """
    if points < 1 or points % GROUP:
        raise ValueError(f"a scramble has whole groups of {GROUP} points, not {points}")
    code = prepare(program)
    paths = plan.scrambles * points
    whole: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []  # means, squares and sums of each whole scramble
    with _crew(code, seed, stream, threads, lanes, notice, plan) as crew:
        from mcx.machine.sums import Batches, Totals

        batch = batch_for(code, crew.lanes)
        totals, parts = Totals(len(code.outputs), points, ()), Batches(code.sums, 0)
        try:
            for first in range(0, paths, batch):
                numbers = _numbers(first, min(first + batch, paths), points)
                means, squares, bad, sums = crew.run(numbers)
                _refuse_bad(bad, numbers, code, seed, stream)
                _refuse_bad_sum(sums, numbers, seed, stream)
                done = 0
                while done < len(numbers):
                    count = min(points - totals.paths, len(numbers) - done)
                    groups = slice(done // GROUP, (done + count) // GROUP)
                    totals.add(count, means[groups], squares[groups])
                    parts.add(count, sums[groups])
                    done += count
                    if totals.paths == points:
                        whole.append((totals.mean, totals.squares, parts.sums.sum(axis=0)))
                        totals, parts = Totals(len(code.outputs), points, ()), Batches(code.sums, 0)
                if progress and len(whole) > 1:
                    prices = np.array([mean[0] for mean, *_ in whole])
                    error = prices.std(ddof=1) / np.sqrt(len(whole))
                    progress(first + len(numbers), float(prices.mean()), float(error))
        except KeyboardInterrupt:
            if len(whole) < 2:
                raise
    means, squares, sums = map(np.array, zip(*whole, strict=True))
    return ScrambleSums(points, means, squares, interrupted=len(whole) < plan.scrambles, sums=sums)


def _numbers(first: int, last: int, points: int) -> np.ndarray:
    """The path numbers of a part of a run over scrambles of so many points."""
    scrambles = range(first // points, -(-last // points))
    return np.concatenate([
        point_numbers(scramble, min(last - scramble * points, points) - start, start)
        for scramble in scrambles for start in [max(first - scramble * points, 0)]
    ])  # fmt: skip


def levels(
    program: Program,
    *,
    seed: int,
    numbers: Sequence[int] | np.ndarray,
    stream: int = Stream.MAIN,
    plan: DrawPlan = PLAIN,
    threads: int | None = None,
    lanes: int | None = None,
) -> np.ndarray:
    """All outputs of the given path numbers, each run as in the run it belongs to; shape (paths, outputs)."""
    code = prepare(program)
    numbers = np.array(numbers, dtype=np.uint64)
    values = np.empty((len(numbers), len(code.outputs)))
    with _crew(code, seed, stream, threads, lanes, plan=plan) as crew:
        crew.run(numbers, values)
    return values


def values_by_path(
    program: Program, *, seed: int, paths: int, stream: int = Stream.MAIN, plan: DrawPlan = PLAIN,
    threads: int | None = None,
) -> np.ndarray:  # fmt: skip
    """All outputs of the first paths, shape (outputs, paths)."""
    return levels(program, seed=seed, stream=stream, numbers=np.arange(paths), plan=plan, threads=threads).T


def draws(
    program: Program, *, seed: int, numbers: Sequence[int] | np.ndarray, stream: int = Stream.MAIN,
    plan: DrawPlan = PLAIN,
) -> np.ndarray:  # fmt: skip
    """What the paths draw, normals first, then uniforms; shape (paths, draws)."""
    nothing = Program(
        code=np.empty((0, 6), dtype=np.int32),
        scalars=np.empty(0),
        outputs=np.arange(program.draws, dtype=np.int32),
        normals=program.normals,
        uniforms=program.uniforms,
        rows=program.draws,
    )
    return levels(nothing, seed=seed, stream=stream, numbers=numbers, plan=plan)


def available_threads() -> int:
    """How many processors this process may run on."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def load_kernels(program: Program, notice: Notice | None = None) -> None:
    """Compiles the kernels or loads them, so that a clock that starts after it counts the time of paths alone.

    `notice` is called with a sentence if they have to be compiled.
    """
    with _crew(prepare(program), 0, Stream.MAIN, 1, None, notice) as crew:
        crew.load()


def _crew(code: KernelCode, seed: int, stream: int, threads: int | None, lanes: int | None,
          notice: Notice | None = None, plan: DrawPlan = PLAIN):
    """The crew of a run; numba is imported only now, and compiles only now."""
    from mcx.machine.jit import is_cold

    if notice and is_cold("sweep"):
        notice(COMPILING)
    from mcx.machine.blocks import Crew

    return Crew(code, seed, stream, threads or available_threads(), lanes, plan)


def _refuse_bad(bad: np.ndarray, numbers: range | np.ndarray, code: KernelCode, seed: int, stream: int) -> None:
    found = np.flatnonzero(bad >= 0)
    if len(found):
        path, output = divmod(int(bad[found[0]]), len(code.outputs))
        raise NonFinitePath(int(numbers[GROUP * int(found[0]) + path]), output, seed, stream)


def _refuse_bad_sum(sums: np.ndarray, numbers: range | np.ndarray, seed: int, stream: int) -> None:
    if not np.isfinite(sums).all():
        group, number = np.argwhere(~np.isfinite(sums))[0].tolist()
        raise NonFiniteSum(number, int(numbers[GROUP * group]), seed, stream)
