"""What comes next of several contracts: `mcx readback --calendar`."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from mcx.dates.dated_contract import DatedContract, Day, Moment
from mcx.report.events import event_label
from mcx.report.settled import Settled, right_sides
from mcx.report.state_results import CalendarLine, CalendarView
from mcx.report.wording import joined
from mcx.tape.state import State


def calendar(contracts: Iterable[tuple[DatedContract, State | None]]) -> CalendarView:
    """Fixings, decisions and payments from the valuation date on, in order of time; of contracts that have ended only
    what is still owed. Without a state nothing is known of the past, and all dates are listed."""
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
    payments: dict[tuple[Day, str], None] = {}
    for moment in dated.moments:
        if moment.day.time < 0.0:
            continue
        if _reads_levels(moment, settled):
            yield line(moment.day, "fixing", joined(contract.assets))
        for each in moment.events:
            actions = settled.actions(each.event)
            if each.event.condition is not None and actions:
                yield line(moment.day, "decision", event_label(each.event))
            for action in actions:
                if action in each.due:
                    payments[each.due[action], action.leg] = None
    for day, leg in payments:
        if (day, leg) in {(each.due, each.pay.leg) for each in owed}:
            continue
        yield line(day, "payment", f"{leg} (if it is due)")
    for watch in dated.watches:
        if watch.end.time >= 0.0:
            yield line(watch.end, "fixing", f"{watch.running.name}: the watch ends")


def _reads_levels(moment: Moment, settled: Settled) -> bool:
    """Whether a level is looked at on a day."""
    if moment.updates:
        return True
    formulas = [each.event.condition for each in moment.events if each.event.condition is not None]
    formulas += [right for each in moment.events for action in settled.actions(each.event)
                 for right in right_sides(action)]
    return any("spot" in set(settled.names(formula)) for formula in formulas)
