"""What must stand beside a number: warnings about the run, assumptions, what the model leaves out, how to use it."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping

from mcx.checked.formula import Previous, walk
from mcx.checked.market import Curve, Market, StrikeVols
from mcx.checked.strike_vols import shown_strike
from mcx.dates.dated_contract import DatedContract
from mcx.estimators.estimate import Estimate
from mcx.estimators.model_bracket import ModelBracket
from mcx.estimators.price import Valuation
from mcx.leaves.market_map import MarketMap
from mcx.leaves.smile import butterflies
from mcx.report.results import Martingale
from mcx.report.settled import Settled, right_sides
from mcx.report.underlyings import underlyings
from mcx.report.wording import joined
from mcx.tape.ops import Op
from mcx.tape.program import Tape

FEW_PATHS = 100
LARGE_Z = 4.0


def vol_warnings(market: Market, market_map: MarketMap) -> Iterator[str]:
    """Vols by strike that fit no law: warned of, since quotes of several sources often do not."""
    yield from butterflies(market, market_map.contract, market_map)


def warnings(valuation: Valuation, tape: Tape, martingale: tuple[Martingale, ...], met: bool | None) -> Iterator[str]:
    """What this run shows that a reader must know."""
    if valuation.interrupted:
        yield (f"interrupted after {valuation.price.paths:,} of {valuation.plan.paths:,} paths; the estimate is that "
               f"of the paths so far")
    yield from valuation.plan.warnings
    if valuation.refinement is not None and not valuation.refinement.reached:
        yield (f"the bounds of the price are {valuation.refinement.width.value:.3g} apart by the pilot run, not the "
               f"{valuation.refinement.target:.3g} aimed at: the steps were not refined further than to "
               f"{valuation.refinement.steps}")
    if met is False and not valuation.interrupted:
        yield (f"the precision asked for was not reached: the 95 % half-width is {valuation.price.half_width:.3g}, "
               f"asked for was {valuation.plan.target:.3g}")
    for output, estimate in valuation.of("condition"):
        count = _met(estimate, plain=not valuation.reduction)
        if not output.day and count < FEW_PATHS and tape.instructions[output.value].op is not Op.CONSTANT:
            seen = "no path" if count == 0 else f"only {count} of {estimate.paths:,} paths"
            yield f"{seen} met '{output.subject}': what depends on it is poorly known, and so is the error"
    for test in martingale:
        if abs(test.z) > LARGE_Z:
            yield (f"the mean of {test.asset} is {abs(test.z):.1f} standard errors from its forward: this happens by "
                   f"chance once in {_odds(test.z)} runs")
    jump = _drift(valuation.stages)
    if abs(jump) > LARGE_Z:
        yield (f"the price moved by {abs(jump):.1f} standard errors between half and all of the paths: a few paths "
               f"weigh heavily, and the error is not to be trusted")


def _met(estimate: Estimate, plain: bool) -> int:
    """How many paths met a condition; with variance reduction, how many plain ones would know it as well."""
    if plain or estimate.standard_error == 0.0:
        return round(estimate.value * estimate.paths)
    return round((estimate.value / estimate.standard_error) ** 2)


def _odds(z: float) -> str:
    return f"{1.0 / max(math.erfc(abs(z) / math.sqrt(2.0)), 1e-15):,.0f}"


def _drift(stages: tuple[Estimate, ...]) -> float:
    """The last change of the price in standard errors of that change."""
    if len(stages) < 2:
        return 0.0
    before, now = stages[-2:]
    error = math.sqrt(max(before.standard_error**2 - now.standard_error**2, 0.0))
    return (now.value - before.value) / error if error > 0.0 else 0.0


def assumptions(dated: DatedContract, market: Market, market_map: MarketMap) -> Iterator[str]:
    """What was taken as given without being said for this contract alone."""
    yield from dated.assumptions
    yield from underlyings(dated, market_map)
    contract = dated.contract
    if dated.calendar_version:
        yield f"holidays as listed by {dated.calendar_version}"
    end, last = dated.last, dated.last_paid
    curves = [(f"the rates of {contract.currency}", market.rates[contract.currency], last, "forward rate")]
    if contract.currency in market.funding:
        curves.append((f"the funding spreads of {contract.currency}", market.funding[contract.currency], last,
                       "forward spread"))
    for name in contract.assets:
        asset = market.assets[name]
        curves.append((f"the vols of {name}", asset.vol, end, "vol"))
        quanto = asset.quanto if contract.conversion.get(name) == "quanto" else None
        drifts = ((asset.dividend_yield, "yields", "forward yield"), (asset.forwards, "forwards", "growth"),
                  (quanto and quanto.fx_vol, "vols of the rate of exchange", "vol"))
        for curve, what, held in drifts:
            if curve is not None:
                curves.append((f"the {what} of {name}", curve, end, held))
    curves += [(f"the vols of {rate.name}", rate.vol, end, "vol") for rate in market_map.rates_of_exchange]
    yield from _by_strike({name: market.assets[name].by_strike for name in contract.assets})
    foreign = {asset.currency for asset in market_map.quotes} - {"", contract.currency}
    curves += [(f"the rates of {name}", market.rates[name], end, "forward rate")
               for name in sorted(foreign & set(market.rates))]
    for what, curve, day, held in curves:
        if _ends_before(curve, day.time):
            yield f"{what} end at {curve.nodes[-1].label}; the last {held} is held to {day}"


def _by_strike(vols: Mapping[str, StrikeVols | None]) -> Iterator[str]:
    """Which strike the price takes the vols of, by asset; once for those that take them alike."""
    alike: dict[tuple[str, str, str, bool], list[str]] = {}
    for name, own in vols.items():
        if own is not None:
            shown = (shown_strike(own, strike) for strike in (own.priced_at, own.strikes[0], own.strikes[-1]))
            alike.setdefault((*shown, own.relative), []).append(name)
    for (priced_at, low, high, relative), names in alike.items():
        moves = "a strike in percent goes along where a spot moves" if relative else "strikes stay where a spot moves"
        whose = "its" if len(names) == 1 else "their"
        yield (f"the price takes the vols of {joined(names)} at {priced_at}, as {whose} market says, and so do "
               f"sensitivities, ladders, implied inputs, the input band and other readings; vols are linear in strike "
               f"between the strikes given, flat below {low} and above {high}; the headline's vol stays as it is and "
               f"{moves}")


def _ends_before(curve: Curve, time: float) -> bool:
    return not curve.flat and curve.nodes[-1].time < time - 1e-9


def limits(dated: DatedContract, model: ModelBracket | None = None) -> Iterator[str]:
    """What the model leaves out, as far as it touches this contract; `model` shows how far where vols go by strike."""
    contract, settled = dated.contract, Settled(dated.contract)
    yield ("risk-neutral lognormal levels with one vol for each asset and tenor: no skew, no stochastic vol, no jumps; "
           "rates, yields and dividends are known in advance")
    if model is not None and model.exact:
        yield ("one vol for each asset and tenor cannot do better than the model bracket; the strip, with each payment at "
               "the vol of its own strike, is what vols by strike say of this contract")
    elif model is not None:
        yield ("the model bracket is how far vols by strike leave the price open; one vol for each asset and tenor "
               "cannot do better: neither more paths nor better inputs decide what lies inside it")
    elif _turns(settled):
        yield ("under skew the levels where this contract turns have vols of their own: with vols by strike in the "
               "market 'mcx price' and 'mcx verify' show the model bracket, how far apart they price it")
    if _looks_back(settled):
        yield ("returns from one date to another live on forward vol and forward skew, which one vol for each tenor "
               "does not say: indicative only")
    if len(contract.assets) > 1:
        yield "one fixed correlation for each pair of assets; in falls they usually move more together"
    if contract.notional is not None:
        yield ("no default before maturity beyond the funding spread, and no recovery; what is called protected is a "
               "promise of the issuer")


def _turns(settled: Settled) -> bool:
    """Whether some event or running value hangs on levels passing a threshold."""
    events = settled.contract.payoff.events
    return any(settled.side(event) is None for event in events) or any(
        running.how in ("ever", "always") or (running.formula is not None and running.formula.kind.is_flag)
        for running in settled.running)


def _looks_back(settled: Settled) -> bool:
    """Whether a level is compared with one of an earlier date."""
    formulas = [running.formula for running in settled.running if running.formula is not None]
    formulas += list(settled.lets.values())
    for event in settled.contract.payoff.events:
        formulas += [right for action in settled.actions(event) for right in right_sides(action)]
    return any(isinstance(part, Previous) for formula in formulas for part in walk(settled.formula(formula)))


def cautions(dated: DatedContract, named: bool) -> Iterator[str]:
    """How the number may be used; `named`: probabilities are shown."""
    yield "the error covers sampling only: what the inputs and the model may be wrong by comes on top"
    yield ("the contract file is somebody's reading of the terms: the legal terms and the calculation agent's "
           "determinations prevail")
    if named:
        yield "probabilities are risk-neutral, not forecasts, and no performance scenarios for a client document"
    yield ("an estimate to be reviewed by a licensed professional under local rules; not advice, not an offer, and no "
           "price at which anybody has to deal")
