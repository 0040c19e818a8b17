"""What a contract says, in plain sentences and in a dated table: written from the dated contract, for this contract.

`readback` is the door; `events.py` writes the events, `wording.py` numbers and formulas, and `settled.py` leaves away
what the terms of the contract rule out.
"""

from __future__ import annotations

from collections.abc import Iterator

from mcx.checked.contract import BusinessDays, Figures
from mcx.checked.formula import Number
from mcx.checked.market import Market
from mcx.checked.payoff import Assign, Continuous, Pay, Running
from mcx.dates.dated_contract import DatedContract, DatedEvent, Day, Occasion, Watch
from mcx.leaves.market_map import MarketMap
from mcx.report.events import event_label, event_line
from mcx.report.plausible import implausible
from mcx.report.quotes import quotes
from mcx.report.results import (
    AssetDate,
    DateLine,
    MarketDate,
    PathResult,
    Readback,
    Sentence,
    TermLine,
    WatchLine,
)
from mcx.report.settled import Settled, right_sides
from mcx.report.state import doubted, state_view
from mcx.report.underlyings import underlyings
from mcx.report.wording import Words, days, joined, period
from mcx.tape.steps import PLAIN
from mcx.tape.unroll import Unrolled, unroll

HOW = {"average": "the average of {}", "total": "the sum of {}", "product": "the product of {}",
       "lowest": "the lowest {}", "highest": "the highest {}", "latest": "the latest {}",
       "ever": "true once {}", "always": "true as long as {}"}
FLAGS = ("ever", "always")
CONVERSIONS = {"quanto": "its level counts as quoted, at a fixed rate of exchange (quanto)",
               "composite": "its level is converted at the rate of exchange of the same day (composite)"}
LAWS = {"exact": "the level between two dates is a Brownian bridge in its log, whose extremes have a known law",
        "nearly exact": "the same law for the level without its cash dividends to come, which enter at their mean over "
                        "each step between two dates",
        "bracketed": "of each asset the law of a bridge between two dates is known, of several together only bounds; "
                     "the price is the middle of the two, and how far they are apart stands beside it",
        "unread": "nothing depends on it"}
ENTERS = {False: "payments weigh the chance that it is reached", True: "drawn on each path"}


def readback(dated: DatedContract, market: Market | None, path: PathResult | None = None) -> Readback:
    """Everything that the contract says; with a market also what the market says on its dates."""
    contract = dated.contract
    words, settled = Words(dated), Settled(contract)
    market_map = MarketMap.of(market, dated) if market else None
    nodes, makeup = (market_map.nodes(), market_map.makeup()) if market_map else ((), PLAIN)
    unrolled = unroll(dated, nodes=nodes, makeup=makeup, given=path is not None)
    return Readback(
        contract=contract.title,
        payoff=contract.payoff.name,
        about=contract.payoff.about,
        facts=tuple(_facts(dated)),
        terms=tuple(TermLine(term.name, term.type, words.term(term), term.about) for term in contract.payoff.terms),
        lets=tuple(Sentence(name, words.formula(formula)) for name, formula in settled.lets.items()),
        running=tuple(Sentence(running.name, _running(running, dated, words, settled)) for running in settled.running),
        events=tuple(event_line(event, dated, words, settled) for event in contract.payoff.events),
        watches=tuple(_watches(dated, settled, unrolled)),
        dates=tuple(_dates(dated, words, settled)),
        warnings=(*implausible(dated, market_map),
                  *(doubted(dated, unrolled.state, market_map) if market_map else ())),
        assumptions=(*dated.assumptions, *(underlyings(dated, market_map) if market_map else ())),
        quotes=tuple(quotes(market_map)) if market_map else (),
        market=tuple(_market(dated, market_map)) if market_map else (),
        path=path,
        state=state_view(dated, unrolled, market_map) if market_map and dated.valuation else None,
    )


def _facts(dated: DatedContract) -> Iterator[Sentence]:
    """The contract's own lines, beside its terms."""
    contract = dated.contract
    yield Sentence("currency", contract.currency)
    if contract.notional is not None:
        yield Sentence("notional", f"{contract.notional:,.15g} {contract.currency}; amounts are multiples of it")
    else:
        yield Sentence("units", f"{contract.units:,.15g}; amounts are {contract.currency} for each unit")
    yield Sentence("assets", joined(contract.assets))
    if contract.conversion:
        said = (f"{name}: {CONVERSIONS[how]}" for name, how in contract.conversion.items())
        yield Sentence("conversion", "; ".join(said))
    if contract.start is not None:
        yield Sentence("start", str(dated.start))
    if contract.day_count:
        yield Sentence("day count", contract.day_count)
    if contract.settlement is not None:
        yield Sentence("settlement", f"{period(contract.settlement)} after the date, unless an event says otherwise")
    elif contract.textbook:
        yield Sentence("settlement", "paid on the spot")
    if contract.calendar is not None:
        version = f" ({dated.calendar_version})" if dated.calendar_version else ""
        yield Sentence("calendar", _calendar(contract.calendar) + version)
        yield Sentence("payment calendar", _calendar(contract.payment_calendar) if contract.payment_calendar else
                       "payments go by the same calendar")


def _calendar(stated: BusinessDays) -> str:
    """Which days are good, and how others roll."""
    listed = "weekends only" if stated.holidays == ("none",) else joined(stated.holidays)
    both = f", open in {'any' if stated.in_any else 'all'} of them" if len(stated.holidays) > 1 else ""
    extra = f", and closed on {joined([str(day) for day in stated.extra])}" if stated.extra else ""
    return f"{listed}{both}{extra}, {stated.roll}"


def _running(running: Running, dated: DatedContract, words: Words, settled: Settled) -> str:
    """A running value in one sentence."""
    start = None if running.start is None else settled.formula(running.start)
    given = start is not None and not any(
        name in words.terms and name not in dated.contract.terms for name in settled.names(start))
    first = words.formula(start) if given else ""
    if running.how == "set":
        return f"starts at {first}; events change it"
    formula = settled.formula(running.formula)
    what = HOW[running.how].format(words.formula(formula))
    if running.how == "total" and (formula.kind.is_flag or isinstance(formula, Number)):
        what = f"how often {words.formula(formula)}" if formula.kind.is_flag else \
            f"{words.formula(formula)} for each date"
    earlier = f"; {first} counts as an earlier value" if given else ""
    when = _when(running, dated)
    how = when if when.startswith("watched") else f"{'observed' if running.how in FLAGS else 'so far,'} {when}"
    return f"{what}, {how}{earlier}"


def _when(running: Running, dated: DatedContract) -> str:
    """The dates or the stretch of a running value."""
    watch = next((watch for watch in dated.watches if watch.running.name == running.name), None)
    if watch is not None:
        return f"watched all the time from {watch.start} to {watch.end}"
    on = [update.occasion.day for moment in dated.moments for update in moment.updates
          if update.running.name == running.name]
    name = "" if isinstance(running.at, Continuous) else f" (see '{running.at.name}')"
    return f"on {days(on)}{name}" if on else "on no date"


def _watches(dated: DatedContract, settled: Settled, unrolled: Unrolled) -> Iterator[WatchLine]:
    """For every watch whether it is exact, refused, or read by nothing."""
    continuous = {watch.running.name: watch for watch in dated.watches}
    notes = {note.name: note for note in unrolled.watches}
    wanted = {running.name for running in settled.running}
    for running in dated.contract.payoff.running:
        watch = continuous.get(running.name)
        if watch is not None:
            yield _continuous(watch, running.name in wanted, notes, unrolled)
        elif running.name in wanted and _is_watch(running, dated):
            yield WatchLine(running.name, _when(running, dated), "exact", "observed on dates, all of them simulated")


def _continuous(watch: Watch, wanted: bool, notes: dict, unrolled: Unrolled) -> WatchLine:
    name, when = watch.running.name, f"all the time from {watch.start} to {watch.end}"
    if not wanted:
        return WatchLine(name, when, "unread", LAWS["unread"])
    if unrolled.faults:
        return WatchLine(name, when, "refused", "; ".join(map(str, unrolled.faults)))
    note = notes[name]
    if note.law == "unread":
        return WatchLine(name, when, note.law, LAWS[note.law])
    by = joined(f"the {side}est level of {asset}" for asset, side in note.sides)
    return WatchLine(name, when, note.law, f"by {by}: {LAWS[note.law]}; {ENTERS[note.drawn]}")


def _is_watch(running: Running, dated: DatedContract) -> bool:
    if running.at is None or isinstance(running.at, Continuous):
        return False
    term = dated.contract.payoff.term(running.at.name)
    return term is not None and term.type == "watch"


def _dates(dated: DatedContract, words: Words, settled: Settled) -> Iterator[DateLine]:
    """Everything that is observed, decided and paid, in order of time; on one date as it happens."""
    wanted = {running.name for running in settled.running}
    read = [watch for watch in dated.watches if watch.running.name in wanted]
    ends = [(watch.start, "the watch begins", watch) for watch in read]
    ends += [(watch.end, "the watch ends", watch) for watch in read]
    ends.sort(key=lambda item: item[0].time)
    fixed = sorted(dated.levels_fixed, key=lambda item: item[1].time)
    for moment in dated.moments:
        while fixed and fixed[0][1].time <= moment.day.time:
            name, day = fixed.pop(0)
            yield DateLine(str(day), 0, f"{name} observed", "", "")
        while ends and ends[0][0].time < moment.day.time:
            yield _watch_line(*ends.pop(0))
        for update in moment.updates:
            if update.running.name in wanted:
                yield _line(update.occasion, f"{update.running.name} observed", "", words,
                            settled.names(update.running.formula))
        while ends and ends[0][0].time == moment.day.time:
            yield _watch_line(*ends.pop(0))
        for event in moment.events:
            if actions := settled.actions(event.event):
                formulas = [event.event.condition, *(right for action in actions for right in right_sides(action))]
                yield _line(event.occasion, _what(event, settled), _paid(event, settled), words,
                            settled.names(*formulas))
    for item in ends:
        yield _watch_line(*item)


def _watch_line(day: Day, what: str, watch: Watch) -> DateLine:
    return DateLine(str(day), 0, f"{watch.running.name}: {what}", "", "")


def _line(occasion: Occasion, what: str, paid: str, words: Words, names: Iterator[str]) -> DateLine:
    terms = []
    for name in dict.fromkeys(names):
        value, term = words.contract.terms.get(name), words.terms.get(name)
        if isinstance(value, Figures) and len(value.rows) > 1 and term.per in occasion.dates:
            terms.append(f"{name} {words.on_date(name, occasion.dates[term.per])}")
    return DateLine(str(occasion.day), occasion.nth, what, ", ".join(terms), paid)


def _what(event: DatedEvent, settled: Settled) -> str:
    """What an event is about: its name and, without one, its legs or the values it sets."""
    if event.event.name:
        return event_label(event.event)
    legs = [f"{action.leg} paid" for action in settled.actions(event.event) if isinstance(action, Pay)]
    values = [f"{name} set" for action in settled.actions(event.event) if isinstance(action, Assign)
              for name, _ in action.values]
    return ", ".join(dict.fromkeys(legs + values)) or "end"


def _paid(event: DatedEvent, settled: Settled) -> str:
    due = [event.due[action] for action in settled.actions(event.event) if isinstance(action, Pay)]
    return ", ".join(str(day) for day in sorted(set(due), key=lambda day: day.time))


def _market(dated: DatedContract, market: MarketMap) -> Iterator[MarketDate]:
    """Forwards, vols and discount factors on every date of the contract from the valuation date on."""
    observed = {moment.day for moment in dated.moments}
    observed |= {day for watch in dated.watches for day in (watch.start, watch.end)}
    due = {day for moment in dated.moments for event in moment.events for day in event.due.values()}
    for day in sorted({day for day in observed | due if day.time >= 0.0}, key=lambda day: day.time):
        assets = dated.contract.assets if day in observed else ()
        yield MarketDate(
            date=str(day),
            discount_factor=market.discount(day.time),
            funded_discount_factor=market.funded_discount(day.time),
            assets=tuple(AssetDate(asset, market.forward(asset, day.time), market.vol_to(asset, day.time))
                         for asset in assets),
        )
