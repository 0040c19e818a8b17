"""What a contract is worth in the other readings of its payoff, each beside the price on the same paths."""

from __future__ import annotations

import time
from collections.abc import Iterable
from dataclasses import dataclass

from mcx.checked.market import Market
from mcx.dates.dated_contract import DatedContract
from mcx.dates.otherwise import date_otherwise
from mcx.estimators.estimate import Estimate, estimates
from mcx.estimators.plan import FEWEST_PATHS
from mcx.estimators.price import Progress
from mcx.faults import Fault
from mcx.leaves.market_map import MarketMap
from mcx.machine.run import Notice, run
from mcx.tape.otherwise import unroll_otherwise
from mcx.tape.registers import lower


@dataclass(frozen=True, slots=True)
class ReadingValue:
    """A reading with its price and the difference to the contract's, in the unit of the price; the error of the
    difference is that of paired paths."""

    name: str
    about: str
    price: Estimate
    difference: Estimate

    @property
    def differs(self) -> bool:
        """Whether any path told the reading from the contract: at a level or below it is one on all of them."""
        return self.difference.value != 0.0 or self.difference.standard_error > 0.0


@dataclass(frozen=True, slots=True)
class ReadingNotValued:
    """A reading without a value of its own: it says what the contract says (no faults), or cannot be valued, and
    why."""

    name: str
    about: str
    faults: tuple[Fault, ...] = ()


@dataclass(frozen=True, slots=True)
class ReadingsValuation:
    """The price of the contract and of every reading that differs from it, on one set of paths.

    The dates of all readings are simulated together, so the price is not digit for digit that of the contract alone.
    `seconds` is the time of the run.
    """

    price: Estimate
    readings: tuple[ReadingValue, ...]
    same: tuple[ReadingNotValued, ...]
    refused: tuple[ReadingNotValued, ...]
    seed: int
    seconds: float
    interrupted: bool


def value_readings(
    dated: DatedContract,
    market: Market,
    *,
    paths: int,
    seed: int,
    pieces: int = 1,
    apart: bool = False,
    threads: int | None = None,
    progress: Progress | None = None,
    notice: Notice | None = None,
) -> ReadingsValuation:
    """The values of a contract's other readings; the contract can be unrolled by itself (`prepare` found no fault).
    `pieces` refines the steps in which several assets are watched together; `apart` as for `prepare`.

    Raises NonFinitePath (of `machine.run`) where a path gives no finite number, and KeyboardInterrupt if that comes
    before there is an estimate.
    """
    leaves = MarketMap.of(market, dated)
    unrolled = unroll_otherwise(dated, date_otherwise(dated), nodes=leaves.nodes(), makeup=leaves.makeup(apart),
                                pieces=pieces)
    program = lower(unrolled.tape, leaves.values(unrolled.tape.leaves))
    told = progress and (lambda done, _, error: progress(done, paths, error))
    begun = time.perf_counter()
    sums = run(program, seed=seed, paths=paths, threads=threads, progress=told, notice=notice)
    seconds = time.perf_counter() - begun
    if sums.paths < FEWEST_PATHS:
        raise KeyboardInterrupt
    price, *pairs = estimates(sums.paths, sums.mean, sums.m2)
    values = zip(unrolled.readings, pairs[::2], pairs[1::2], strict=True)
    return ReadingsValuation(
        price, tuple(ReadingValue(each.reading.name, each.reading.about, *pair) for each, *pair in values),
        _not_valued(unrolled.same), _not_valued(unrolled.refused), seed, seconds, sums.interrupted)


def _not_valued(others: Iterable) -> tuple[ReadingNotValued, ...]:
    return tuple(ReadingNotValued(other.reading.name, other.reading.about, other.faults) for other in others)
