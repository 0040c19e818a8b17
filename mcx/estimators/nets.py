"""Randomised quasi-Monte Carlo: Sobol' points, scrambled several times over, in the order of a path.

Each scramble alone is an unbiased estimate, and they are independent, so the error is read off their spread, with
Student's t for so few. A scramble has a power of two of points, the first one included: only then is each coordinate,
and each pair of them, spread as evenly as the points are meant to be (A. Owen, "On dropping the first Sobol' point",
2022).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from enum import Enum

import numpy as np

from mcx.estimators.estimate import Estimate
from mcx.faults import RequestError
from mcx.leaves.market_map import MarketMap
from mcx.machine.draw_plan import MOST_POINTS, DrawPlan
from mcx.machine.orders import bridge, components, early_bridge
from mcx.machine.run import Notice, ScrambleSums, Stream, run_scrambles
from mcx.tape.program import Leaf, LeafKind, Program, Tape
from mcx.tape.steps import Grid

# Means of smooth payoffs over a net are skewed, with an excess kurtosis of 3 and more (a point far out decides them):
# t intervals of 16 scrambles cover 92.5 % then, of 32 scrambles 94 %. More would leave each too few points.
SCRAMBLES = 32
FEWEST_POINTS = 64
SAME = 1e-5  # of one path's share in a mean: means closer than that are one


class Order(Enum):
    """What the first coordinates of a point decide."""

    STEPS = "the steps of the path, in order"
    BRIDGE = "its end, then the middles of what is still open"
    COMPONENTS = "its leading principal components, then as the bridge"


@dataclass(frozen=True, slots=True)
class Net:
    """`scrambles` independent scrambles of `points` points, a power of two."""

    points: int
    scrambles: int = SCRAMBLES

    @property
    def paths(self) -> int:
        return self.points * self.scrambles


def net_for(paths: int, scrambles: int = SCRAMBLES) -> Net:
    """The smallest net of at least so many paths; raises RequestError where a net cannot have that few or many."""
    fewest, most = scrambles * FEWEST_POINTS, scrambles * MOST_POINTS
    if not fewest <= paths <= most:
        raise RequestError(f"scrambled points are from {fewest:,} paths ({scrambles} scrambles of {FEWEST_POINTS} points) "
                           f"to {most:,}, not {paths:,}")
    return Net(1 << (-(-paths // scrambles) - 1).bit_length(), scrambles)


def clock(market: MarketMap, grid: Grid) -> np.ndarray:
    """The variance of each simulated asset's log over each step of the grid, shape (steps, assets)."""
    leaves = [Leaf(LeafKind.VARIANCE, asset, start=start, end=end)
              for start, end in zip(grid.times, grid.times[1:]) for asset in grid.assets]
    return market.values(leaves).reshape(len(grid.times) - 1, len(grid.assets))


def moves(market: MarketMap, grid: Grid) -> np.ndarray:
    """What each step's normals do to the logs of what is simulated, shape (steps, assets, assets)."""
    steps, assets = len(grid.times) - 1, len(grid.assets)
    where = [(step, row, column) for step in range(steps) for row in range(assets) for column in range(row + 1)]
    leaves = [Leaf(LeafKind.FACTOR, grid.assets[row], grid.assets[column], grid.times[step], grid.times[step + 1])
              for step, row, column in where]
    found = np.zeros((steps, assets, assets))
    found[tuple(np.transpose(where))] = market.values(leaves)
    return found


def may_end(observed: Tape) -> bool:
    """Whether a contract, as the tape that reads its levels, may end on one of its dates."""
    return any(output.kind == "end" for output in observed.outputs)


def net_draws(net: Net, order: Order, market: MarketMap, grid: Grid, early: bool = False) -> DrawPlan:
    """The plan of draws for a net on a contract with this grid; `early`: a bridge has the early dates early, as a
    contract that may end on them wants it."""
    if order is Order.STEPS or len(grid.times) < 2 or not grid.assets:
        return DrawPlan(net.scrambles)
    if order is Order.COMPONENTS:
        return DrawPlan(net.scrambles, order=components(moves(market, grid)))
    return DrawPlan(net.scrambles, order=(early_bridge if early else bridge)(clock(market, grid)))


def on_net(
    program: Program,
    net: Net,
    plan: DrawPlan,
    *,
    seed: int,
    stream: int = Stream.MAIN,
    threads: int | None = None,
    progress: Callable[[int, float, float], None] | None = None,
    notice: Notice | None = None,
) -> ScrambleSums:
    """A program run over a net. Raises NonFinitePath, RequestError for more draws than a point has coordinates, and
    KeyboardInterrupt where that comes before two scrambles are whole."""
    from mcx.machine.directions import most_coordinates

    if program.draws > most_coordinates():
        raise RequestError(f"the contract draws {program.draws:,} numbers for a path, and scrambled points have at most "
                           f"{most_coordinates():,} coordinates; take another reduction, or none")
    return run_scrambles(program, seed=seed, plan=plan, points=net.points, stream=stream, threads=threads,
                         progress=progress, notice=notice)


def net_estimates(sums: ScrambleSums, scrambles: int | None = None) -> tuple[Estimate, ...]:
    """The estimate of each output from the scrambles of a run, or the first of them; at least two."""
    from scipy.special import stdtrit

    means, squares = sums.means[:scrambles], sums.squares[:scrambles]
    count, outputs = means.shape
    quantile = float(stdtrit(count - 1, 0.975))
    spread = np.sqrt(squares.mean(axis=0) / sums.points)
    return tuple(
        Estimate(float(means[:, k].mean()), _deviation(means[:, k], spread[k] / sums.points) / math.sqrt(count),
                 count * sums.points, quantile)
        for k in range(outputs)
    )  # fmt: skip


def _deviation(means: np.ndarray, part: float) -> float:
    """The standard deviation of a scramble's mean."""
    return max(float(means.std(ddof=1)), least_deviation(means, part))


def least_deviation(means: np.ndarray, part: float) -> float:
    """What the standard deviation of a scramble's mean is at least, from the means of all (parts,), where most of them
    agree; else 0. `part`: the deviation of one path, over the points.

    Points so even that nearly every scramble has as many on each side of a jump give means that are equal, but for a
    few: their spread alone would promise an exact result where none happened to differ. Then it is that of a
    proportion with two more of either kind (A. Agresti, B. Coull, "Approximate is better than 'exact' for interval
    estimation of binomial proportions", The American Statistician 52 (1998), 119-126), times the jump.
    """
    middle = np.sort(means)[len(means) // 2]
    odd = int(np.sum(np.abs(means - middle) > SAME * part))
    if part == 0.0 or 2 * odd > len(means):
        return 0.0
    jump = max(2.0 * part, float(np.ptp(means)))
    share = (odd + 2) / (len(means) + 4)
    return jump * math.sqrt(share * (1.0 - share))
