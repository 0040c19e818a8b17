"""How long a tape takes to build: a worst-of autocall on three assets whose knock-in is watched daily.

Prints, for several numbers of dates, the instructions of the tape, the time from a dated contract to a tape and from
there to a program, and the time for each date: it should not grow with the number of dates.

    python benchmarks/build.py
"""

from __future__ import annotations

import time

from mcx.checked.load import checked_request
from mcx.dates.dating import date_contract
from mcx.leaves.market_map import MarketMap
from mcx.tape.registers import lower
from mcx.tape.unroll import unroll
from mcx.text.documents import parse_documents

DOCUMENTS = """
payoff: daily_knock_in
about: Worst-of autocall with a knock-in watched on every date.
terms:
  initial:      {{type: level}}
  watched:      {{type: watch}}
  observations: {{type: dates}}
  coupon:       {{type: percent}}
  knock_in:     {{type: percent}}
let:
  perf: worst(spot / initial)
running:
  hit: {{ever: perf < knock_in, at: watched}}
events:
  - at: observations
    name: called
    if: perf >= 1
    then:
      - pay: 1 + coupon * nth
        as: redemption
      - end
  - at: observations.last
    pay: perf if hit and perf < 1 else 1
    as: redemption
---
contract: Build benchmark
currency: EUR
notional: 1
assets: [harbour, lantern, quarry]
payoff: daily_knock_in
terms:
  initial: 100
  watched: {{count: {dates}, until: {years}y}}
  observations: {{count: {observations}, until: {years}y}}
  coupon: 2%
  knock_in: 60%
---
market: 0y
rates: {{EUR: 2%}}
funding: {{EUR: 0 bp}}
assets:
  harbour: {{spot: 100, yield: 0%, vol: 18%}}
  lantern: {{spot: 100, yield: 0%, vol: 22%}}
  quarry:  {{spot: 100, yield: 0%, vol: {{1y: 25%, 3y: 24%}}}}
correlation: {{harbour/lantern: 60%, harbour/quarry: 50%, lantern/quarry: 40%}}
"""


def main() -> None:
    print(f"{'dates':>6} {'instructions':>13} {'rows':>6} {'tape s':>8} {'program s':>10} {'us a date':>10}")
    for years in (1, 3, 6, 12):
        dates = 252 * years
        text = DOCUMENTS.format(dates=dates, years=years, observations=4 * years)
        documents, faults = parse_documents(text.encode(), "build.yaml")
        request, wrong = checked_request(documents, faults)
        dated, late = date_contract(request.contracts[0], None) if request.contracts else (None, [])
        if wrong or late:
            raise SystemExit("\n".join(map(str, wrong + late)))
        market = MarketMap(request.market, request.contracts[0])
        start = time.perf_counter()
        unrolled = unroll(dated, nodes=market.nodes())
        built = time.perf_counter()
        program = lower(unrolled.tape, market.values(unrolled.tape.leaves))
        ready = time.perf_counter()
        print(f"{dates:6d} {len(unrolled.tape.instructions):13d} {program.rows - program.draws:6d} "
              f"{built - start:8.3f} {ready - built:10.3f} {1e6 * (ready - start) / dates:10.0f}")


if __name__ == "__main__":
    main()
