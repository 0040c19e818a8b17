"""The state of a contract that has lived for a while: what has happened, what is owed, what accrues."""

from __future__ import annotations

from collections.abc import Iterator

from mcx.checked.payoff import Pay
from mcx.dates.accrual import by_calendar_days, part_passed
from mcx.dates.dated_contract import DatedContract, Day
from mcx.estimators.ready import Ready
from mcx.leaves.market_map import WEEKLY, MarketMap
from mcx.report.distances import distances
from mcx.report.events import event_label
from mcx.report.results import Owed, Payment, Sentence
from mcx.report.state_results import Fixed, PastLine, StatedLine, StateView
from mcx.report.wording import figure, joined
from mcx.tape.state import State
from mcx.tape.unroll import Unrolled


def owed(ready: Ready) -> tuple[Owed, ...]:
    """Amounts that are fixed and not yet paid, in order of their payment."""
    return owed_amounts(ready.dated, ready.unrolled.state, ready.market)


def owed_amounts(dated: DatedContract, state: State, market: MarketMap) -> tuple[Owed, ...]:
    """As `owed`."""
    size = dated.contract.size
    found = sorted((each for each in state.payments if each.owed and each.amount), key=lambda each: each.due.time)
    return tuple(
        Owed(str(each.due), each.pay.leg, str(each.day), each.amount, each.amount * size,
             each.amount * size * float(market.funded_discount(each.due.time))) for each in found)


def accrued(dated: DatedContract, state: State) -> float:
    """Interest of certain coupons in the period that runs on the valuation date, in the unit of the price: the coupon
    times the part of its period that has passed."""
    return sum((each.amount * part_passed(dated, each.occasion, each.since) for each in state.accruing), 0.0)


def standing(ready: Ready) -> Iterator[str]:
    """What is nearly exact or counted otherwise than the contract says; shares that are owed; that a contract has ended
    or run out, and what is still to come of it."""
    state = ready.unrolled.state
    yield from _dividends_watched(ready)
    yield from to_deliver(ready.dated, state)
    for leg in dict.fromkeys(action.leg for action in state.uncounted):
        yield (f"how many shares '{leg}' delivers is not fixed yet: fractions are taken to be delivered as well, not "
               "paid in cash")
    for why in dict.fromkeys(by_calendar_days(ready.dated, each.occasion) for each in state.accruing):
        if why:
            yield f"interest accrues by calendar days: {why}"
    if state.ended is None:
        last = ready.dated.last_paid
        if last.time < 0.0:
            yield f"all dates of the contract have passed, the last of them on {last}: it is worth nothing any more"
        return
    due = [str(each.due) for each in state.payments if each.owed and each.amount]
    left = f"what is owed until {max(due)} is all that it is worth" if due else "nothing is owed any more"
    yield f"the contract ended on {state.ended}, by its fixings: {left}"


def doubted(dated: DatedContract, state: State, market: MarketMap) -> Iterator[str]:
    """Statements that nothing was reached by the end of the valuation date where today's level says that it was."""
    scale = dated.history.scale or (1.0,) * len(dated.contract.assets)
    for claim in state.denied:
        for line in sorted(claim.lines, key=lambda line: (line.asset, line.op, line.level)):
            asset = dated.contract.assets[line.asset]
            today = market.forward(asset, 0.0) * scale[line.asset]
            if line.reached(today):
                yield (f"{claim.words}, but today's level of {asset}, {figure(today)}, has reached "
                       f"{figure(line.level)}: the contract is valued as reached today; check the spot, or the "
                       "statement")


def _dividends_watched(ready: Ready) -> Iterator[str]:
    """Assets whose cash dividends make the law of a continuous watch nearly exact, with the longest step."""
    steps = ready.market.makeup().cash
    for number, name in enumerate(ready.dated.contract.assets):
        watches = [note.name for note in ready.unrolled.watches if name in dict(note.sides)]
        if number in steps and watches:
            yield (f"in the continuous watch of {joined(watches)} the cash dividends of {name} to come count at their "
                   f"mean over each step, of at most a {'week' if steps[number] == WEEKLY else 'month'}: nearly exact")


def to_deliver(dated: DatedContract, state: State) -> Iterator[str]:
    """Shares that are certain and not yet delivered."""
    for each in state.deliveries:
        if each.due.time >= 0.0:
            asset = dated.contract.assets[each.asset]
            unit = "unit" if dated.contract.notional is None else "note"
            cash = f", and {figure(each.fraction)} of one in cash at the level of {each.day}" if each.fraction else ""
            yield f"owed on {each.due}: {figure(each.whole)} shares of {asset} for each {unit}{cash}"


def state_view(dated: DatedContract, unrolled: Unrolled, market: MarketMap) -> StateView:
    """Everything that the past has settled, for the readback; of a contract that cannot be simulated only why it is not
    followed, and what was stated."""
    state = unrolled.state
    contract = dated.contract
    paid = [each for each in state.payments if not each.owed and each.amount]
    return StateView(
        valuation=str(Day(0.0, dated.valuation)),
        fixings=tuple(_fixings(dated, state)),
        past=tuple(PastLine(str(each.day), event_label(each.event), _held(each.held))
                   for each in state.events if each.event.condition is not None or each.event.name),
        stated=tuple(StatedLine(str(date), name, _values(dated, name, (known.value,)))
                     for name, dates in contract.happened.items() for date, known in sorted(dates.items())),
        paid=tuple(Payment(str(each.due), each.pay.leg, each.amount, each.amount * contract.size) for each in paid),
        owed=owed_amounts(dated, state, market),
        to_deliver=tuple(to_deliver(dated, state)),
        accrued=accrued(dated, state),
        running=tuple(Sentence(name, _values(dated, name, values))
                      for name, values in (state.terms | state.running).items()),
        ended=str(state.ended or ""),
        next=() if unrolled.faults else tuple(_next(dated, state)),
        distances=() if unrolled.faults else tuple(distances(dated, state, market)),
        not_followed=tuple(fault.text for fault in unrolled.faults),
    )


def _held(held: bool | None) -> str:
    return "by today's level" if held is None else "yes" if held else "no"


def _fixings(dated: DatedContract, state: State) -> Iterator[Fixed]:
    """The levels of the past that were read, as they count."""
    for (day, number), level in sorted(state.fixings.items(), key=lambda item: (item[0][0].time, item[0][1])):
        yield Fixed(str(day), dated.contract.assets[number], level)


def _values(dated: DatedContract, name: str, values: tuple[float, ...]) -> str:
    """The numbers of a running value or an observed level; flags in words."""
    running = next((each for each in dated.contract.payoff.running if each.name == name), None)
    formula = running and (running.start if running.how == "set" else running.formula)
    flag = formula is not None and formula.kind.is_flag and running.how != "total"
    shown = [("yes" if value else "no") if flag else figure(value) for value in values]
    return shown[0] if len(shown) == 1 else ", ".join(
        f"{asset} {each}" for asset, each in zip(dated.contract.assets, shown, strict=True))


def _next(dated: DatedContract, state: State) -> Iterator[Sentence]:
    """The next date on which something is observed, and the next payment that is possible."""
    later = [moment for moment in dated.moments if moment.day.time > 0.0] if state.ended is None else []
    if later:
        moment = later[0]
        what = [event_label(each.event) for each in moment.events]
        what += [f"{each.running.name} observed" for each in moment.updates]
        yield Sentence("observation", f"{moment.day}: {', '.join(dict.fromkeys(what))}")
    due = {each.due for each in state.payments if each.owed and each.amount}
    due |= {day for moment in later for each in moment.events for pay, day in each.due.items() if isinstance(pay, Pay)}
    if due:
        yield Sentence("payment", str(min(due, key=lambda day: day.time)))
