"""What each method of variance reduction saves on the contracts it is meant for, what an antithetic pair costs, and
whether the choice of methods is ever slower than plain sampling.

Variance at equal paths against plain sampling: the mean squared error of 64 replicates, each with coefficients of its own
seed, against the variance of plain paths (by formula where plain paths see next to nothing); errors by the chi-squared
law. The goals for scrambled points are in `points.py`.

    python benchmarks/reduction.py          # goals and the pair
    python benchmarks/reduction.py --auto   # and every shipped example: the choice against plain sampling
"""

from __future__ import annotations

import math
import sys
import time
from dataclasses import replace
from pathlib import Path
from statistics import mean, median

import numpy as np
from points import ready_of
from scipy.special import ndtr

from mcx.checked.load import load
from mcx.dates.dating import date_on
from mcx.estimators.estimate import NORMAL_95, Estimate
from mcx.estimators.plan import precision
from mcx.estimators.ready import Ready, prepare
from mcx.estimators.reduction.catalogue import scheme_of
from mcx.estimators.reduction.choice import best
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case, Scheme
from mcx.machine.run import run

REPLICATES, PATHS, ROUNDS = 64, 1 << 14, 15
LONG, TIMED = 1.5, 0.1  # seconds of plain sampling that the choice is measured at, and of a run that is timed
FEWEST, SEEDS = 1 << 11, 4
MARKET = """---
market: 0y
rates: {EUR: 3%}
funding: {EUR: 0 bp}
assets: {harbour: {spot: 100, currency: EUR, yield: 0%, vol: VOL%}}
"""
UNIT = "contract: goal\ncurrency: EUR\nunits: 1\nassets: [harbour]\n"
ASIAN = UNIT + """payoff: asian
terms:
  side: call
  average_type: arithmetic
  strike_type: fixed
  strike: 100
  averaging: {count: 52, until: 1y}
  expiry: 1y
"""
PROTECTION = """contract: goal
currency: EUR
notional: 1
assets: [harbour]
payoff: capital_protection
terms:
  initial: 100
  weights: {harbour: 1}
  averaging: {from: 4y, count: 12, until: 5y}
  protection: 100%
  participation: 80%
  strike: 100%
"""
BARRIER = UNIT + """payoff: barrier
terms:
  side: call
  direction: down
  knock: out
  strike: 100
  barrier: 90
  watched: {count: 50, until: 1y}
  expiry: 1y
"""
CALL = UNIT + "payoff: european\nterms: {side: call, strike: STRIKE, expiry: 1y}\n"
GOALS = (
    ("arithmetic average, 52 dates, vol 20 %", ASIAN, 20, ("controls",), 1_000),
    ("protection and 80 % of an average over 13 dates", PROTECTION, 22, ("controls",), 5_000),
    ("the same with a cap of 50 %", PROTECTION + "  cap: 150%\n", 22, ("controls",), 2_000),
    ("down-and-out call, 50 dates, vol 25 %", BARRIER, 25, ("controls",), 30),
    ("call at the money, levels over forwards alone", CALL.replace("STRIKE", "100"), 20, ("hedge",), 5),
    ("call 5 deviations out of the money", CALL.replace("STRIKE", f"{100 * math.exp(0.01 + 5 * 0.2):.6f}"), 20,
     ("importance",), 100_000),
)


def main() -> None:
    print(f"{'contract':50} {'method':12} {'goal':>8} {'variance ratio':>16} {'+-':>9} {'time':>6}")
    for title, text, vol, names, goal in GOALS:
        ready = ready_of(text + MARKET.replace("VOL", str(vol)), title)
        ratio, cost = ratios(ready, names, far_call_variance(title, vol))
        print(f"{title:50} {','.join(names):12} {goal:8,} {ratio:16,.0f} {ratio * math.sqrt(2 / (REPLICATES - 1)):9,.0f} "
              f"{cost:6.2f}")
    ready = ready_of(ASIAN + MARKET.replace("VOL", "20"), "asian")
    print(f"a pair costs {2.0 * path_time(ready, ('antithetic',)):.2f} paths of the average; "
          f"goal 1.4")
    if "--auto" in sys.argv:
        choices()


def far_call_variance(title: str, vol: int) -> float | None:
    """The variance of a plain path of the far call, by the lognormal law; None for other contracts."""
    if "5 deviations" not in title:
        return None
    s, forward = vol / 100.0, 100.0 * math.exp(0.03)
    strike = 100.0 * math.exp(0.01 + 5 * 0.2)
    d = (math.log(forward / strike) - 0.5 * s * s) / s
    square = (forward**2 * math.exp(s * s) * ndtr(d + 2 * s) - 2 * strike * forward * ndtr(d + s) + strike**2 * ndtr(d))
    return math.exp(-0.06) * (square - (forward * ndtr(d + s) - strike * ndtr(d)) ** 2)


def ratios(ready: Ready, names: tuple[str, ...], plain: float | None) -> tuple[float, float]:
    """Plain variance over that of the method, and its time for a path over plain sampling's."""
    if plain is None:
        plain = float(run(replace(ready.program, outputs=ready.program.outputs[:1]), seed=1, paths=1 << 20).variance[0])
    means = []
    for seed in range(1, REPLICATES + 1):
        sampler = Sampler(scheme_of(Case(ready, seed), names), seed)
        means.append(sampler.sample(PATHS, first_output_only=True).results[0].value)
    return plain / (PATHS * float(np.var(means, ddof=1))), path_time(ready, names)


def path_time(ready: Ready, names: tuple[str, ...]) -> float:
    """Processor time of a path of the contract's price over that of a plain path, on one thread: the median over pairs
    of runs one after the other."""
    methods, plain = (Sampler(scheme_of(Case(ready, 1), each), 1, threads=1) for each in (names, ()))
    return median(_each(methods, 1 << 18)[0] / _each(plain, 1 << 18)[0] for _ in range(ROUNDS))


def _each(sampler: Sampler, paths: int) -> tuple[float, Estimate]:
    """Processor time of a path of the price, and its estimate."""
    begun = time.thread_time()
    (found,) = sampler.sample(paths, first_output_only=True).results
    return (time.thread_time() - begun) / found.paths, found


def choices() -> None:
    """For every shipped example the time of the choice, its pilot included, to the error that plain sampling reaches in
    some seconds, over those seconds; on one thread, and in processor time. The kernels are compiled before."""
    print(f"{'example':60} {'plain s':>7} {'choice':26} {'pilot s':>8} {'time over plain':>16}")
    worst = 0.0
    for file in sorted((Path(__file__).resolve().parents[1] / "payoffs" / "examples").glob("*.yaml")):
        request = load([file, *sorted(file.parent.glob(f"{file.stem}*.csv"))])
        for contract in request.contracts:
            ready, _ = prepare(date_on(contract, request.market)[0], request.market)
            title = contract.title if len(contract.title) < 60 else contract.title[:57] + "..."
            plain = Sampler(scheme_of(Case(ready, 1, 1), ()), 1, threads=1)
            _each(plain, FEWEST)
            paths = int(max(TIMED / _each(plain, 1 << 14)[0], FEWEST))
            seconds, found = _each(plain, paths)
            error, wanted = found.standard_error, int(LONG / seconds)
            target = error * math.sqrt(found.paths / wanted)
            case, taken = Case(ready, 1, 1), []
            for _ in range(3):
                begun = time.process_time()
                scheme = best(case, precision(wanted, None, None))
                taken.append(time.process_time() - begun)
            pilot = median(taken)
            ratio = 1.0 if not scheme.names else _time_to(scheme, target, plain, paths) / LONG
            worst = max(worst, pilot / LONG + ratio)
            print(f"{title:60} {LONG:7.1f} {scheme.label:26} {pilot:8.3f} {pilot / LONG + ratio:16.4f}", flush=True)
    print(f"the worst: {worst:.3f}; goal 1.1")


def _time_to(scheme: Scheme, target: float, plain: Sampler, paths: int) -> float:
    """Seconds until a scheme's error is the target: in runs of growing numbers of paths until it is or they take as long
    as a run of plain paths, and on from there as plain errors shrink. Times are those of plain sampling's long run, times
    ratios of pairs."""
    sampler, size = Sampler(scheme, 1, threads=1), FEWEST
    while True:
        found = [_each(replace(sampler, seed=seed), size)[1] for seed in range(1, SEEDS + 1)]
        square = mean(one.standard_error**2 * (one.quantile / NORMAL_95) ** 2 for one in found)
        if square <= target**2 or 4 * size > paths:
            break
        size *= 4
    pairs = [(_each(sampler, size)[0], _each(plain, size)[0]) for _ in range(5)]
    ratio = median(one / other for one, other in pairs)
    return found[0].paths * square / target**2 * ratio * median(_each(plain, paths)[0] for _ in range(3))


if __name__ == "__main__":
    main()
