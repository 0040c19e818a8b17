"""The sentences of events: when, under which condition, what is paid and set, and what an end does to it."""

from __future__ import annotations

from collections.abc import Iterable

from mcx.checked.formula import Binary, Formula, IfElse, Number
from mcx.checked.payoff import Action, Assign, Deliver, End, Event, Pay
from mcx.dates.dated_contract import DatedContract, Day
from mcx.report.results import EventLine
from mcx.report.settled import Settled
from mcx.report.wording import MOST_LISTED, Words, counted, days, figure, joined, period

PARTS = {"first": "the first date of ", "last": "the last date of ", "but_first": "", "but_last": ""}
ENDS = "the contract ends: nothing later is observed or newly owed, what is already owed is still paid"
STILL = "It still happens on a date on which {} ends the contract."
NO_LONGER = "It no longer happens on a date on which {} has ended the contract."


def event_label(event: Event) -> str:
    """An event's name; without one its legs, or the values that it sets."""
    actions = (*event.then, *event.otherwise)
    legs = dict.fromkeys(action.leg for action in actions if isinstance(action, Pay))
    values = dict.fromkeys(name for action in actions if isinstance(action, Assign) for name, _ in action.values)
    return event.name or joined(legs) or (f"{joined(values)} set" if values else "end")


def event_line(event: Event, dated: DatedContract, words: Words, settled: Settled) -> EventLine:
    """An event of the contract in words."""
    on = _days_of(event, dated)
    name = event_label(event)
    side = settled.side(event)
    if not on:
        return EventLine(name, f"Never in this contract: {_schedule(event)} has no such date.", ())
    then = _doing(event.then, event, dated, words, settled)
    otherwise = _doing(event.otherwise, event, dated, words, settled)
    when = _when(event, on, dated)
    if side is None:
        text = f"{when}, if {words.formula(settled.formula(event.condition))}: {then}."
        text += f" Otherwise: {otherwise}." if otherwise else ""
    elif side or otherwise:
        text = f"{when}: {then if side else otherwise}."
    else:
        return EventLine(name, "Never in this contract: its terms rule the condition out.", ())
    return EventLine(name, text, tuple(_at_the_end(event, dated, settled)))


def _days_of(event: Event, dated: DatedContract) -> list[Day]:
    return [each.occasion.day for moment in dated.moments for each in moment.events if each.event is event]


def _schedule(event: Event) -> str:
    part = f".{event.at.part}" if event.at.part else ""
    since = f" from {event.since} on" if event.since else ""
    until = f" until {event.until}" if event.until else ""
    return f"{event.at.name}{part}{since}{until}"


def _when(event: Event, on: list[Day], dated: DatedContract) -> str:
    """'On each of 9 dates of observations from first_call on (…)', 'On expiry (2027-12-01)'."""
    if event.at.part == "once":
        return f"Once {event.at.name} first holds"
    narrowed = f" from {event.since} on" if event.since in dated.schedules else ""
    narrowed += f" until {event.until}" if event.until in dated.schedules else ""
    if len(on) == 1:
        return f"On {PARTS.get(event.at.part, '')}{event.at.name}{narrowed} ({on[0]})"
    but = {"but_first": " but the first", "but_last": " but the last"}.get(event.at.part, "")
    listed = f"{on[0]} to {on[-1]}" if len(on) > MOST_LISTED else days(on)
    return f"On each of {counted(len(on), 'date')} of {event.at.name}{but}{narrowed} ({listed})"


def _doing(actions: Iterable[Action], event: Event, dated: DatedContract, words: Words, settled: Settled) -> str:
    """What one side of an event does."""
    done = []
    for action in actions:
        match action:
            case Deliver():
                done.append(_delivering(action, event, dated, words, settled))
            case Pay():
                done.append(_paying(action, event, dated, words, settled))
            case Assign(values=pairs):
                done.append(joined(f"{name} becomes {words.formula(settled.formula(right))}" for name, right in pairs))
            case End():
                done.append(ENDS)
    return "; ".join(done)


def _paying(pay: Pay, event: Event, dated: DatedContract, words: Words, settled: Settled) -> str:
    amount = settled.formula(pay.amount)
    if isinstance(amount, Number) and amount.value == 0.0:
        return "pays nothing"
    leg = f" as '{pay.leg}'" if pay.leg != "payment" else ""
    part = f" (part: {pay.part})" if pay.part and pay.part != pay.leg else ""
    return f"pays {_amount(amount, dated, words)}{leg}{part}, {_due(pay, event, dated)}"


def _delivering(action: Deliver, event: Event, dated: DatedContract, words: Words, settled: Settled) -> str:
    """How many shares of which assets."""
    leg = f" as '{action.leg}'" if action.leg != "payment" else ""
    which = "" if action.which is None else f" of each asset of which {words.formula(settled.formula(action.which))}"
    unit = "for each unit" if dated.contract.notional is None else "for each unit of the notional"
    return (f"delivers {words.formula(settled.formula(action.amount))} shares {unit}{which}{leg}, worth their level "
            f"then, fractions in cash, {_due(action, event, dated)}")


def _amount(amount: Formula, dated: DatedContract, words: Words) -> str:
    if dated.contract.notional is None:
        return f"{words.formula(amount)} for each unit"
    if isinstance(amount, Number):
        return f"{figure(amount.value, 'percent')} of the notional"
    text = words.formula(amount)
    bracketed = f"({text})" if isinstance(amount, IfElse | Binary) else text
    return f"{bracketed} times the notional"


def _due(pay: Pay, event: Event, dated: DatedContract) -> str:
    """When an amount is paid, in words."""
    settlement = dated.contract.settlement
    if pay.due in dated.schedules:
        listed = dated.schedules[pay.due]
        return f"due on {pay.due} ({listed[0]})" if len(listed) == 1 else f"due on the same date of {pay.due}"
    if pay.due == "same day" or settlement is None or settlement.count == 0:
        return "due the same day"
    return f"due {period(settlement)} later"


def _at_the_end(event: Event, dated: DatedContract, settled: Settled) -> Iterable[str]:
    """Whether the event still happens on a date on which another ends the contract; only where dates are shared."""
    events = dated.contract.payoff.events
    own = set(_days_of(event, dated))
    before, after = [], []
    for other in events:
        ends = any(isinstance(action, End) for action in settled.actions(other))
        if ends and other is not event and own & set(_days_of(other, dated)):
            label = f"'{event_label(other)}'"
            (before if events.index(event) < events.index(other) else after).append(label)
    if before:
        yield STILL.format(joined(before, "or"))
    if after:
        yield NO_LONGER.format(joined(after, "or"))
