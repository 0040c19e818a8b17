"""What a continuous watch costs: the same contract watched on its dates and continuously, at equal dates.

For a down-and-out call, a double knock-out call and a one-touch paid at the hit, the flag is read on every date. Prints
the time for a path and date on one thread, the ratio to the discrete watch (medians of several runs, the two in turn),
the variance and time of drawn flags over those of weights, and for a worst-of the cost and width of its bounds by the
number of pieces.

    python benchmarks/continuous.py
"""

from __future__ import annotations

import statistics
import time
from dataclasses import replace

from mcx.checked.load import checked_request
from mcx.dates.dating import date_contract
from mcx.leaves.market_map import MarketMap
from mcx.machine.run import run
from mcx.tape.program import Program
from mcx.tape.registers import lower
from mcx.tape.unroll import unroll
from mcx.text.documents import parse_documents

DATES, PATHS, REPEATS = 52, 1 << 17, 7
HEAD = """
payoff: watched
about: A call that pays if a barrier was not touched, with the flag read on every date.
terms:
  watched: {type: watch}
  dates:   {type: dates}
running:
  touched: {ever: CONDITION, at: watched}
events:
"""
AT_EXPIRY = """
  - at: dates
    if: touched and nth < n_dates
    then:
      - pay: 1e-9
  - at: dates.last
    if: not touched
    then:
      - pay: max(worst(spot) - 100, 0)
"""
AT_HIT = """
  - at: {once: touched}
    pay: 1
  - at: dates
    if: touched
    then:
      - pay: 1e-9
"""
ONE, TWO = "worst(spot) <= 85", "worst(spot) <= 85 or best(spot) >= 130"
CONTRACT = """---
contract: watched
currency: EUR
units: 1
assets: ASSETS
payoff: watched
terms: {watched: WATCHED, dates: {count: %d, until: 1y}}
---
market: 0y
rates: {EUR: 3%%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1%%, vol: 22%%}
  lantern: {spot: 100, currency: EUR, yield: 2%%, vol: 25%%}
correlation: {harbour/lantern: 60%%}
"""


def program(condition: str, events: str, watched: str, assets: str = "[harbour]", pieces: int = 1, dates: int = DATES,
            drawn: bool = False) -> Program:
    """The program of a contract, price alone (and the gap between its bounds)."""
    text = HEAD.replace("CONDITION", condition) + events
    text += (CONTRACT % dates).replace("WATCHED", watched).replace("ASSETS", assets)
    request, faults = checked_request(parse_documents(text.encode(), "benchmark")[0], [])
    assert not faults, faults
    contract = request.contracts[0]
    dated, faults = date_contract(contract, None)
    assert not faults, faults
    market = MarketMap(request.market, contract)
    unrolled = unroll(dated, nodes=market.nodes(), pieces=pieces, everything_drawn=drawn)
    made = lower(unrolled.tape, market.values(unrolled.tape.leaves))
    kept = [k for k, output in enumerate(unrolled.tape.outputs)
            if output.kind == "price" or (output.kind, output.subject) == ("gap", "price")]
    return replace(made, outputs=made.outputs[kept])


def seconds(made: Program, paths: int = PATHS) -> float:
    begun = time.perf_counter()
    run(made, seed=1, paths=paths, threads=1)
    return time.perf_counter() - begun


def against(rival: Program, made: Program) -> tuple[float, float, float]:
    """Nanoseconds for a path and date of both, and the median of the ratios, run in turn."""
    pairs = [(seconds(rival), seconds(made)) for _ in range(REPEATS)]
    scale = 1e9 / PATHS / DATES
    ratio = statistics.median(b / a for a, b in pairs)
    return *(scale * statistics.median(times) for times in zip(*pairs)), ratio


def main() -> None:
    always, dates = "{continuous: [0y, 1y]}", f"{{count: {DATES}, until: 1y}}"
    seconds(program(ONE, AT_EXPIRY, dates))  # compiles
    print(f"{'watched on ' + str(DATES) + ' dates, one thread':34} {'discrete':>9} {'continuous':>11} {'ratio':>6}")
    for name, condition, events in (("one side", ONE, AT_EXPIRY), ("two sides", TWO, AT_EXPIRY),
                                    ("one side, paid at the hit", ONE, AT_HIT)):
        rival, made = program(condition, events, dates), program(condition, events, always)
        one, other, ratio = against(rival, made)
        print(f"{name:34} {one:6.2f} ns {other:8.2f} ns {ratio:6.2f}")
    for name, condition in (("one side", ONE), ("two sides", TWO)):
        few = dict.fromkeys((True, False))
        for drawn in few:
            made = program(condition, AT_EXPIRY, always, dates=4, drawn=drawn)
            few[drawn] = float(run(made, seed=1, paths=1 << 15).variance[0]), seconds(made, 1 << 15)
        ratio = few[True][0] / few[False][0]
        print(f"{name}, read on 4 dates: a drawn flag has {ratio:.2f} times the variance of a weight and takes "
              f"{few[True][1] / few[False][1]:.1f} times as long")
    print(f"{'worst of two, read on 4 dates':34} {'steps':>9} {'bounds apart':>13} {'cost':>6}")
    for pieces in (1, 16, 64, 256):
        made = program(ONE, AT_EXPIRY, always, "[harbour, lantern]", pieces, dates=4)
        width = float(run(made, seed=1, paths=1 << 14).mean[1])
        first = seconds(program(ONE, AT_EXPIRY, always, "[harbour, lantern]", 1, dates=4), 1 << 15)
        print(f"{'':34} {made.normals // 2:9} {width:13.2e} {seconds(made, 1 << 15) / first:6.1f}")


if __name__ == "__main__":
    main()
