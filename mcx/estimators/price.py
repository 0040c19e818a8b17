"""The price of a contract: its tape on a market, run for as many paths as the request needs."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np

from mcx.estimators.batches import Sampling
from mcx.estimators.bracket import PILOT, Refinement, refine
from mcx.estimators.estimate import NORMAL_95, Estimate
from mcx.estimators.model_bracket import ModelBracket, model_bracket
from mcx.estimators.pace import announce, pace
from mcx.estimators.plan import GROUP, Plan, Precision, plan, whole_groups
from mcx.estimators.ready import Ready, made
from mcx.estimators.reduction.catalogue import scheme_of
from mcx.estimators.reduction.choice import best
from mcx.estimators.reduction.hedge import HEDGE
from mcx.estimators.reduction.names import AUTO
from mcx.estimators.reduction.residual import Residual, residuals
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case, Scheme
from mcx.machine.run import Notice, Stream, load_kernels, values_by_path
from mcx.tape.program import Output

Progress = Callable[[int, int, float], None]  # paths done, paths planned, standard error of the price so far
BOUNDS_OF_ERROR = 0.25  # how close bounds should be, in half-widths: then the middle is at most an eighth of one off, and
# the 95 % interval of sampling covers the truth at least about 94 % of the time


@dataclass(frozen=True, slots=True)
class Valuation:
    """Every output of a contract's tape with its error.

    outputs and results belong together, price first; `stages` is the price at a quarter, half and all of the paths;
    `seconds` the time of the main run; `reduction` the methods of variance reduction, `notes` what they found;
    `hedge`, where gains of a hedge are among them, what a hedger is left with; `ready` the contract as it was run, with
    refined steps; `refinement` how fine these are, where the price lies between bounds; `model` how far the price may
    lie elsewhere under vols by strike, None where the market states none.
    """

    outputs: tuple[Output, ...]
    results: tuple[Estimate, ...]
    stages: tuple[Estimate, ...]
    plan: Plan
    seed: int
    seconds: float
    interrupted: bool
    ready: Ready
    reduction: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    hedge: tuple[Residual, ...] = ()
    refinement: Refinement | None = None
    model: ModelBracket | None = None

    @property
    def price(self) -> Estimate:
        return next(estimate for _, estimate in self.of("price"))

    def of(self, kind: str) -> Iterator[tuple[Output, Estimate]]:
        """The outputs of a kind ('leg', 'condition', …) with their estimates, in the tape's order."""
        return ((output, result) for output, result in zip(self.outputs, self.results, strict=True)
                if output.kind == kind)


def value(
    ready: Ready,
    asked: Precision,
    *,
    seed: int,
    reduction: tuple[str, ...] = (),
    threads: int | None = None,
    pieces: int | None = None,
    progress: Progress | None = None,
    notice: Notice | None = None,
) -> Valuation:
    """The value of a contract; `threads` None takes all, and changes no digit.

    Where the price lies between bounds the steps are refined until these are closer than a quarter of the 95 % half-width
    asked for, or of that of the paths asked for; `pieces` prescribes the refinement (see `estimators.bracket`), as a
    replay must.
    `reduction` holds names of methods of variance reduction (`reduction.names.wished`); `notice` is told if kernels
    must be compiled first, and of a run that will take long. Raises RequestError and Refusal for methods that do not
    apply, RequestError where the precision asked for cannot be reached, NonFinitePath (of `machine.run`) where a path
    gives no finite number, and KeyboardInterrupt if that comes before there is an estimate.
    """
    assert ready.unrolled.tape.outputs[0].kind == "price", "the price is the first output"
    load_kernels(ready.program, notice)  # before any clock starts
    refinement = None
    if ready.unrolled.bracketed:
        ready, refinement = _refined(ready, asked, seed, threads, pieces)
    case = Case(ready, seed, threads)
    scheme = best(case, asked) if reduction == (AUTO,) else scheme_of(case, reduction)
    found = sampled(ready, scheme, asked, seed=seed, threads=threads, progress=progress, notice=notice)
    found = replace(found, refinement=refinement, hedge=residuals(case) if HEDGE.name in scheme.names else ())
    if found.interrupted:
        return found
    try:
        return replace(found, model=model_bracket(ready, ready.market.market, Sampling(
            seed, found.price.paths, threads=threads, notice=notice)))
    except KeyboardInterrupt:
        return replace(found, interrupted=True)


def sampled(ready: Ready, scheme: Scheme, asked: Precision, *, seed: int, threads: int | None = None,
            progress: Progress | None = None, notice: Notice | None = None) -> Valuation:
    """The value of a contract by a scheme; see `value`."""
    sampler = Sampler(scheme, seed, threads)

    def seconds_for(paths: int) -> float:
        begun = time.perf_counter()
        sampler.pilot(paths)
        return time.perf_counter() - begun

    speed = pace([scheme.program], threads) / scheme.each
    planned = plan(asked, sampler.independent, seconds_for, exact=scheme.program.outputs[0] < 0, pace=speed)
    paths = sampler.paths(planned.paths) if asked.seconds is None else sampler.within_time(planned.paths)
    planned = replace(planned, paths=paths, pilot_paths=planned.pilot_paths + scheme.fit_paths)
    announce(planned.paths, speed, notice)
    counted = progress and (lambda done, _, error: progress(done, planned.paths, error))
    begun = time.perf_counter()
    found = sampler.sample(planned.paths, progress=counted)
    seconds = time.perf_counter() - begun
    return Valuation(ready.unrolled.tape.outputs, found.results, found.stages, planned, seed, seconds,
                     found.interrupted, ready, scheme.names, scheme.notes)


def _refined(ready: Ready, asked: Precision, seed: int, threads: int | None, pieces: int | None
             ) -> tuple[Ready, Refinement]:
    """The contract with steps so fine that the bounds of its price are closer than what sampling will leave open."""
    program = replace(ready.program, outputs=ready.program.outputs[:1])
    sampler = Sampler(scheme_of(Case(ready, seed, threads), ()), seed, threads)

    def prices(paths: int) -> np.ndarray:
        return values_by_path(program, paths=paths, seed=seed, stream=Stream.PILOT, threads=threads)[0]

    def seconds_for(paths: int) -> float:
        begun = time.perf_counter()
        sampler.pilot(paths)
        return time.perf_counter() - begun

    planned = plan(asked, sampler.independent, seconds_for, exact=program.outputs[0] < 0)
    found, _, refinement = refined(ready, asked, planned, prices, seed=seed, threads=threads, pieces=pieces)
    return found, refinement


def refined(
    ready: Ready, asked: Precision, planned: Plan, prices: Callable[[int], np.ndarray], *, seed: int,
    threads: int | None = None, pieces: int | None = None,
) -> tuple[Ready, Plan, Refinement]:
    """The contract with steps so fine that the bounds of its price are close enough, and how many paths there is time for
    then. `prices(paths)` gives the price on each path of the pilot."""
    half_width = planned.target or NORMAL_95 * float(prices(PILOT).std(ddof=1)) / math.sqrt(planned.paths)
    target = BOUNDS_OF_ERROR * half_width
    unrolled, program, refinement = refine(lambda number: made(ready.dated, ready.market, number, ready.apart), target,
                                           seed=seed, threads=threads, pieces=pieces)
    if asked.seconds is not None:  # finer steps leave time for fewer paths
        planned = replace(planned, paths=whole_groups(max(planned.paths / refinement.cost, GROUP)))
    return replace(ready, unrolled=unrolled, program=program, pieces=refinement.pieces), planned, refinement
