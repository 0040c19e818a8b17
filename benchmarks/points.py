"""What scrambled points cost and what they save, against pseudo-random numbers in the same run.

Prints, for an Asian call on 52 dates, an autocall on 12 and a monthly cliquet of 5 years, and for each order of a path: the time
at equal paths as a ratio to pseudo-random numbers (processor time, the least of alternating runs, one thread), and the variance of the
mean of 2^16 paths as a ratio, from 256 scrambles, with its own error by the chi-squared law.

    python benchmarks/points.py
"""

from __future__ import annotations

import math
import time
from dataclasses import replace

from mcx.checked.load import checked_request
from mcx.dates.dating import date_contract
from mcx.estimators.nets import Net, Order, clock, net_draws, on_net
from mcx.estimators.ready import Ready, prepare
from mcx.machine.draw_plan import PLAIN
from mcx.machine.run import run
from mcx.text.documents import parse_documents

SEED, POINTS, SCRAMBLES, TIMED, ROUNDS = 20260731, 1 << 16, 256, 1 << 17, 25
MARKET = """
market: 0y
rates: {EUR: 3%}
funding: {EUR: 0 bp}
assets: {harbour: {spot: 100, currency: EUR, yield: 0%, vol: VOL%}}
"""
VOLS = {"autocall, 12 dates": 25}  # percent; 20 for the others
CONTRACTS = {
    "Asian call, 52 dates": """
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
""",
    "autocall, 12 dates": """
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
""",
    "cliquet, 60 periods": """
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
""",
}


def main() -> None:
    print(f"{'contract':24} {'order':12} {'time':>6} {'variance ratio':>15} {'+-':>8}")
    for title, text in CONTRACTS.items():
        market = MARKET.replace("VOL", str(VOLS.get(title, 20)))
        ready = ready_of(f"{text}\n---{market}", title)
        program = replace(ready.program, outputs=ready.program.outputs[:1])
        variances = clock(ready.market, ready.unrolled.grid)
        plans = {order: net_draws(Net(POINTS), order, variances) for order in Order}
        times = {name: [] for name in (None, *Order)}
        for _ in range(ROUNDS):
            for name in times:
                begun = time.thread_time()
                run(program, seed=SEED, paths=TIMED, threads=1, plan=plans.get(name, PLAIN))
                times[name].append(time.thread_time() - begun)
        plain = run(program, seed=SEED, paths=1 << 20).variance[0] / POINTS
        for order in Order:
            net = Net(POINTS, SCRAMBLES)
            means = on_net(program, net, net_draws(net, order, variances), seed=SEED).means[:, 0]
            ratio = plain / means.var(ddof=1)
            cost = min(times[order]) / min(times[None])
            print(f"{title:24} {order.name.lower():12} {cost:6.2f} {ratio:15,.1f} "
                  f"{ratio * math.sqrt(2.0 / (SCRAMBLES - 1)):8,.1f}")


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
