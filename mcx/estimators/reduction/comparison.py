"""Every applicable choice of methods on one contract, each for the same time or the same number of paths.

Only here does a clock have a say: it decides how many paths each choice gets, and what a path costs.
"""

from __future__ import annotations

import math
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from statistics import median

import numpy as np

from mcx.estimators.estimate import Estimate
from mcx.estimators.plan import FIRST_PILOT, Independent
from mcx.estimators.reduction.catalogue import scheme_of
from mcx.estimators.reduction.choice import CHOICES
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case, Scheme
from mcx.faults import Refusal
from mcx.machine.run import Stream

COMPARED = (*CHOICES, ("antithetic", "sobol-bridge"), ("hedge",), ("controls", "hedge"))
SHORTER = (64, 16, 4)  # shares of the run that the error is also noted at
REPEATED, PAIRS = 3, 5  # runs of those, of which the shortest counts; pairs of runs that costs are compared by
EXACT = 1e-12  # of the price: an error below is rounding


@dataclass(frozen=True, slots=True)
class Point:
    """What a run of so many paths took and found."""

    paths: int
    seconds: float
    standard_error: float


@dataclass(frozen=True, slots=True)
class Compared:
    """One choice: its estimate, the time it took, its variance for a path with that variance's own relative error, the
    processor time for a path over that of plain sampling, and shorter runs of it, the whole one last."""

    scheme: Scheme
    price: Estimate
    seconds: float
    doubt: float
    cost: float
    points: tuple[Point, ...]

    @property
    def variance(self) -> float:
        """Of the mean, times the paths."""
        return self.price.standard_error**2 * self.price.paths

    @property
    def exact(self) -> bool:
        return self.price.standard_error <= EXACT * abs(self.price.value)


@dataclass(frozen=True, slots=True)
class Comparison:
    """The choices that apply, plain sampling first, the names of the others with the reason, and those that an
    interruption left out."""

    found: tuple[Compared, ...]
    refused: tuple[tuple[str, str], ...]
    not_reached: tuple[str, ...] = ()


def compare(case: Case, seconds: float | None, paths: int | None) -> Comparison:
    """Every choice; after an interruption those that were whole by then. Raises KeyboardInterrupt where none was."""
    found, refused, fitted = [], [], {}
    plain = Sampler(scheme_of(case, ()), case.seed, case.threads, case.notice)
    plain.pilot(FIRST_PILOT)  # compiles, starts threads
    for number, names in enumerate(COMPARED):
        try:
            sampler = Sampler(scheme_of(case, names, fitted), case.seed, case.threads, case.notice)
            if paths is not None and paths < sampler.fewest:
                few = f"it takes {sampler.fewest:,} paths or more, and {paths:,} were asked for"
                refused.append((",".join(names), few))
            else:
                found.append(_run(sampler, plain, seconds, paths))
        except Refusal as reason:
            refused.append((",".join(names), str(reason).partition(", since ")[2]))
        except KeyboardInterrupt:
            if not found:
                raise
            return Comparison(tuple(found), tuple(refused), tuple(map(",".join, COMPARED[number:])))
    return Comparison(tuple(found), tuple(refused))


def _run(sampler: Sampler, plain: Sampler, seconds: float | None, paths: int | None) -> Compared:
    scheme = sampler.scheme
    if paths is None:
        paths = sampler.within_time(_paths_for(sampler, seconds))
    sizes = sorted({sampler.paths(max(paths // share, FIRST_PILOT // 4)) for share in SHORTER} | {sampler.paths(paths)})
    points = []
    for size in (size for size in sizes if size <= sampler.paths(paths)):
        taken = []
        for _ in range(1 if size == sampler.paths(paths) else REPEATED):
            begun = time.perf_counter()
            (price,) = sampler.pilot(size, stream=Stream.MAIN, first_output_only=True).results
            taken.append(time.perf_counter() - begun)
        points.append(Point(size, min(taken), price.standard_error))
    cost = _cost(sampler, plain, max(paths // SHORTER[1], FIRST_PILOT)) if scheme.names else 1.0
    return Compared(scheme, price, points[-1].seconds, _doubt(sampler.independent(FIRST_PILOT)), cost, tuple(points))


def _cost(sampler: Sampler, plain: Sampler, paths: int) -> float:
    """A path's processor time over that of a plain path: the median over pairs of runs, one after the other, so that what
    else the machine does meets both."""

    def each(one: Sampler) -> float:
        begun = time.process_time()
        (price,) = one.pilot(paths, first_output_only=True).results
        return (time.process_time() - begun) / price.paths

    return median(each(sampler) / each(plain) for _ in range(PAIRS))


def _paths_for(sampler: Sampler, seconds: float) -> int:
    """The paths that a time allows."""
    paths, taken = FIRST_PILOT, 0.0
    for _ in range(12):
        begun = time.perf_counter()
        sampler.pilot(paths, first_output_only=True)
        taken = time.perf_counter() - begun
        if taken > 0.1 * seconds:
            break
        paths *= 4
    return int(paths * min(seconds / max(taken, 1e-6), 16.0))


def _doubt(found: Independent) -> float:
    """The relative standard error of a variance: from the fourth moment of many means; by the chi-squared law for the
    means of a few scrambles."""
    values = found.values - found.values.mean()
    variance = float((values**2).mean())
    if len(values) < 100:
        return math.sqrt(2.0 / (len(values) - 1))
    if variance == 0.0:
        return 0.0
    return math.sqrt(max(float((values**4).mean()) / variance**2 - 1.0, 0.0) / len(values))


def closed_form(found: Sequence[Compared]) -> float | None:
    """The value where a choice is exact: its controls are the contract, and their mean is a closed form."""
    return next((each.price.value for each in found if each.exact), None)


def z_scores(found: Sequence[Compared]) -> Iterator[float]:
    """The distance of each estimate from all others pooled by their variances, in standard errors."""
    values = np.array([each.price.value for each in found])
    least = EXACT * np.maximum(np.abs(values), 1e-120)
    weights = 1.0 / np.maximum([each.price.standard_error for each in found], least) ** 2
    for number, each in enumerate(found):
        others = np.arange(len(found)) != number
        if not others.any():
            yield 0.0
            continue
        pooled = float((values * weights)[others].sum() / weights[others].sum())
        error = math.sqrt(max(each.price.standard_error, least[number]) ** 2 + 1.0 / float(weights[others].sum()))
        yield (each.price.value - pooled) / error
