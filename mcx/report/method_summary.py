"""From the comparison of methods to the result of `mcx methods`."""

from __future__ import annotations

import math
from collections.abc import Iterator

from mcx.checked.market import Market
from mcx.estimators.ready import Ready
from mcx.estimators.reduction.comparison import Compared, Comparison, closed_form, z_scores
from mcx.report.cautions import assumptions, cautions, limits
from mcx.report.method_results import Convergence, MethodLine, MethodsResult, NotApplied
from mcx.report.state import standing

BASIS_POINT = 1e-4


def methods_result(ready: Ready, market: Market, compared: Comparison, seed: int, each: str) -> MethodsResult:
    """Every choice, the most efficient first; an exact one before all."""
    contract, found = ready.dated.contract, compared.found
    truth = closed_form(found)
    plain = found[0]
    unit = BASIS_POINT * (1.0 if contract.notional is not None else abs(plain.price.value))
    lines = [_line(one, plain, z, truth, unit) for one, z in zip(found, z_scores(found), strict=True)]
    lines.sort(key=lambda line: -math.inf if line.efficiency is None else -line.efficiency)
    return MethodsResult(
        contract=contract.title,
        payoff=contract.payoff.name,
        currency=contract.currency,
        notional=contract.notional,
        unit="notional" if contract.notional is not None else "currency per unit",
        seed=seed,
        each=each,
        closed_form=truth,
        methods=tuple(lines),
        not_applied=tuple(NotApplied(*one) for one in compared.refused),
        assumptions=tuple(dict.fromkeys((*standing(ready), *assumptions(ready.dated, market, ready.market)))),
        limits=tuple(limits(ready.dated)),
        cautions=(*_missing(compared.not_reached), *cautions(ready.dated, named=False)),
        interrupted=bool(compared.not_reached),
        calendar_version=ready.dated.calendar_version,
    )


def _missing(not_reached: tuple[str, ...]) -> Iterator[str]:
    if not_reached:
        yield f"interrupted: not compared are {', '.join(each.replace(',', ' + ') for each in not_reached)}"


def _line(one: Compared, plain: Compared, z: float, truth: float | None, unit: float) -> MethodLine:
    ratio = None if one.exact else plain.variance / one.variance
    itself = one is plain
    wanted = (one.price.half_width / unit) ** 2 if unit and not one.exact else 0.0
    return MethodLine(
        method=one.scheme.label,
        price=one.price.value,
        standard_error=one.price.standard_error,
        paths=one.price.paths,
        seconds=one.seconds,
        variance_ratio=ratio,
        variance_ratio_error=None if ratio is None else 0.0 if itself else ratio * math.hypot(one.doubt, plain.doubt),
        cost_ratio=one.cost,
        efficiency=None if ratio is None else ratio / one.cost,
        z=z,
        z_closed_form=None if truth is None else 0.0 if one.exact else one.price.z(truth),
        paths_to_1bp=wanted * one.price.paths,
        seconds_to_1bp=wanted * one.seconds,
        notes=one.scheme.notes,
        convergence=tuple(Convergence(point.paths, point.seconds, point.standard_error) for point in one.points),
    )
