"""Running totals of a run: groups of 64 paths merged in order, with what rounding lost carried along."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from mcx.machine.jit import jit
from mcx.machine.sizes import BATCHES, GROUP


@jit
def merge(totals, done, paths, means, squares):
    """Merge groups into running totals, in order: means and squares, each (groups, outputs), of `paths`
    paths.

    totals (outputs, 4) float64: the mean and what its additions lost, the sum of squares about it and what
    its additions lost (A. Neumaier, 1974). `done` paths are in them already. The rule for joining two
    samples: T. Chan, G. Golub, R. LeVeque, "Updating formulae and a pairwise algorithm for computing sample
    variances" (1979).
    """
    for group in range(means.shape[0]):
        count = min(GROUP, paths - group * GROUP)
        share = count / (done + count)
        for k in range(means.shape[1]):
            delta = (means[group, k] - totals[k, 0]) - totals[k, 1]
            _add(totals[k], 0, delta * share)
            _add(totals[k], 2, squares[group, k])
            _add(totals[k], 2, delta * delta * share * done)
        done += count


@jit
def _add(pair, at, term):
    """Add to pair[at], and what rounding loses to pair[at + 1]."""
    total = pair[at] + term
    if abs(pair[at]) >= abs(term):
        pair[at + 1] += (pair[at] - total) + term
    else:
        pair[at + 1] += (term - total) + pair[at]
    pair[at] = total


@jit
def merge_batches(totals, first, sums):
    """Add the sums of groups first, first + 1, ... to their batches, in order.

    totals (BATCHES, 2, sums) float64: each sum and what its additions lost; sums (groups, sums) float64.
    """
    for group in range(sums.shape[0]):
        total, lost = totals[(first + group) % BATCHES]
        for k in range(sums.shape[1]):
            term, before = sums[group, k], total[k]
            after = before + term
            larger, smaller = (before, term) if abs(before) >= abs(term) else (term, before)
            lost[k] += (larger - after) + smaller
            total[k] = after


class Batches:
    """What the code sums, over each of 64 fixed parts of the run: from their spread comes the error of whatever is
    made of the sums afterwards."""

    def __init__(self, sums: int, first_group: int):
        self.paths = np.zeros(BATCHES, dtype=np.int64)
        self._group = first_group
        self._totals = np.zeros((BATCHES, 2, sums))

    @property
    def sums(self) -> np.ndarray:
        """(BATCHES, sums)"""
        return self._totals.sum(axis=1)

    def add(self, paths: int, sums: np.ndarray) -> None:
        """The next paths as groups; all but the last call of a run bring whole groups."""
        counts = np.full(len(sums), GROUP)
        counts[-1] = paths - GROUP * (len(sums) - 1)
        np.add.at(self.paths, (self._group + np.arange(len(sums))) % BATCHES, counts)
        merge_batches(self._totals, self._group, sums)
        self._group += len(sums)


class Totals:
    """Means and sums of squares of all outputs so far, and as they were at the numbers of paths asked for.

    A number of paths that is no whole number of groups is rounded up to the next, the last group excepted.
    """

    def __init__(self, outputs: int, paths: int, at: Iterable[int]):
        self.paths = 0
        self.noted: list[tuple[int, np.ndarray, np.ndarray]] = []  # paths, means, sums of squares
        self._sums = np.zeros((outputs, 4))
        self._at = sorted(min(-(-number // GROUP) * GROUP, paths) for number in at)

    @property
    def mean(self) -> np.ndarray:
        return self._sums[:, 0] + self._sums[:, 1]

    @property
    def squares(self) -> np.ndarray:
        return self._sums[:, 2] + self._sums[:, 3]

    def add(self, paths: int, means: np.ndarray, squares: np.ndarray) -> None:
        """The next paths, as groups; all but the last call of a run bring whole groups."""
        end = self.paths + paths
        while self._at and self._at[0] <= end:
            here = self._at.pop(0)
            used = -(-(here - self.paths) // GROUP)
            self._merge(here - self.paths, means[:used], squares[:used])
            means, squares = means[used:], squares[used:]
            self.noted.append((self.paths, self.mean, self.squares))
        self._merge(end - self.paths, means, squares)

    def _merge(self, paths: int, means: np.ndarray, squares: np.ndarray) -> None:
        merge(self._sums, self.paths, paths, means, squares)
        self.paths += paths
