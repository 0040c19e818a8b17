"""What a hedger is left with, by how often they trade."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from mcx.estimators.reduction.candidates import Market
from mcx.estimators.reduction.fit import fitted
from mcx.estimators.reduction.hedge import hedged, trading_times
from mcx.estimators.reduction.scheme import Case, Draft, Scheme
from mcx.machine.run import Stream, values_by_path

PATHS = 1 << 14


@dataclass(frozen=True, slots=True)
class Residual:
    """The standard deviation of the contract's discounted value less the gains of a hedge that is traded on `dates`
    dates, today included, in the unit of the price, with its standard error; 0 dates: of the contract alone."""

    dates: int
    deviation: float
    standard_error: float


def residuals(case: Case) -> tuple[Residual, ...]:
    """Without a hedge, and with 1, 2, 4, ... dates up to all that can be regressed; on paths that fitted nothing."""
    most = len(trading_times(Market(case.ready), None)) - 1
    counts = sorted({min(1 << k, most) for k in range(most.bit_length() + 1)})
    return tuple(_spread(case, dates, scheme) for dates, scheme in _schemes(case, counts))


def _schemes(case: Case, counts: list[int]) -> Iterator[tuple[int, Scheme]]:
    yield 0, Scheme((), case.ready.program)
    for dates in counts:
        draft = hedged(case, Draft(case.ready.unrolled.observed), dates)
        draft = replace(draft, tape=case.ready.expanded(draft.tape))
        yield dates, fitted(case, ("hedge",), draft)


def _spread(case: Case, dates: int, scheme: Scheme) -> Residual:
    program = replace(scheme.program, outputs=scheme.program.outputs[:1])
    values = values_by_path(program, seed=case.seed, paths=PATHS, stream=Stream.CHOICE, threads=case.threads)[0]
    squares = (values - values.mean()) ** 2
    deviation = float(np.sqrt(squares.mean()))
    error = float(squares.std() / np.sqrt(len(values))) / (2.0 * deviation) if deviation > 0.0 else 0.0
    return Residual(dates, deviation, error)
