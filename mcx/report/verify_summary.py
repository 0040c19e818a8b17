"""From what the estimators found about a quote to the result of `mcx verify`."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

from mcx.checked.contract import Contract
from mcx.checked.dealer_quote import DealerQuote
from mcx.checked.market import Market
from mcx.estimators.footing import reference_shifts
from mcx.estimators.levers import SHARES, Lever, without_lever
from mcx.estimators.ready import Ready
from mcx.estimators.readings import ReadingNotValued
from mcx.estimators.roots import Solution
from mcx.estimators.term import Solved
from mcx.estimators.verify import BID_OFFER, INPUTS, MODEL, SAMPLING, TOLERANCE, Band, Implied, Joint, Verification
from mcx.leaves.jacobian import moved
from mcx.leaves.market_map import MarketMap
from mcx.report.cautions import assumptions, cautions, limits, vol_warnings
from mcx.report.model_results import ModelBracketResult, model_bracket_result
from mcx.report.results import Amount, Planned
from mcx.report.state import doubted, standing
from mcx.report.summary import NO_REDUCTION
from mcx.report.verify_results import (
    NO_EFFECT,
    NONE_THERE,
    BandLine,
    FootingLine,
    Gap,
    ImpliedInput,
    InputEffect,
    JointInput,
    JointMove,
    MarginResult,
    Money,
    PaymentBounds,
    QuoteSaid,
    Ranked,
    ReadingLine,
    SolvedTerm,
    VerifyResult,
    VerifyTable,
    WorstCorner,
)
from mcx.report.wording import joined

LARGE_Z = 4.0
HELD_BY = {SAMPLING: "the sampling error", BID_OFFER: "half the bid-offer", INPUTS: "the 90 % input band",
           TOLERANCE: "the stated tolerance", MODEL: "the model bracket"}


def verify_result(ready: Ready, market: Market, found: Verification, solve: str, target: float | None) -> VerifyResult:
    """Everything that a verification says, with what must stand beside it."""
    dated, contract, quote, foot = ready.dated, ready.dated.contract, found.quote, found.footing
    valuation, plan = found.valuation, found.valuation.plan
    price, compared, gap = valuation.price, found.compared, found.gap
    life = next(estimate for _, estimate in valuation.of("life"))
    percent = contract.notional is not None
    z = gap.z(0.0)
    return VerifyResult(
        contract=contract.title,
        payoff=contract.payoff.name,
        valuation=None if dated.valuation is None else dated.valuation.isoformat(),
        currency=contract.currency,
        notional=contract.notional,
        units=contract.units,
        unit="notional" if percent else "currency per unit",
        quote=_said(quote),
        footing=tuple(FootingLine(step.name, step.text, step.value, step.error) for step in foot.steps),
        mid=foot.mid,
        bid=foot.bid,
        ask=foot.ask,
        price=price.value,
        standard_error=price.standard_error,
        compared=compared.value,
        compared_standard_error=compared.standard_error,
        gap=Gap(gap.value, gap.standard_error, z if math.isfinite(z) else None, gap.value * contract.size, found.rest),
        bands=tuple(BandLine(band.name, band.half_width, band.holds) for band in found.bands),
        model_bracket=_model(found, ready, market),
        verdict=verdict(found.bands, gap.value, contract.currency if not percent else "", found.rest),
        leads=tuple(_leads(found, contract.currency if not percent else "")),
        explained=any(band.holds for band in found.bands),
        inputs=tuple(InputEffect(each.lever.name, each.lever.subject, min(filter(None, each.lever.widths)),
                                 each.change.value, each.change.standard_error, each.note) for each in found.effects),
        worst_corner=_corner(found),
        implied=tuple(line for implied in found.implied for line in _implied(implied)),
        joint=_joint(found.joint),
        readings=tuple(_readings(found)),
        money=_money(found, contract.size),
        margin=_margin(found),
        solved=tuple(_solved(found.solved)) if found.solved else (),
        expected_life=life.value,
        paths=price.paths,
        seconds=valuation.seconds + found.seconds,
        seed=valuation.seed,
        reduction=NO_REDUCTION,
        solve=solve,
        target=target,
        planned=Planned(plan.asked, plan.paths, plan.pilot_paths, plan.target,
                        None if plan.target is None else price.half_width <= plan.target),
        warnings=(*_warnings(found, market, contract), *doubted(dated, ready.unrolled.state, ready.market),
                  *vol_warnings(market, ready.market)),
        assumptions=tuple(dict.fromkeys(
            (*standing(ready), *assumptions(dated, market, ready.market), *CONVENTIONS))),
        limits=tuple(limits(dated, found.model)),
        cautions=tuple(cautions(dated, named=False)),
        calendar_version=dated.calendar_version,
    )


CONVENTIONS = (
    "input band: inputs independent and normal, each curve moving as a whole, by half-widths that the market states",
    "an implied input is moved alone, the whole curve alike (forwards by a share), all else as the market says",
)


def verdict(bands: Sequence[Band], gap: float, currency: str, rest: float | None = None) -> str:
    """One sentence: which bands hold the gap, which do not, or that none does; likewise of the `rest` of it where each
    strike at its own vol is the price."""
    size = _size(gap, currency)
    judged = [band for band in bands if rest is None or band.name != MODEL]  # whose strip is taken off already
    inside = [HELD_BY[band.name] for band in judged if band.holds]
    outside = [HELD_BY[band.name] for band in judged if band.holds is False]
    taken = f"With each strike at its own vol {_size(rest or 0.0, currency)} of the gap of {size}"
    if rest is not None and not inside:
        return f"{taken} is left, and nothing that was stated holds it: it is outside {joined(outside, 'and')}."
    if not inside:
        return f"Nothing that was stated holds the gap of {size}: it is outside {joined(outside, 'and')}."
    tail = f", outside {joined(outside, 'and')}" if outside else ""
    if rest is not None:
        return f"{taken} is left; it is inside {joined(inside, 'and')}{tail}."
    return f"The gap of {size} is inside {joined(inside, 'and')}{tail}."


def _size(gap: float, currency: str) -> str:
    return f"{gap:+,.6g} {currency} per unit" if currency else f"{1e4 * gap:+,.1f} bp"


def _model(found: Verification, ready: Ready, market: Market) -> ModelBracketResult | None:
    """The model bracket about our price at the spots of the quote."""
    if found.model is None:
        return None
    there = moved(market, reference_shifts(found.quote, market, ready.dated.contract))
    return model_bracket_result(found.model, ready, MarketMap.of(there, ready.dated), found.compared.value)


def _leads(found: Verification, currency: str) -> Iterator[str]:
    """What closes the gap by itself; `currency` '' where prices are in percent."""
    if found.rest is not None:
        low, high = found.model.settled
        sizes = dict.fromkeys(_size(end, currency) for end in (low, high))
        yield (f"With each strike at its own vol the contract needs no model of levels: that adds {' to '.join(sizes)} "
               f"to our price. What is implied or read otherwise below is by the headline's vol.")
    elif [band.name for band in found.bands if band.holds] == [MODEL]:
        yield ("Explained by the model bracket alone: a dealer who prices the skew may be there; one vol for each "
               "tenor cannot say whether that is right.")
    if found.closing:
        yield f"Read otherwise it would be closed: {joined(found.closing, 'or')}."
    elif found.readings.readings:
        yield "None of the other readings that the definition lists closes it."
    inside = [f"{implied.lever.name} of {implied.lever.subject}" for implied in found.implied
              if any(implied.plausible(each) for each in implied.solutions.found)]
    if all(implied.lever.width is None for implied in found.implied):
        yield "No uncertainty of any input is stated: what an input would have to be cannot be called plausible or not."
    elif inside:
        yield f"One input inside its stated uncertainty meets the quote: {joined(inside, 'or')}."
    else:
        at = "" if found.rest is None else " by the headline's vol"
        yield f"No single input meets the quote inside its stated uncertainty{at}."


def _said(quote: DealerQuote) -> QuoteSaid:
    return QuoteSaid(quote.who, quote.at, quote.side, quote.unit, "clean" if quote.clean else "dirty",
                     "firm" if quote.firm else "indicative", quote.price, quote.bid, quote.ask, quote.size,
                     quote.source, str(quote.place))


def _corner(found: Verification) -> WorstCorner | None:
    if found.corner is None:
        return None
    price = found.corner.price
    way = price.value - found.compared.value
    open_gap = found.gap.value if found.rest is None else found.rest
    reaches = way * open_gap >= 0.0 and abs(way) >= abs(open_gap)
    return WorstCorner(price.value, price.standard_error, reaches, found.corner.share)


def _implied(implied: Implied) -> Iterator[ImpliedInput]:
    lever, found = implied.lever, implied.solutions
    shown = lever.shown
    measure, tenor = ("move", "") if shown is None else ("level", shown.tenor)
    for each in found.found:
        value = each.move if shown is None else lever.level(each.move)
        scale = shown.value if shown is not None and lever.kind in SHARES else 1.0
        yield ImpliedInput(lever.name, lever.subject, value, each.error * scale, implied.plausible(each), measure,
                           each.move, tenor, found.low, found.high, each.z, "")
    if not found.found:
        note = NONE_THERE if found.moves_price else NO_EFFECT
        yield ImpliedInput(lever.name, lever.subject, None, None, None, measure, None, tenor, found.low, found.high,
                           None, note)


def _joint(joint: Joint | None) -> JointMove | None:
    if joint is None:
        return None
    return JointMove(joint.size, tuple(JointInput(lever.name, lever.subject, share, share * _width(lever))
                                       for lever, share in joint.shares), joint.z)


def _width(lever: Lever) -> float:
    return min(width for width in lever.widths if width is not None)


def _readings(found: Verification) -> Iterator[ReadingLine]:
    for each in found.readings.readings:
        price, difference = each.price, each.difference
        note = "" if each.differs else "no path tells it from the contract"
        yield ReadingLine(each.name, each.about, price.value, price.standard_error, difference.value,
                          difference.standard_error, found.left(each).value, each.name in found.closing, note)
    for each in found.readings.same:
        yield _not_valued(each, "says of this contract what it says already")
    for each in found.readings.refused:
        yield _not_valued(each, "; ".join(map(str, each.faults)))


def _not_valued(each: ReadingNotValued, note: str) -> ReadingLine:
    return ReadingLine(each.name, each.about, None, None, None, None, None, False, note)


def _money(found: Verification, size: float) -> Money:
    money, valuation = found.money, found.valuation
    legs, parts = (tuple(Amount(output.subject, each.value, each.standard_error, each.value * size)
                         for output, each in valuation.of(kind)) for kind in ("leg", "part"))
    funding = money.funding
    return Money(_finite(money.floor.value), _finite(money.most.value), parts, legs, funding and funding.value,
                 funding and funding.standard_error,
                 tuple(PaymentBounds(each.leg, each.part, str(each.decided), str(each.due), _finite(each.least),
                                     _finite(each.most)) for each in money.payments))


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _margin(found: Verification) -> MarginResult | None:
    margin = found.money.margin
    if margin is None:
        return None
    return MarginResult(found.quote.issue_price, found.valuation.ready.dated.begun, margin.amount.value,
                        margin.amount.standard_error, margin.share.value, margin.currency.value,
                        margin.currency.standard_error, margin.per_year.value, margin.per_year.standard_error)


def _solved(solved: Solved) -> Iterator[SolvedTerm]:
    found = solved.solutions

    def line(each: Solution | None, note: str = "") -> SolvedTerm:
        numbers = (None,) * 4 if each is None else (each.move, each.error, each.slope, each.z)
        return SolvedTerm(solved.term.name, solved.target, solved.stated, *numbers, found.low, found.high,
                          solved.together, solved.term.type == "percent", note)

    for each in found.found:
        yield line(each)
    if not found.found:
        yield line(None, NONE_THERE if found.moves_price else NO_EFFECT)


def _warnings(found: Verification, market: Market, contract: Contract) -> Iterator[str]:
    quote = found.quote
    yield from found.valuation.plan.warnings
    if fixed := without_lever(market, contract):
        names = ", ".join(dict.fromkeys(f"{number.kind} of {number.subject}" for number in fixed))
        yield f"taken as it stands, neither implied nor in the input band: {names}"
    if market.valuation is not None and quote.date != market.valuation.isoformat():
        yield f"the quote is of {quote.date}, the market of {market.valuation}: the gap holds what happened in between"
    if not quote.firm:
        yield "the quote is indicative: nobody has to deal at it"
    if found.unstated:
        names = ", ".join(f"{lever.name} of {lever.subject}" for lever in found.unstated)
        yield f"no uncertainty is stated for {names}: the input band leaves it out"
    for implied in found.implied:
        for each in implied.solutions.found:
            if abs(each.z) > LARGE_Z:
                yield (f"fresh numbers do not confirm the {implied.lever.name} of {implied.lever.subject}: they are "
                       f"{abs(each.z):.1f} errors away")


def verify_table(results: Sequence[VerifyResult], not_verified: Sequence[str] = ()) -> VerifyTable:
    """Several quotes, ranked for each contract by their middle on our footing, and those without a verdict."""
    ranking = []
    for title in dict.fromkeys(result.contract for result in results):
        here = sorted((result for result in results if result.contract == title), key=lambda result: -result.mid)
        ranking += [_ranked(rank, result) for rank, result in enumerate(here, start=1)]
    return VerifyTable(tuple(results), tuple(ranking), tuple(not_verified))


def _ranked(rank: int, result: VerifyResult) -> Ranked:
    found = [each for each in result.implied if (each.input, each.asset) == ("funding", result.currency)
             and each.value is not None]
    only = found[0] if len(found) == 1 else None
    return Ranked(rank, result.contract, result.quote.dealer, result.mid, result.bid, result.ask, result.gap.price,
                  result.gap.rest, result.explained, only and only.value, only and only.standard_error)
