"""A dated contract on a market, ready to be run."""

from __future__ import annotations

from dataclasses import dataclass

from mcx.checked.market import Market
from mcx.dates.dated_contract import DatedContract
from mcx.faults import Fault
from mcx.leaves.market_map import MarketMap
from mcx.tape.formulas import fixed_values
from mcx.tape.program import Program, Tape
from mcx.tape.registers import lower
from mcx.tape.steps import expand_levels
from mcx.tape.unroll import Unrolled, unroll
from mcx.tape.weights import weigh


@dataclass(frozen=True, slots=True)
class Ready:
    """A dated contract on a market, as a program that can be run; `pieces`: how far its steps are refined
    (`estimators.bracket`); `apart`: without taking assets that move as one for one, since the market will be moved."""

    dated: DatedContract
    market: MarketMap
    unrolled: Unrolled
    program: Program
    pieces: int = 1
    apart: bool = False

    def expanded(self, observed: Tape) -> Tape:
        """A tape that reads levels, as one that reads normals; on this market."""
        makeup = self.market.makeup(self.apart)
        weighted = weigh(observed, fixed_values(observed, self.dated.contract), leaders=makeup.leaders)
        return expand_levels(weighted.tape, self.market.nodes(), makeup, self.pieces)[0]

    def lowered(self, tape: Tape) -> Program:
        """The program of another tape on the same market."""
        return lower(tape, self.market.values(tape.leaves))


def prepare(
    dated: DatedContract, market: Market, apart: bool = False, pieces: int = 1
) -> tuple[Ready | None, tuple[Fault, ...]]:
    """The program of a contract on a market, and what the tape refuses.

    Where several assets are watched together (`unrolled.bracketed`) `price.refined` finds in how many `pieces` their
    time must be cut. `apart` where the program will be run on markets in which assets that move as one do so no more.
    """
    market_map = MarketMap.of(market, dated)
    if faults := market_map.faults():
        return None, tuple(faults)
    unrolled, program = made(dated, market_map, pieces, apart)
    if program is None:
        return None, unrolled.faults
    return Ready(dated, market_map, unrolled, program, pieces, apart), ()


def made(dated: DatedContract, market: MarketMap, pieces: int, apart: bool = False) -> tuple[Unrolled, Program | None]:
    """The contract with its steps cut into at least so many pieces where assets are watched together."""
    unrolled = unroll(dated, nodes=market.nodes(), makeup=market.makeup(apart), pieces=pieces)
    return unrolled, None if unrolled.faults else lower(unrolled.tape, market.values(unrolled.tape.leaves))
