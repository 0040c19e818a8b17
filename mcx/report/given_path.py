"""Given levels run through a contract: every payment, every condition, no model.

The contract's own tape, still reading levels, is interpreted on one path. The tape pays in present values, so that one
discount factor is set to 1 and all others to 0, for each payment day in turn (in one pass, as lanes): what is left of
a leg is what it pays on that day.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterable, Mapping
from dataclasses import replace

import numpy as np

from mcx.dates.dated_contract import DatedContract, Day
from mcx.faults import Fault, Place
from mcx.report.results import Met, PathResult, Payment
from mcx.report.wording import joined
from mcx.tape.formulas import figure, fixed_values
from mcx.tape.interpret import interpret, outputs
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Leaf, LeafKind, LevelKey, Tape
from mcx.tape.steps import SAME_TIME

CONTINUOUS = "{} is watched all the time; here only the given levels from {} to {} were looked at"


def run_levels(
    dated: DatedContract, tape: Tape, levels: Mapping[str, Mapping[Day, float]], file: str
) -> tuple[PathResult | None, list[Fault]]:
    """Every payment on given levels, by asset and day; the faults list every level that is missing.

    `tape` is `Unrolled.observed`; `file` is where the levels come from, for the faults.
    """
    tape = replace(tape, outputs=tuple(output for output in tape.outputs if output.kind != "level"))
    tape = drop_dead_code(tape)
    reader = _Reader(dated, levels)
    wanted = {(step.op, step.payload): None for step in tape.instructions if isinstance(step.payload, LevelKey)}
    read = {(op, key): reader.level(op, key) for op, key in wanted if op is not Op.MOMENT}
    fixed = fixed_values(tape, dated.contract)
    read |= {(step.op, step.payload): reader.moment(step.payload, fixed[step.operands[0]])
             for step in tape.instructions if step.op is Op.MOMENT}
    due = tuple(leaf for leaf in tape.leaves if leaf.kind is LeafKind.DISCOUNT)
    values = interpret(tape, [_leaf(leaf, due, dated) for leaf in tape.leaves], levels=read)
    found = {name: np.broadcast_to(value, (max(len(due), 1),)) for name, value in outputs(tape, values).items()}
    ended = next((output.day for output in tape.outputs if output.kind == "end" and found[output.name][0]), "")
    if reader.missing_before(ended):
        return None, reader.faults(file)
    return _result(dated, tape, found, due, ended, reader.notes(ended)), []


class _Reader:
    """Looks up levels by the tape's keys; remembers what was not given (and reads as NaN) and what was used."""

    def __init__(self, dated: DatedContract, levels: Mapping[str, Mapping[Day, float]]):
        self.dated = dated
        self.given = {
            number: sorted((day.time, level) for day, level in levels.get(asset, {}).items())
            for number, asset in enumerate(dated.contract.assets)
        }
        self.missing: dict[int, set[float]] = {}
        self.used: set[tuple[int, float]] = set()
        self._add_todays()
        self.watched: dict[tuple[int, float], float] = {}  # asset, start -> end

    def _add_todays(self) -> None:
        """The fixings of the valuation date, which a watch goes on from, where the file has no level of that day."""
        history = self.dated.history
        for number, given in self.given.items():
            fixed = history.level(number, Day(0.0, history.valuation))
            if fixed is not None and not any(abs(time) <= SAME_TIME for time, _ in given):
                given.append((0.0, fixed / history.scale[number] if history.scale else fixed))
                given.sort()
                self.used.add((number, 0.0))

    def level(self, op: Op, key: LevelKey) -> float:
        """The level that a key reads: on its day, or the extreme of all that are given within its stretch."""
        start = key.time if op is Op.LEVEL else key.start
        found = [(time, level) for time, level in self.given[key.asset]
                 if start - SAME_TIME <= time <= key.time + SAME_TIME]
        self.used |= {(key.asset, time) for time, _ in found}
        for end in {start, key.time}:
            if not any(abs(time - end) <= SAME_TIME for time, _ in found):
                self.missing.setdefault(key.asset, set()).add(end)
        if op is not Op.LEVEL:
            self.watched[key.asset, start] = max(key.time, self.watched.get((key.asset, start), 0.0))
        if not found:
            return np.nan
        return {Op.LEVEL: max, Op.LOW: min, Op.HIGH: max}[op](level for _, level in found)

    def moment(self, key: LevelKey, barrier: float) -> float:
        """Which part of a stretch has passed on the first given date with a level beyond the barrier; a textbook
        contract, which has no days, pays at the stretch's end."""
        found = [(time, level) for time, level in self.given[key.asset]
                 if key.start - SAME_TIME <= time <= key.time + SAME_TIME]
        beyond = [time for time, level in found[1:] if (level - barrier) * (found[0][1] - barrier) <= 0.0]
        if self.dated.contract.textbook or not beyond or beyond[0] > key.time - SAME_TIME:
            return 1.0
        return (beyond[0] - key.start - SAME_TIME) / (key.time - key.start)  # a day ends with its own level

    def missing_before(self, ended: str) -> bool:
        """Whether a level is missing that counts: after the contract has ended none does.

        What is missing reads as NaN, which turns no condition true, so an end before the first such date is sound.
        """
        first = min((time for times in self.missing.values() for time in times), default=np.inf)
        days = {str(moment.day): moment.day.time for moment in self.dated.moments}
        return first <= days.get(ended, np.inf) and first < np.inf

    def faults(self, file: str) -> list[Fault]:
        """One fault for each asset, with every date that has no level."""
        names = self.dated.contract.assets
        return [
            Fault(Place(file, 1, 1), f"no level of '{names[asset]}' for {joined(self._days(times))}; a level is needed "
                                     f"on every date that the contract looks at")
            for asset, times in sorted(self.missing.items())
        ]

    def notes(self, ended: str) -> tuple[str, ...]:
        """How the levels were taken."""
        names = self.dated.contract.assets
        stretches: dict[int, tuple[float, float]] = {}
        for (asset, start), end in self.watched.items():
            before = stretches.get(asset, (start, end))
            stretches[asset] = min(before[0], start), max(before[1], end)
        said = [CONTINUOUS.format(names[asset], *self._days(ends)) for asset, ends in sorted(stretches.items())]
        if self.missing:
            said.append(f"the contract ended on {ended}; later dates without levels are left out")
        for asset, given in self.given.items():
            unused = [time for time, _ in given if (asset, time) not in self.used]
            if unused:
                said.append(f"not looked at: {names[asset]} on {joined(self._days(unused))}")
        return tuple(said)

    def _days(self, times: Iterable[float]) -> list[str]:
        return [day_of(time, self.dated) for time in sorted(times)]


def day_of(time: float, dated: DatedContract) -> str:
    """The day at a time in years: the contract's own, else counted from the nearest of them."""
    known = [moment.day for moment in dated.moments]
    known += [day for watch in dated.watches for day in (watch.start, watch.end)]
    known += [due for moment in dated.moments for event in moment.events for due in event.due.values()]
    known += [day for hit in dated.hits for days in (hit.days, *hit.due.values()) for day in days]
    near = min(known, key=lambda day: abs(day.time - time))
    if abs(near.time - time) <= SAME_TIME or near.date is None:
        return str(near if abs(near.time - time) <= SAME_TIME else Day(time))
    return str(near.date + datetime.timedelta(days=round((time - near.time) * 365)))


def _leaf(leaf: Leaf, due: tuple[Leaf, ...], dated: DatedContract) -> float | np.ndarray:
    if leaf.kind is LeafKind.DISCOUNT:
        return np.array([float(leaf == each) for each in due])
    return figure(dated.contract, leaf)


def _result(
    dated: DatedContract, tape: Tape, found: dict, due: tuple[Leaf, ...], ended: str, notes: tuple[str, ...]
) -> PathResult:
    size = dated.contract.size
    payments = [
        Payment(day_of(leaf.end, dated), output.subject, float(found[output.name][lane]),
                float(found[output.name][lane]) * size)
        for lane, leaf in sorted(enumerate(due), key=lambda item: item[1].end)
        for output in tape.outputs
        if output.kind == "leg" and found[output.name][lane] != 0.0
    ]
    held = [output for output in tape.outputs if output.kind == "condition" and not output.day]
    dates = {output.subject: [] for output in held}
    for output in tape.outputs:
        if output.kind == "condition" and output.day and found[output.name][0]:
            dates[output.subject].append(output.day)
    return PathResult(
        payments=tuple(payments),
        total=sum(payment.amount for payment in payments),
        conditions=tuple(Met(each.subject, bool(found[each.name][0]), tuple(dates[each.subject])) for each in held),
        ended=ended,
        notes=notes,
    )
