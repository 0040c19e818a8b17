"""All places at which a price on common random numbers meets a target, each with its error and a confirmation.

A scan on the first paths finds where the sign changes, and pairs of solutions that lie between two of its points; each
is then found again on all paths, bracketed (R. Brent, "Algorithms for minimization without derivatives", 1973). The
error of a solution is that of the price there, over the slope; fresh numbers confirm it.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import brentq, minimize_scalar

from mcx.estimators.batches import Sampling
from mcx.estimators.estimate import Estimate
from mcx.machine.run import Stream

POINTS = 16  # steps of the scan
SCANNED = 1 << 16  # paths of the scan
SAME = 1e-6  # of the range: one solution found twice
CLOSE, NEAR = 1e-10, 1e-4  # of the range: where a solution is found well enough, on all paths and on the first ones
OF_ERROR = 3e-4  # or this share of its error: a price with jumps has no closer solution
DOUBT = 4.0  # errors of the first paths within which a turn may cross 0 on all of them
STEP = 1.0 / 100.0  # of the range: half the distance over which a slope is taken

Distance = Callable[[float, Sampling], Estimate]  # price less target at a move


@dataclass(frozen=True, slots=True)
class Solution:
    """Where the price meets its target. `error` is in the unit of the move, `slope` price per move; `fresh` is the
    distance from the target on numbers that were not used to find it, and `z` that in errors of both."""

    move: float
    error: float
    slope: float
    fresh: Estimate
    z: float


@dataclass(frozen=True, slots=True)
class Solutions:
    """All solutions between two moves, in order. `moves_price` is False where the price does not depend on the move."""

    found: tuple[Solution, ...]
    low: float
    high: float
    moves_price: bool = True


class _Points:
    """Distances at moves, each computed once; NaN where there is no such market."""

    def __init__(self, distance: Distance, possible: Callable[[float], bool], sampling: Sampling):
        self._distance, self._possible, self.sampling = distance, possible, sampling
        self._known: dict[float, Estimate | None] = {}

    def estimate(self, move: float) -> Estimate | None:
        move = float(move)
        if move not in self._known:
            self._known[move] = self._distance(move, self.sampling) if self._possible(move) else None
        return self._known[move]

    def __call__(self, move: float) -> float:
        found = self.estimate(move)
        return math.nan if found is None else found.value


def solutions(
    distance: Distance, low: float, high: float, sampling: Sampling, possible: Callable[[float], bool] = lambda _: True,
) -> Solutions:
    """Every move from `low` to `high` at which the distance is 0. 0 lies between them and is possible; `possible` is
    cheap, and what it allows is an interval."""
    low, high = (_edge(possible, end) for end in (low, high))
    first = _Points(distance, possible, replace(sampling, paths=min(sampling.paths, SCANNED)))
    whole = _Points(distance, possible, sampling) if sampling.paths > SCANNED else first
    grid = np.unique([*np.linspace(low, high, POINTS + 1), 0.0])
    values = np.array([first(move) for move in grid])
    if np.ptp(values) == 0.0:
        return Solutions((), low, high, moves_price=False)
    found = []
    for left, right in (*_brackets(grid, values, first, whole), *_at_the_ends(grid, values, first, whole)):
        root = _refined((left, right), (low, high), first, whole)
        if root is not None and all(abs(root[0] - other.move) > SAME * (high - low) for other in found):
            found.append(_solution(*root, distance, whole))
    return Solutions(tuple(sorted(found, key=lambda each: each.move)), low, high)


def _edge(possible: Callable[[float], bool], end: float) -> float:
    """The last possible move on the way from 0 to `end`."""
    if possible(end):
        return end
    inside, outside = 0.0, end
    for _ in range(40):
        middle = 0.5 * (inside + outside)
        inside, outside = (middle, outside) if possible(middle) else (inside, middle)
    return inside


def _brackets(grid: np.ndarray, values: np.ndarray, at: _Points, whole: _Points) -> Iterator[tuple[float, float]]:
    """Stretches at whose ends the distance has different signs, in order; a zero belongs to the one that ends in it."""
    for number in range(len(grid) - 1):
        left, right = values[number], values[number + 1]
        if left * right < 0.0 or right == 0.0 or (number == 0 and left == 0.0):
            yield float(grid[number]), float(grid[number + 1])
        before, after = values[max(number - 1, 0)], values[min(number + 1, len(values) - 1)]
        inner = 0 < number and abs(left) <= min(abs(before), abs(after)) and min(before * left, left * after) > 0.0
        if inner:  # it turns here: it may have crossed 0 and come back
            sign = math.copysign(1.0, left)
            turn = minimize_scalar(lambda move, s=sign: s * at(move), bounds=(grid[number - 1], grid[number + 1]),
                                   method="bounded", options={"maxiter": 12})
            near = turn.fun < DOUBT * at.estimate(turn.x).standard_error
            if turn.fun < 0.0 or near and sign * whole(turn.x) < 0.0:
                yield float(grid[number - 1]), float(turn.x)
                yield float(turn.x), float(grid[number + 1])


def _at_the_ends(
    grid: np.ndarray, values: np.ndarray, at: _Points, whole: _Points
) -> Iterator[tuple[float, float]]:
    """The outermost stretches where only all paths see the sign change before the range ends."""
    for end, next_to_it in ((0, 1), (-1, -2)):
        near = abs(values[end]) < DOUBT * at.estimate(grid[end]).standard_error
        if near and values[end] * values[next_to_it] > 0.0 and values[end] * whole(grid[end]) < 0.0:
            yield tuple(sorted((float(grid[end]), float(grid[next_to_it]))))


def _refined(
    stretch: tuple[float, float], ends_of_all: tuple[float, float], first: _Points, whole: _Points
) -> tuple[float, float] | None:
    """The solution on all paths near a stretch where the first ones have one, and the slope there on the first ones;
    None where all paths have no solution. It is looked for within a few errors of the first paths' one, then in the
    whole stretch, and then beyond, since more paths may have moved it out."""
    (left, right), span = stretch, ends_of_all[1] - ends_of_all[0]
    ends = first(left), first(right)
    near = brentq(first, left, right, xtol=NEAR * span) if ends[0] * ends[1] < 0.0 else \
        left if ends[0] == 0.0 else right if ends[1] == 0.0 else 0.5 * (left + right)
    slope = _slope(first, near, span)
    reach = DOUBT * first.estimate(near).standard_error / abs(slope) if slope else span
    reach, last = max(reach, 2.0 * NEAR * span), False
    within = stretch
    while not last:
        a, b = max(near - reach, within[0]), min(near + reach, within[1])
        if whole(a) * whole(b) <= 0.0:
            if a == b:
                return a, slope
            rise = abs(whole(b) - whole(a))
            error = whole.estimate(a).standard_error * (b - a) / rise if rise else 0.0
            move = float(brentq(whole, a, b, xtol=max(CLOSE * span, OF_ERROR * error), rtol=1e-14))
            return move, _slope(first, move, span)
        last, reach = (a, b) == ends_of_all, 3.0 * reach
        if within is stretch and (a, b) == stretch:
            within, reach = ends_of_all, right - left
    return None


def _slope(at: _Points, move: float, span: float) -> float:
    """The slope over a stretch that is long enough to smooth the steps of a price with jumps."""
    up, down = (move + side * STEP * span for side in (1.0, -1.0))
    up, down = (end if at.estimate(end) is not None else move for end in (up, down))
    return (at(up) - at(down)) / (up - down) if up > down else 0.0


def _solution(move: float, slope: float, distance: Distance, whole: _Points) -> Solution:
    here = whole.estimate(move)
    fresh = distance(move, replace(whole.sampling, stream=Stream.FRESH))
    both = math.hypot(here.standard_error, fresh.standard_error)
    z = (fresh.value - here.value) / both if both > 0.0 else 0.0
    return Solution(move, abs(here.standard_error / slope) if slope else math.inf, slope, fresh, z)
