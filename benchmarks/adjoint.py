"""What all first-order sensitivities cost: the price alone against the price with the adjoint of its tape.

An arithmetic Asian call on the mean of the levels of 1, 3 or 10 assets. Both programs run on the same draws, one core,
turn by turn; the ratio is that of the medians. Printed beside it: how many leaves are differentiated, the rows of both
register files with the lanes that a block then has, and the times for one path and date.

    python benchmarks/adjoint.py
"""

from __future__ import annotations

import statistics
import time
from dataclasses import replace

from mcx.checked.load import checked_request
from mcx.dates.dating import date_contract
from mcx.leaves.market_map import MarketMap
from mcx.machine.prepare import prepare
from mcx.machine.run import run
from mcx.machine.sizes import cost, lanes_for
from mcx.tape.adjoint import with_adjoint
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Program
from mcx.tape.registers import lower
from mcx.tape.unroll import unroll
from mcx.text.documents import parse_documents

NAMES = ("harbour", "lantern", "quarry", "orchard", "meadow", "granite", "willow", "beacon", "anchor", "cinder")
PAYOFF = """
payoff: asian_on_the_mean
about: Call on the average over dates of the mean of the assets' levels.
terms:
  strike:    {type: number}
  averaging: {type: dates}
running:
  average_level: {average: mean(spot), at: averaging}
events:
  - at: averaging.last
    pay: max(average_level - strike, 0)
"""
ROUNDS, SHARE = 5, 0.2  # runs of each program; seconds that one should take at least


def documents(assets: int, dates: int) -> str:
    names = NAMES[:assets]
    market = "".join(f"  {name}: {{spot: {90 + k}, yield: 1%, vol: {18 + k}%}}\n" for k, name in enumerate(names))
    pairs = [f"{a}/{b}: 40%" for k, a in enumerate(names) for b in names[k + 1 :]]
    correlation = f"correlation: {{{', '.join(pairs)}}}\n" if pairs else ""
    return (f"{PAYOFF}---\ncontract: Adjoint benchmark\ncurrency: EUR\nunits: 1\nassets: [{', '.join(names)}]\n"
            f"payoff: asian_on_the_mean\nterms:\n  strike: 95\n  averaging: {{count: {dates}, until: 1y}}\n"
            f"---\nmarket: 0y\nrates: {{EUR: 2%}}\nfunding: {{EUR: 0 bp}}\nassets:\n{market}{correlation}")


def programs(assets: int, dates: int) -> tuple[Program, Program, int]:
    """The price, the price with its adjoint, and how many derivatives that gives."""
    parsed, faults = parse_documents(documents(assets, dates).encode(), "adjoint.yaml")
    request, wrong = checked_request(parsed, faults)
    dated, late = date_contract(request.contracts[0], None) if request.contracts else (None, [])
    if wrong or late:
        raise SystemExit("\n".join(map(str, wrong + late)))
    market = MarketMap(request.market, request.contracts[0])
    tape = unroll(dated, nodes=market.nodes()).tape
    tape = drop_dead_code(replace(tape, outputs=tape.outputs[:1]))
    both = with_adjoint(tape, [tape.outputs[0].value])
    leaves = market.values(tape.leaves)
    return lower(tape, leaves), lower(both, leaves), len(both.sums)


def seconds(program: Program, paths: int) -> float:
    """The time of the paths alone: what is done once, whatever their number, is taken off."""
    begun = time.perf_counter()
    run(program, seed=1, paths=64, threads=1)
    ready = time.perf_counter()
    run(program, seed=1, paths=paths + 64, threads=1)
    return time.perf_counter() - 2.0 * ready + begun


def main() -> None:
    print(f"{'assets':>6} {'dates':>6} {'leaves':>7} {'rows':>12} {'lanes':>10} {'price ns':>9} {'both ns':>9} "
          f"{'ratio':>6} {'by table':>8}")
    for assets, dates in ((1, 12), (1, 52), (1, 250), (3, 12), (3, 250), (10, 12), (10, 250)):
        alone, both, leaves = programs(assets, dates)
        paths = 1 << 12
        while seconds(alone, paths) < SHARE:
            paths *= 2
        times = [(seconds(alone, paths), seconds(both, paths)) for _ in range(ROUNDS)]
        first, second = (statistics.median(column) for column in zip(*times, strict=True))
        rows = [prepare(program).rows for program in (alone, both)]
        unit = 1e9 / (paths * assets * dates)
        print(f"{assets:6d} {dates:6d} {leaves:7d} {rows[0]:5d} {rows[1]:6d} {lanes_for(rows[0]):5d} "
              f"{lanes_for(rows[1]):4d} {first * unit:9.2f} {second * unit:9.2f} {second / first:6.2f} "
              f"{cost(both) / cost(alone):8.2f}")


if __name__ == "__main__":
    main()
