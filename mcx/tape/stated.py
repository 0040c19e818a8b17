"""What a contract states of its watches, held against each other and against fixings.

A statement of a watch says of levels of assets that one of them was reached by a date, or that none was; the lowest or
highest level so far says both, of that level. Where one says that a level was reached and another, of all that time or
more, that nothing as near was, they cannot both be true.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from mcx.checked.contract import Known
from mcx.faults import Fault, Place
from mcx.tape.formulas import Formulas, Unreadable
from mcx.tape.ops import Op
from mcx.tape.program import LevelKey
from mcx.tape.running import Watched
from mcx.tape.thresholds import Thresholds, thresholds_of
from mcx.tape.watching import HIGHEST, Extremes


def _same(a: float, b: float) -> bool:
    """Whether two levels are one, of which one may have been a ratio."""
    return math.isclose(a, b, rel_tol=1e-9)


@dataclass(frozen=True, slots=True)
class Line:
    """A level of an asset from above (LOW) or from below (HIGH); `strict` where it must be passed to be reached."""

    asset: int
    op: Op
    level: float
    strict: bool = False

    def reached(self, level: float) -> bool:
        """Whether a level is one at which this is reached."""
        if _same(level, self.level):
            return not self.strict
        return (level < self.level) is (self.op is Op.LOW)

    def implies(self, other: Line) -> bool:
        """Whether reaching this is to reach the other too."""
        if (self.asset, self.op) != (other.asset, other.op):
            return False
        if _same(self.level, other.level):
            return self.strict or not other.strict
        return (self.level < other.level) is (self.op is Op.LOW)


@dataclass(frozen=True, slots=True)
class Claim:
    """That from one date to another one of some lines was `reached`, or none of them. `words` say who says so."""

    lines: frozenset[Line]
    reached: bool
    since: datetime.date
    until: datetime.date
    words: str
    place: Place | None


def contradictions(watches: Iterable[Watched]) -> Iterator[Fault]:
    """Statements that others, or fixings, contradict."""
    claims = [claim for state in watches for claim in _claims(state)]
    for denied in (claim for claim in claims if not claim.reached):
        for said in (claim for claim in claims if claim.reached):
            if _against(said, denied):
                yield Fault(max(said.place, denied.place),
                            f"{denied.words}, and {said.words}: both cannot be true; expected statements that agree")


def against_fixings(state: Watched) -> Iterator[Fault]:
    """Statements of one watch that fixings contradict, each with the first fixing that does."""
    history, names = state.observations.history, state.observations.assets
    fixed = [(date, asset, level) for (asset, date), level in history.levels.items()]
    for denied in (claim for claim in _claims(state) if not claim.reached):
        for date, asset, level in sorted(fixed):
            lines = (Line(asset, op, level) for op in (Op.LOW, Op.HIGH))
            if any(_against(Claim(frozenset({line}), True, date, date, "", None), denied) for line in lines):
                published = history.published.get(names[asset], {}).get(date, level)
                counts = "" if published == level else f", which counts as {level:.12g}"
                yield Fault(denied.place, f"{denied.words}, which fixings contradict: {names[asset]} was fixed at "
                                          f"{published:.12g} on {date}{counts}")
                break


def denied_today(watches: Iterable[Watched]) -> Iterator[Claim]:
    """Statements that nothing was reached by the end of the valuation date, or of a later one."""
    for state in watches:
        today = state.observations.history.valuation
        yield from (claim for claim in _claims(state) if not claim.reached and claim.until >= today)


def _against(said: Claim, denied: Claim) -> bool:
    """Whether what is said to have been reached would have been what is denied."""
    return (bool(said.lines) and denied.since <= said.since and said.until <= denied.until
            and all(any(line.implies(other) for other in denied.lines) for line in said.lines))


def _claims(state: Watched) -> Iterator[Claim]:
    watch = state.watch
    for date, known in sorted(state.observations.history.stated.get(watch.running.name, {}).items()):
        flag = watch.running.how in ("ever", "always")
        shown = ("true" if known.value else "false") if flag else f"{known.value:.12g}"
        words = f"'{watch.running.name}' is stated as {shown} on {date}"
        for lines, reached in _said(state, known, flag):
            yield Claim(lines, reached, watch.start.date, min(date, watch.end.date), words, known.place)


def _said(state: Watched, known: Known, flag: bool) -> Iterator[tuple[frozenset[Line], bool]]:
    """The lines that a statement is about, and whether one of them was reached; nothing where it says no such thing."""
    running, formulas = state.watch.running, state.formulas

    def extreme(asset: int, op: Op) -> int:
        return formulas.builder.input(op, LevelKey(asset, state.watch.end.time, state.watch.start.time))

    try:
        (value,) = Extremes(formulas, extreme).read(running.formula, HIGHEST[running.how])
    except Unreadable:  # a fault of its own
        return
    thresholds = thresholds_of(formulas)
    if flag:
        found = _of_flag(value, formulas, thresholds)
        if found:
            yield found[0], found[1] is bool(known.value)
        return
    pairs = thresholds.below(value, known.value)
    if len(pairs) == 1:
        yield frozenset({_line(pairs[0], formulas, strict=False)}), True
        yield frozenset({_line(pairs[0], formulas, strict=True)}), False


def _of_flag(value: int, formulas: Formulas, thresholds: Thresholds) -> tuple[frozenset[Line], bool] | None:
    """The lines of a flag, and whether it is true if one of them is reached, or if none is; None for any other."""
    step = formulas.builder.instructions[value]
    if step.op is Op.NOT:
        found = _of_flag(step.operands[0], formulas, thresholds)
        return found and (found[0], not found[1])
    if step.op in (Op.OR, Op.AND):
        parts = [_of_flag(operand, formulas, thresholds) for operand in step.operands]
        if None in parts or any(reached is not (step.op is Op.OR) for _, reached in parts):
            return None
        return frozenset().union(*(lines for lines, _ in parts)), step.op is Op.OR
    if step.op not in (Op.LT, Op.LE):
        return None
    found = thresholds.comparison(step) or {}
    events = [event for event in found if event]
    if len(events) != 1 or set(found) - {frozenset(), events[0]}:
        return None
    below = (step.op is Op.LT) is bool(thresholds.extremes[step.operands[0]])  # of the extreme, strictly
    lines = {_line(pair, formulas, below is (pair[0].op is Op.LOW)) for pair in events[0]}
    return frozenset(lines), frozenset() in found


def _line(pair: tuple, formulas: Formulas, strict: bool) -> Line:
    barrier, level = pair
    return Line(barrier.key.asset, barrier.op, formulas.fixed(level), strict)
