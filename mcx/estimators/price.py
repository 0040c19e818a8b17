"""The price of a contract: its tape on a market, run for as many paths as the request needs."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

from mcx.estimators.estimate import Estimate
from mcx.estimators.pace import announce, pace
from mcx.estimators.plan import Plan, Precision, plan
from mcx.estimators.ready import Ready
from mcx.estimators.reduction.catalogue import scheme_of
from mcx.estimators.reduction.choice import best
from mcx.estimators.reduction.hedge import HEDGE
from mcx.estimators.reduction.names import AUTO
from mcx.estimators.reduction.residual import Residual, residuals
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case, Scheme
from mcx.machine.run import Notice, Stream, load_kernels
from mcx.tape.program import Output

Progress = Callable[[int, int, float], None]  # paths done, paths planned, standard error of the price so far


@dataclass(frozen=True, slots=True)
class Valuation:
    """Every output of a contract's tape with its error.

    outputs and results belong together, price first; `stages` is the price at a quarter, half and all of the paths;
    `seconds` the time of the main run; `reduction` the methods of variance reduction, `notes` what they found;
    `hedge`, where gains of a hedge are among them, what a hedger is left with.
    """

    outputs: tuple[Output, ...]
    results: tuple[Estimate, ...]
    stages: tuple[Estimate, ...]
    plan: Plan
    seed: int
    seconds: float
    interrupted: bool
    reduction: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    hedge: tuple[Residual, ...] = ()

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
    progress: Progress | None = None,
    notice: Notice | None = None,
) -> Valuation:
    """The value of a contract; `threads` None takes all, and changes no digit.

    `reduction` holds names of methods of variance reduction (`reduction.names.wished`); `notice` is told if kernels
    must be compiled first, and of a run that will take long. Raises RequestError and Refusal for methods that do not
    apply, RequestError where the precision asked for cannot be reached, NonFinitePath (of `machine.run`) where a path
    gives no finite number, and KeyboardInterrupt if that comes before there is an estimate.
    """
    assert ready.unrolled.tape.outputs[0].kind == "price", "the price is the first output"
    load_kernels(ready.program, notice)  # before any clock starts
    case = Case(ready, seed, threads)
    scheme = best(case) if reduction == (AUTO,) else scheme_of(case, reduction)
    found = sampled(ready, scheme, asked, seed=seed, threads=threads, progress=progress, notice=notice)
    return replace(found, hedge=residuals(case)) if HEDGE.name in scheme.names else found


def sampled(ready: Ready, scheme: Scheme, asked: Precision, *, seed: int, threads: int | None = None,
            progress: Progress | None = None, notice: Notice | None = None) -> Valuation:
    """The value of a contract by a scheme; see `value`."""
    sampler = Sampler(scheme, seed, threads)

    def seconds_for(paths: int) -> float:
        begun = time.perf_counter()
        sampler.sample(paths, stream=Stream.PILOT)
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
                     found.interrupted, scheme.names, scheme.notes)
