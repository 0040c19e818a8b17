"""The price of a contract: its tape on a market, run for as many paths as the request needs."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np

from mcx.checked.market import Market
from mcx.dates.dated_contract import DatedContract
from mcx.estimators.estimate import Estimate, estimates
from mcx.estimators.pace import announce, pace
from mcx.estimators.plan import FEWEST_PATHS, Plan, Precision, plan
from mcx.faults import Fault
from mcx.leaves.market_map import MarketMap
from mcx.machine.run import BlockSums, Notice, Stream, load_kernels, run, values_by_path
from mcx.tape.program import Output, Program
from mcx.tape.registers import lower
from mcx.tape.unroll import Unrolled, unroll

SHARES = (4, 2)  # the price is also noted at a quarter and at half of the paths

Progress = Callable[[int, int, float], None]  # paths done, paths planned, standard error of the price so far


@dataclass(frozen=True, slots=True)
class Ready:
    """A dated contract on a market, as a program that can be run."""

    dated: DatedContract
    market: MarketMap
    unrolled: Unrolled
    program: Program


@dataclass(frozen=True, slots=True)
class Valuation:
    """Every output of a contract's tape with its error.

    outputs and results belong together, price first; `stages` is the price at a quarter, half and all of the paths;
    `seconds` the time of the main run.
    """

    outputs: tuple[Output, ...]
    results: tuple[Estimate, ...]
    stages: tuple[Estimate, ...]
    plan: Plan
    seed: int
    seconds: float
    interrupted: bool

    @property
    def price(self) -> Estimate:
        return next(estimate for _, estimate in self.of("price"))

    def of(self, kind: str) -> Iterator[tuple[Output, Estimate]]:
        """The outputs of a kind ('leg', 'condition', …) with their estimates, in the tape's order."""
        return ((output, result) for output, result in zip(self.outputs, self.results, strict=True)
                if output.kind == kind)


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


def value(
    ready: Ready,
    asked: Precision,
    *,
    seed: int,
    threads: int | None = None,
    progress: Progress | None = None,
    notice: Notice | None = None,
) -> Valuation:
    """The value of a contract; `threads` None takes all, and changes no digit.

    `notice` is told if kernels must be compiled first, and of a run that will take long. Raises RequestError where the
    precision asked for cannot be reached, NonFinitePath (of `machine.run`) where a path gives no finite number, and
    KeyboardInterrupt if that comes before there is an estimate.
    """
    outputs = ready.unrolled.tape.outputs
    assert outputs[0].kind == "price", "the price is the first output"
    price = replace(ready.program, outputs=ready.program.outputs[:1])
    how = {"seed": seed, "threads": threads}

    def prices(paths: int) -> np.ndarray:
        return values_by_path(price, paths=paths, stream=Stream.PILOT, **how)[0]

    def seconds_for(paths: int) -> float:
        begun = time.perf_counter()
        run(ready.program, paths=paths, stream=Stream.PILOT, **how)
        return time.perf_counter() - begun

    load_kernels(ready.program, notice)  # before any clock starts
    speed = pace([ready.program], threads)
    planned = plan(asked, prices, seconds_for, exact=price.outputs[0] < 0, pace=speed)
    announce(planned.paths, speed, notice)
    begun = time.perf_counter()
    sums = run(ready.program, paths=planned.paths, snapshots=[planned.paths // share for share in SHARES],
               progress=_counted(progress, planned), **how)
    seconds = time.perf_counter() - begun
    if sums.paths < FEWEST_PATHS:
        raise KeyboardInterrupt
    results = estimates(sums.paths, sums.mean, sums.m2)
    return Valuation(outputs, results, _stages(sums), planned, seed, seconds, sums.interrupted)


def _counted(progress: Progress | None, planned: Plan) -> Callable[[int, float, float], None] | None:
    return progress and (lambda done, _, error: progress(done, planned.paths, error))


def _stages(sums: BlockSums) -> tuple[Estimate, ...]:
    """The price of the first paths, at every share that the run reached, and of all."""
    reached = {part.paths: part for part in (*sums.snapshots, sums) if FEWEST_PATHS <= part.paths <= sums.paths}
    return tuple(estimates(paths, part.mean, part.m2)[0] for paths, part in sorted(reached.items()))
