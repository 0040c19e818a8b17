"""What comes next of several contracts: `mcx readback --calendar`."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from mcx.checked.contract import LevelFixing
from mcx.checked.payoff import End, Pay
from mcx.dates.dated_contract import DatedContract, Day, Moment
from mcx.report.events import event_label
from mcx.report.settled import Settled, right_sides
from mcx.report.state_results import CalendarLine, CalendarView
from mcx.report.wording import joined
from mcx.tape.state import State

CERTAIN, OPEN, DOUBTFUL = DOUBTS = ("", " (amount open)", " (if it is due)")  # from the surest on


def calendar(contracts: Iterable[tuple[DatedContract, State | None]]) -> CalendarView:
    """Fixings, decisions and payments from the valuation date on, in order of time; of contracts that have ended only
    what is still owed. A payment is said to be open where its amount follows from levels, and doubtful where a
    condition or an earlier end may take it away. Without a state nothing is known of the past, and all dates are
    listed."""
    contracts = list(contracts)
    lines = [line for dated, state in contracts for line in _lines(dated, state)]
    versions = dict.fromkeys(dated.calendar_version for dated, _ in contracts if dated.calendar_version)
    return CalendarView(tuple(line for _, line in sorted(lines, key=lambda each: (each[0], each[1].contract))),
                        tuple(versions))


def _lines(dated: DatedContract, state: State | None) -> Iterator[tuple[float, CalendarLine]]:
    contract, settled = dated.contract, Settled(dated.contract)

    def line(day: Day, kind: str, of: str) -> tuple[float, CalendarLine]:
        return day.time, CalendarLine(str(day), contract.title, kind, of)

    owed = [each for each in state.payments if each.owed and each.amount] if state else []
    for each in owed:
        yield line(each.due, "payment", f"{each.pay.leg} (owed)")
    if state is not None and state.ended is not None:
        return
    for name, day in dated.levels_fixed:
        if day.time >= 0.0:
            yield line(day, "fixing", f"{joined(contract.assets)} for {name}")
    payments: dict[tuple[Day, str], str] = {}
    may_have_ended = any(isinstance(action, End) for hit in dated.hits for action in settled.actions(hit.event))
    for moment in dated.moments:
        if moment.day.time < 0.0 or (state is not None and _fixed(moment.day, dated)):
            continue
        if _reads_levels(moment, settled):
            yield line(moment.day, "fixing", joined(contract.assets))
        for each in moment.events:
            actions = settled.actions(each.event)
            if each.event.condition is not None and actions:
                yield line(moment.day, "decision", event_label(each.event))
            due = not may_have_ended and settled.side(each.event) is True
            for action in actions:
                if action in each.due:
                    doubt = DOUBTFUL if not due else OPEN if _hangs_on_levels(action, settled) else CERTAIN
                    paid = (each.due[action], action.leg)
                    payments[paid] = min(payments.get(paid, doubt), doubt, key=DOUBTS.index)
            may_have_ended |= any(isinstance(action, End) for action in actions)
    came = {past.event for past in state.events} if state else set()
    for hit in dated.hits:
        if hit.watch.end.time >= 0.0 and hit.event not in came:
            for action in settled.actions(hit.event):
                if len(days := sorted(set(hit.due.get(action, ())), key=lambda day: day.time)) > 1:
                    yield days[-1].time, CalendarLine(f"until {days[-1]}", contract.title, "payment",
                                                      f"{action.leg}{DOUBTFUL}")
                elif days:
                    payments.setdefault((days[0], action.leg), DOUBTFUL)
    for (day, leg), doubt in payments.items():
        if (day, leg) in {(each.due, each.pay.leg) for each in owed}:
            continue
        yield line(day, "payment", f"{leg}{doubt}")
    for watch in dated.watches:
        if watch.end.time >= 0.0:
            yield line(watch.end, "fixing", f"{watch.running.name}: the watch ends")


def _fixed(day: Day, dated: DatedContract) -> bool:
    """Whether the fixings of a day are in, those of the valuation date too: what it decides is decided."""
    history = dated.history
    return all(history.level(number, history.observed(number, day)) is not None
               for number in range(len(dated.contract.assets)))


def _hangs_on_levels(action: Pay, settled: Settled) -> bool:
    """Whether the amount follows from levels: of the day, of a running value or of a level that is itself observed."""
    contract = settled.contract
    observed = {name for name, value in contract.terms.items() if isinstance(value, LevelFixing)}
    running = {each.name for each in contract.payoff.running}
    return not observed.union(running, {"spot"}).isdisjoint(settled.names(*right_sides(action)))


def _reads_levels(moment: Moment, settled: Settled) -> bool:
    """Whether a level is looked at on a day."""
    if moment.updates:
        return True
    formulas = [each.event.condition for each in moment.events if each.event.condition is not None]
    formulas += [right for each in moment.events for action in settled.actions(each.event)
                 for right in right_sides(action)]
    return any("spot" in set(settled.names(formula)) for formula in formulas)
