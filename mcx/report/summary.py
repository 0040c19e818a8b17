"""From estimates to the result of `mcx price`."""

from __future__ import annotations

import math
from collections.abc import Iterable

from mcx.checked.market import Market
from mcx.estimators.bracket import Refinement
from mcx.estimators.estimate import Estimate
from mcx.estimators.price import Valuation
from mcx.estimators.ready import Ready
from mcx.report.cautions import assumptions, cautions, limits, vol_warnings, warnings
from mcx.report.given_path import day_of
from mcx.report.model_results import model_bracket_result
from mcx.report.plausible import implausible
from mcx.report.results import (
    Amount,
    Bracket,
    Checks,
    Condition,
    HedgeLine,
    Likelihood,
    Martingale,
    Planned,
    PriceResult,
    Stage,
    Width,
)
from mcx.report.state import accrued, doubted, owed, standing

NO_REDUCTION = "none"


def price_result(ready: Ready, market: Market, valuation: Valuation) -> PriceResult:
    """Everything that a valuation says, with its checks and what must stand beside it."""
    dated, contract = ready.dated, ready.dated.contract
    price, plan = valuation.price, valuation.plan
    met = None if plan.target is None else price.half_width <= plan.target
    martingale = _martingale(ready, valuation)
    conditions = _conditions(valuation)
    ends = tuple(_likelihood(output.day, estimate) for output, estimate in valuation.of("end"))
    life = next(estimate for _, estimate in valuation.of("life"))
    return PriceResult(
        contract=contract.title,
        payoff=contract.payoff.name,
        valuation=None if dated.valuation is None else dated.valuation.isoformat(),
        currency=contract.currency,
        notional=contract.notional,
        units=contract.units,
        unit="notional" if contract.notional is not None else "currency per unit",
        price=price.value,
        standard_error=price.standard_error,
        interval95=price.interval95,
        bracket=_bracket(valuation),
        model_bracket=model_bracket_result(valuation.model, ready, ready.market, price.value),
        value=price.value * contract.size,
        value_standard_error=price.standard_error * contract.size,
        paths=price.paths,
        seconds=valuation.seconds,
        seed=valuation.seed,
        reduction=",".join(valuation.reduction) or NO_REDUCTION,
        reduction_notes=valuation.notes,
        hedge=tuple(HedgeLine(each.dates, each.deviation, each.standard_error) for each in valuation.hedge),
        interrupted=valuation.interrupted,
        planned=Planned(plan.asked, plan.paths, plan.pilot_paths, plan.target, met),
        legs=_amounts(valuation, "leg", contract.size),
        parts=_amounts(valuation, "part", contract.size),
        conditions=conditions,
        ends=ends,
        reached_maturity=_not_ended(ends, price.paths, plain=not valuation.reduction),
        expected_life=life.value,
        expected_life_standard_error=life.standard_error,
        owed=owed(ready),
        accrued=accrued(dated, ready.unrolled.state),
        clean=price.value - accrued(dated, ready.unrolled.state),
        ended=str(ready.unrolled.state.ended or ""),
        checks=Checks(martingale, tuple(Stage(e.paths, e.value, e.standard_error) for e in valuation.stages)),
        warnings=(*warnings(valuation, ready.unrolled.tape, martingale, met), *implausible(dated, ready.market),
                  *doubted(dated, ready.unrolled.state, ready.market), *vol_warnings(market, ready.market)),
        assumptions=tuple(dict.fromkeys((*standing(ready), *assumptions(dated, market, ready.market)))),
        limits=tuple(limits(dated, valuation.model)),
        cautions=tuple(cautions(dated, bool(conditions or ends))),
        calendar_version=dated.calendar_version,
    )


def _bracket(valuation: Valuation) -> Bracket | None:
    """The bounds of the price, where it has any."""
    taken = valuation.refinement
    if taken is None:
        return None
    widths = {output.subject: estimate for output, estimate in valuation.of("gap")}
    width = widths.pop("price", Estimate(0.0, 0.0, valuation.price.paths))
    return bracket(valuation.price, width, taken, (Width(name, each.value) for name, each in widths.items()))


def bracket(price: Estimate, width: Estimate, taken: Refinement, others: Iterable[Width]) -> Bracket:
    """The bounds about the middle, and how they were brought so close."""
    return Bracket(
        lower=price.value - 0.5 * width.value, upper=price.value + 0.5 * width.value, width=width.value,
        width_standard_error=width.standard_error, target=taken.target, reached=taken.reached, pieces=taken.pieces,
        steps=taken.steps, unrefined=taken.unrefined, cost=taken.cost, others=tuple(others),
    )


def _amounts(valuation: Valuation, kind: str, size: float) -> tuple[Amount, ...]:
    return tuple(Amount(output.subject, estimate.value, estimate.standard_error, estimate.value * size)
                 for output, estimate in valuation.of(kind))


def _likelihood(date: str, estimate: Estimate) -> Likelihood:
    return Likelihood(date, estimate.value, estimate.standard_error)


def _conditions(valuation: Valuation) -> tuple[Condition, ...]:
    found = list(valuation.of("condition"))
    return tuple(
        Condition(output.subject, ever.value, ever.standard_error,
                  tuple(_likelihood(each.day, estimate) for each, estimate in found
                        if each.day and each.subject == output.subject))
        for output, ever in found if not output.day
    )


def _not_ended(ends: tuple[Likelihood, ...], paths: int, plain: bool) -> Likelihood:
    """How often the contract did not end early: the ends exclude one another. Where paths are not plain its error is at
    most the root of the sum of squares of theirs."""
    chance = min(max(1.0 - sum(end.probability for end in ends), 0.0), 1.0)
    if not plain:
        return Likelihood("", chance, math.hypot(*(end.standard_error for end in ends)))
    return Likelihood("", chance, math.sqrt(chance * (1.0 - chance) / max(paths - 1, 1)))


def _martingale(ready: Ready, valuation: Valuation) -> tuple[Martingale, ...]:
    """Each asset's mean level over its forward, at the last time it is observed."""
    found = []
    for output, estimate in valuation.of("level"):
        _, time = ready.unrolled.levels[output.name]
        ratio = estimate.times(1.0 / ready.market.forward(output.subject, time))
        found.append(Martingale(output.subject, day_of(time, ready.dated), ratio.value, ratio.standard_error,
                                ratio.z(1.0)))
    return tuple(found)
