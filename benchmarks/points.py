"""What scrambled points cost and what they save, against pseudo-random numbers in the same run.

Prints, for an Asian call on 52 dates, an autocall on 12, a monthly cliquet of 5 years and an average of five assets
over 52 dates, and for each order of a path: the time at equal paths as a ratio to pseudo-random numbers (processor
time of one thread, the median of the ratios of pairs run one after the other), and the variance of the mean of 2^16
paths as a ratio, from 512 scrambles, with its own error by the chi-squared law. The bridge is the one that the
contract gets: with its early dates early where it may end on them.

    python benchmarks/points.py
"""

from __future__ import annotations

import math
import time
from dataclasses import replace
from itertools import combinations
from statistics import median

from mcx.checked.load import checked_request
from mcx.dates.dating import date_contract
from mcx.estimators.nets import Net, Order, may_end, net_draws, on_net
from mcx.estimators.ready import Ready, prepare
from mcx.machine.draw_plan import PLAIN, DrawPlan
from mcx.machine.run import run
from mcx.tape.program import Program
from mcx.text.documents import parse_documents

SEED, POINTS, SCRAMBLES, TIMED, ROUNDS = 20260731, 1 << 16, 512, 1 << 17, 25
MARKET = """
market: 0y
rates: {EUR: 3%}
funding: {EUR: 0 bp}
assets: {ASSETS}
correlation: {PAIRS}
"""
NAMES = ("harbour", "lantern", "orchard", "quarry", "meadow")
ASSETS = ", ".join(f"{name}: {{spot: 100, currency: EUR, yield: 0%, vol: VOL%}}" for name in NAMES)
PAIRS = ", ".join(f"{one}/{other}: 60%" for one, other in combinations(NAMES, 2))
BASKET = """
contract: Average of a basket
currency: EUR
notional: 1
assets: [harbour, lantern, orchard, quarry, meadow]
payoff: capital_protection
terms:
  initial: 100
  weights: 20%
  averaging: {count: 52, until: 1y}
  protection: 95%
  participation: 110%
  strike: 100%
"""
ASIAN = """
contract: Asian call
currency: EUR
units: 1
assets: [harbour]
payoff: asian
terms:
  side: call
  average_type: arithmetic
  strike_type: fixed
  strike: 100
  averaging: {count: 52, until: 1y}
  expiry: 1y
"""
AUTOCALL = """
payoff: plain_autocall
about: Pays back early with a coupon for each date so far; at the end the loss below a barrier.
terms:
  initial:      {type: level}
  observations: {type: dates}
  coupon:       {type: percent}
  barrier:      {type: percent}
let:
  perf: spot / initial
events:
  - at: observations
    name: called
    if: perf >= 1
    then:
      - pay: 1 + coupon * nth
        as: redemption
      - end
  - at: observations.last
    pay: 1 if perf >= barrier else perf
    as: redemption
---
contract: Autocall
currency: EUR
notional: 1
assets: [harbour]
payoff: plain_autocall
terms:
  initial: 100
  observations: {count: 12, until: 3y}
  coupon: 2%
  barrier: 60%
"""
CLIQUET = """
contract: Cliquet
currency: EUR
notional: 1
assets: [harbour]
payoff: cliquet
terms:
  initial: 100
  observations: {count: 60, until: 5y}
  returns: added
  local_floor: -2%
  local_cap: 2%
  global_floor: 0%
  redemption: 0%
"""
CONTRACTS = (  # title, text, vol in percent
    ("Asian call, 52 dates", ASIAN, 20),
    ("autocall, 12 dates, vol 25 %", AUTOCALL, 25),
    ("autocall, 12 dates, vol 20 %", AUTOCALL, 20),
    ("the same in 1 year", AUTOCALL.replace("until: 3y", "until: 1y"), 20),
    ("cliquet, 60 periods", CLIQUET, 20),
    ("basket of 5, average of 52 dates", BASKET, 20),
)


def main() -> None:
    print(f"{'contract':32} {'order':12} {'time':>6} {'variance ratio':>15} {'+-':>8}")
    for title, text, vol in CONTRACTS:
        market = MARKET.replace("ASSETS", ASSETS).replace("PAIRS", PAIRS).replace("VOL", str(vol))
        ready = ready_of(f"{text}\n---{market}", title)
        program = replace(ready.program, outputs=ready.program.outputs[:1])
        how = ready.market, ready.unrolled.grid, may_end(ready.unrolled.observed)
        plans = {order: net_draws(Net(POINTS), order, *how) for order in Order}
        plain = run(program, seed=SEED, paths=1 << 22, threads=1).variance[0] / POINTS
        for order in Order:
            net = Net(POINTS, SCRAMBLES)
            means = on_net(program, net, net_draws(net, order, *how), seed=SEED, threads=1).means[:, 0]
            ratio = plain / means.var(ddof=1)
            cost = median(taken(program, plans[order]) / taken(program, PLAIN) for _ in range(ROUNDS))
            print(f"{title:32} {order.name.lower():12} {cost:6.2f} {ratio:15,.1f} "
                  f"{ratio * math.sqrt(2.0 / (SCRAMBLES - 1)):8,.1f}")


def taken(program: Program, plan: DrawPlan) -> float:
    """Processor time of some paths, on this thread."""
    begun = time.thread_time()
    run(program, seed=SEED, paths=TIMED, threads=1, plan=plan)
    return time.thread_time() - begun


def ready_of(text: str, title: str) -> Ready:
    """The only contract of a text, as a program."""
    documents, faults = parse_documents(text.encode(), title)
    request, wrong = checked_request(documents, faults)
    dated, late = date_contract(request.contracts[0], request.market.valuation) if not wrong else (None, [])
    ready, refused = prepare(dated, request.market) if dated is not None else (None, ())
    if ready is None:
        raise SystemExit("\n".join(map(str, [*wrong, *late, *refused])))
    return ready


if __name__ == "__main__":
    main()
