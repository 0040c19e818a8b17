"""A dated contract on a market, ready to be run."""

from __future__ import annotations

from dataclasses import dataclass

from mcx.checked.market import Market
from mcx.dates.dated_contract import DatedContract
from mcx.faults import Fault
from mcx.leaves.market_map import MarketMap
from mcx.tape.program import Program, Tape
from mcx.tape.registers import lower
from mcx.tape.steps import expand_levels
from mcx.tape.unroll import Unrolled, unroll


@dataclass(frozen=True, slots=True)
class Ready:
    """A dated contract on a market, as a program that can be run."""

    dated: DatedContract
    market: MarketMap
    unrolled: Unrolled
    program: Program

    def expanded(self, observed: Tape) -> Tape:
        """A tape that reads levels, as one that reads normals; on this market."""
        return expand_levels(observed, self.market.nodes(), self.market.makeup())[0]

    def lowered(self, tape: Tape) -> Program:
        """The program of another tape on the same market."""
        return lower(tape, self.market.values(tape.leaves))


def prepare(dated: DatedContract, market: Market) -> tuple[Ready | None, tuple[Fault, ...]]:
    """The program of a contract on a market, and what the tape refuses."""
    market_map = MarketMap.of(market, dated)
    if faults := market_map.faults():
        return None, tuple(faults)
    unrolled = unroll(dated, nodes=market_map.nodes(), makeup=market_map.makeup())
    if unrolled.faults:
        return None, unrolled.faults
    program = lower(unrolled.tape, market_map.values(unrolled.tape.leaves))
    return Ready(dated, market_map, unrolled, program), ()
