"""From what the estimators found to the result of `mcx greeks`."""

from __future__ import annotations

from collections.abc import Iterator

from mcx.checked.market import Market
from mcx.estimators.estimate import Estimate
from mcx.estimators.greeks import Found, Value, Wish
from mcx.estimators.ladder import Point, Step
from mcx.estimators.ready import Ready
from mcx.estimators.sensitivities import Curvature, Sensitivity
from mcx.report.cautions import assumptions, cautions, limits
from mcx.report.greek_results import AssetDelta, Greek, GreeksResult, GridPoint, Jump, Refused, Rung
from mcx.report.plausible import implausible
from mcx.report.results import Planned
from mcx.report.state import doubted, standing
from mcx.report.summary import NO_REDUCTION, bracket

CLEAR = 2.0  # a value below this many errors is not resolved
NAN = float("nan")


def greeks_result(ready: Ready, market: Market, wish: Wish, found: Found) -> GreeksResult:
    """Everything that a run says, with what must stand beside it."""
    dated, contract, plan = ready.dated, ready.dated.contract, found.plan
    met = None if plan.target is None else found.price.half_width <= plan.target
    moves = [number.spot_move for number in found.ladder] or sorted({point.spot_move for point in found.grid})
    assets = [name for name in contract.assets if not wish.assets or name in wish.assets]
    return GreeksResult(
        contract=contract.title,
        payoff=contract.payoff.name,
        valuation=None if dated.valuation is None else dated.valuation.isoformat(),
        currency=contract.currency,
        notional=contract.notional,
        units=contract.units,
        unit="notional" if contract.notional is not None else "currency per unit",
        price=found.price.value,
        standard_error=found.price.standard_error,
        bracket=found.refinement and bracket(found.price, found.refinement.width, found.refinement, ()),
        paths=found.price.paths,
        seconds=found.seconds,
        seed=found.seed,
        reduction=",".join(found.reduction) or NO_REDUCTION,
        interrupted=found.interrupted,
        estimator=wish.estimator,
        bump=wish.bump,
        assets=wish.assets,
        spot_moves=tuple(moves),
        vol_moves=wish.vol_moves,
        planned=Planned(plan.asked, plan.paths, plan.pilot_paths, plan.target, met),
        greeks=tuple(map(_greek, found.values)),
        refused=tuple(Refused(what.name, what.subject, _tenor(what), reason) for what, reason in found.refused),
        comparison=tuple(map(_greek, found.comparison)),
        choices=found.choices,
        jumps=tuple(Jump(jump.kind, str(jump.place or "")) for jump in found.jumps),
        ladder=tuple(_rung(step, assets, contract.size) for step in found.ladder),
        grid=tuple(_point(point, contract.size) for point in found.grid),
        warnings=(*_warnings(found), *implausible(dated, ready.market),
                  *doubted(dated, ready.unrolled.state, ready.market)),
        assumptions=tuple(dict.fromkeys(
            (*standing(ready), *assumptions(dated, market, ready.market), *CONVENTIONS))),
        limits=tuple(limits(dated)),
        cautions=tuple(cautions(dated, named=False)),
        calendar_version=dated.calendar_version,
    )


CONVENTIONS = (
    "delta and gamma: the asset's forwards move with its spot, in proportion; vols stay where they are",
    "theta: levels stand, and every curve of the market document is read at the time that is left a calendar day on",
)


def _greek(value: Value) -> Greek:
    what, estimate = value.what, value.estimate
    return Greek(what.name, what.subject, _tenor(what), estimate.value, estimate.standard_error, estimate.interval95, what.unit,
                 value.estimator, resolved(estimate), value.note)


def resolved(estimate: Estimate) -> bool:
    """Whether a value is at least twice its error; a value of exactly 0 without error is."""
    return abs(estimate.value) >= CLEAR * estimate.standard_error


def _tenor(what: Sensitivity | Curvature) -> str:
    return what.tenor if isinstance(what, Sensitivity) else ""


def _rung(step: Step, assets: list[str], size: float) -> Rung:
    deltas = tuple(AssetDelta(asset, delta.value * size, delta.standard_error * size)
                   for asset, delta in zip(assets, step.deltas, strict=False))
    return Rung(step.spot_move, step.price.value, step.price.standard_error, step.price.value * size,
                step.change.value * size, step.change.standard_error * size, deltas, step.turning)


def _point(point: Point, size: float) -> GridPoint:
    if point.price is None or point.change is None:
        return GridPoint(point.spot_move, point.vol_move, NAN, NAN, NAN, NAN, NAN, point.refused)
    price, change = point.price, point.change
    return GridPoint(point.spot_move, point.vol_move, price.value, price.standard_error, price.value * size,
                     change.value * size, change.standard_error * size, "")


def _warnings(found: Found) -> Iterator[str]:
    if found.interrupted:
        yield (f"interrupted after {found.price.paths:,} of {found.plan.paths:,} paths: the estimates are those of the "
               f"paths so far, and what had not begun is left out")
    yield from found.plan.warnings
    yield from found.notes
    unclear = [value.what for value in found.values if not resolved(value.estimate)]
    if unclear:
        names = dict.fromkeys(f"{what.name} of {what.subject}" for what in unclear)
        yield f"not resolved at this number of paths (below twice its error): {', '.join(names)}"
