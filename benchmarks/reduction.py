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

import numpy as np
from points import ready_of
from scipy.special import ndtr

from mcx.checked.load import load
from mcx.dates.dating import date_contract
from mcx.estimators.ready import Ready, prepare
from mcx.estimators.reduction.catalogue import scheme_of
from mcx.estimators.reduction.choice import best
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case
from mcx.machine.run import run

REPLICATES, PATHS, ROUNDS = 64, 1 << 14, 15
PLAIN_PATHS, LONG = 1 << 20, 2.0  # seconds of plain sampling that the choice is measured at
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
    print(f"a pair costs {2.0 * path_time(ready, ('antithetic',)) / path_time(ready, ()):.2f} paths of the average; "
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
    return plain / (PATHS * float(np.var(means, ddof=1))), path_time(ready, names) / path_time(ready, ())


def path_time(ready: Ready, names: tuple[str, ...]) -> float:
    """Processor time of a path of the contract's price, on one thread; the least of some runs."""
    sampler = Sampler(scheme_of(Case(ready, 1), names), 1, threads=1)
    taken = []
    for _ in range(ROUNDS):
        begun = time.thread_time()
        paths = sampler.sample(1 << 18, first_output_only=True).results[0].paths
        taken.append((time.thread_time() - begun) / paths)
    return min(taken)


def choices() -> None:
    """For every shipped example the time of the choice, its pilot included, to the error that plain sampling reaches in
    some seconds, over those seconds."""
    print(f"{'example':60} {'choice':26} {'pilot s':>8} {'time over plain':>16}")
    for file in sorted((Path(__file__).resolve().parents[1] / "payoffs" / "examples").glob("*.yaml")):
        request = load([file])
        for contract in request.contracts:
            dated, _ = date_contract(contract, request.market.valuation)
            ready, _ = prepare(dated, request.market)
            case = Case(ready, 1)
            begun = time.perf_counter()
            scheme = best(case)
            pilot = time.perf_counter() - begun
            plain, chosen = (_burden(Sampler(each, 1)) for each in (scheme_of(case, ()), scheme))
            print(f"{contract.title[:59]:60} {scheme.label:26} {pilot:8.2f} {pilot / LONG + chosen / plain:16.3f}")


def _burden(sampler: Sampler) -> float:
    """Variance times time."""
    begun = time.perf_counter()
    found = sampler.sample(1 << 17, first_output_only=True).results[0]
    return found.standard_error**2 * (time.perf_counter() - begun)


if __name__ == "__main__":
    main()
