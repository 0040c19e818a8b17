"""Drives the kernel over blocks of paths, on several threads, and sums what comes out.

Sums are taken over fixed groups of 64 paths by a tree of pairs; `sums.py` merges them in order of path
number. So no digit depends on how many lanes a block has, which thread ran it, or where a batch ended.

The threads are Python's: the kernel runs without the GIL, a thread that is busy with something else takes
fewer pieces of a batch, and nothing is shared that a second run in the same process, or a fork, could upset.
"""

from __future__ import annotations

from collections import deque
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from mcx.machine.draw_plan import PLAIN, SCRAMBLE_BITS, DrawPlan
from mcx.machine.draws import drawing_of, fill_draws
from mcx.machine.forward import forward
from mcx.machine.jit import jit
from mcx.machine.prepare import KernelCode
from mcx.machine.rows import wide_vectors
from mcx.machine.sizes import GROUP, lanes_for

_TASKS = 16  # pieces of a batch for each thread: a core that is busy with something else takes fewer
_CACHE_LINE = 8  # float64


@jit
def sweep(code, scalars, outputs, drawing, numbers, paths, registers, words, runs,
          means, squares, bad, sums, values):  # fmt: skip
    """Run whole blocks of paths and sum each output, and what the code sums, over each group of 64.

    numbers    (blocks * lanes,) uint64: path numbers, of which the first `paths` count
    drawing    see `Drawing`
    registers  (rows + 1, more than lanes) float64, words (4, lanes) int32 and runs (lanes / 64,) int64: to work in
    means      (groups, outputs), written: the mean over each group
    squares    (groups, outputs), written: the sum of squares about that mean
    bad        (groups,) int64, written: path * outputs + output of the first value that is not finite, with
               the path counted from the group's first; -1 if there is none
    sums       (groups up to the end of a block, sums), written: what the code sums
    values     (paths, outputs), written; or (0, outputs)
    """
    lanes, width = words.shape[1], outputs.shape[0]
    tree = registers[registers.shape[0] - 1]
    for first in range(0, paths, lanes):
        fill_draws(registers, words, runs, numbers[first : first + lanes], drawing)
        here = min(lanes, paths - first)
        forward(registers, code, scalars, lanes, here, sums[first // GROUP : (first + lanes) // GROUP])
        for start in range(0, here, GROUP):
            group, count = (first + start) // GROUP, min(GROUP, here - start)
            finite = True
            for k in range(width):
                x = registers[outputs[k]][start : start + GROUP]
                mean = _tree_sum(tree, x, 0.0, False, count) / count
                means[group, k] = mean
                squares[group, k] = _tree_sum(tree, x, mean, True, count)
                finite &= squares[group, k] < np.inf
            bad[group] = -1 if finite else _first_bad(registers, outputs, start, count)
        if values.shape[0] > 0:
            for k in range(width):
                x = registers[outputs[k]]
                for i in range(here):
                    values[first + i, k] = x[i]


@jit
def _tree_sum(tree, x, centre, squared, count):
    """The sum over the first `count` of 64 lanes of x - centre, or of its square, pair by pair, then pairs of
    pairs: the tree fixes the order of the additions and still fills vector registers."""
    wide_vectors()
    for i in range(32):
        a, b = x[i] - centre, x[i + 32] - centre
        a, b = a * a if squared else a, b * b if squared else b
        tree[i] = (a if i < count else 0.0) + (b if i + 32 < count else 0.0)
    for i in range(16):
        tree[i] += tree[i + 16]
    for i in range(8):
        tree[i] += tree[i + 8]
    for i in range(4):
        tree[i] += tree[i + 4]
    return (tree[0] + tree[2]) + (tree[1] + tree[3])


@jit
def _first_bad(registers, outputs, start, count):
    for i in range(count):
        for k in range(outputs.shape[0]):
            if not abs(registers[outputs[k], start + i]) < np.inf:
                return i * outputs.shape[0] + k
    return -1  # all finite: only the sum of squares overflowed


def _numbered(numbers: range | np.ndarray, first: int, end: int) -> np.ndarray:
    """Numbers first .. end - 1 as an array; for those past the last others serve. Each thread makes its own of a range:
    one array for all threads would take new pages of memory, which costs them 3 % of their time."""
    part = numbers[first:end]
    if isinstance(part, range):
        part = np.arange(part.start, part.stop, dtype=np.uint64)
    return part if len(part) == end - first else np.resize(part, end - first)


class Crew:
    """Threads, each with room to work, that run one kernel code; a context manager, for one caller."""

    def __init__(self, code: KernelCode, seed: int, stream: int, threads: int, lanes: int | None = None,
                 plan: DrawPlan = PLAIN):
        self.code = code
        self.lanes = lanes or lanes_for(code.rows)
        self.threads = threads
        self._scrambles = plan.scrambles
        self._drawing = drawing_of(plan, code.normals, code.uniforms, seed, stream)
        self._rooms = deque(self._room() for _ in range(threads))
        self._pool = ThreadPoolExecutor(threads) if threads > 1 else None

    def __enter__(self) -> Crew:
        return self

    def __exit__(self, *error: object) -> None:
        if self._pool:
            self._pool.shutdown()

    def run(
        self, numbers: range | np.ndarray, values: np.ndarray | None = None
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Means, squares, first bad value and sums of each group of the given path numbers, as `sweep` writes them.

        numbers a range upwards, or (paths,) uint64; values (paths, outputs) float64 is filled if given. Raises
        ValueError for a path that is no point of the plan's scrambles.
        """
        last = numbers[-1] if isinstance(numbers, range) else numbers.max(initial=0)
        if self._scrambles and int(last) >> SCRAMBLE_BITS >= self._scrambles:
            raise ValueError(f"path {last} is in none of {self._scrambles} scrambles")
        paths, outputs = len(numbers), len(self.code.outputs)
        groups, blocks = -(-paths // GROUP), -(-paths // self.lanes)
        means, squares = np.empty((groups, outputs)), np.empty((groups, outputs))
        bad = np.empty(groups, dtype=np.int64)
        sums = np.empty((blocks * self.lanes // GROUP, self.code.sums))
        pieces = min(blocks, self.threads * _TASKS) if self._pool else 1
        bounds = [blocks * piece // pieces * self.lanes for piece in range(pieces + 1)]

        def work(piece: int) -> None:
            first, end = bounds[piece : piece + 2]
            last = min(end, paths)
            these = slice(first // GROUP, -(-last // GROUP))
            written = np.empty((0, outputs)) if values is None else values[first:last]
            room = self._rooms.pop()
            sweep(self.code.code, self.code.scalars, self.code.outputs, self._drawing,
                  _numbered(numbers, first, end), last - first, *room,
                  means[these], squares[these], bad[these], sums[first // GROUP :], written)  # fmt: skip
            self._rooms.append(room)

        for _ in self._pool.map(work, range(pieces)) if self._pool else map(work, range(pieces)):
            pass
        return means, squares, bad, sums[:groups]

    def load(self) -> None:
        """Compiles the kernel, or loads what is compiled, by a run over no paths."""
        outputs = len(self.code.outputs)
        means, squares, sums = (np.empty((0, width)) for width in (outputs, outputs, self.code.sums))
        sweep(self.code.code, self.code.scalars, self.code.outputs, self._drawing, _numbered(range(0), 0, 0), 0,
              *self._rooms[0], means, squares, np.empty(0, dtype=np.int64), sums, np.empty((0, outputs)))  # fmt: skip

    def _room(self) -> tuple[np.ndarray, ...]:
        """Registers, random words and what else one thread works in.

        Rows begin on cache lines, and are one line longer than the lanes: with 512 lanes the same lane of all rows
        would else compete for the same few places of the cache.
        """
        stride = self.lanes + _CACHE_LINE
        raw = np.empty((self.code.rows + 1) * stride + _CACHE_LINE)
        start = -raw.ctypes.data // 8 % _CACHE_LINE
        registers = raw[start : start + (self.code.rows + 1) * stride].reshape(-1, stride)
        return registers, np.empty((4, self.lanes), dtype=np.int32), np.empty(self.lanes // GROUP, dtype=np.int64)
