"""The walk over a contract's dates, which puts on a tape what the contract means.

On each date the running values are updated, then the events happen, both in file order, as `payoffs/README.md` says
them. What is random stays a value of the tape; what the contract and its dates decide folds away while building.
Running values need no care after the contract has ended, because nothing is paid or reported any more from there on.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace

from mcx.checked.formula import Formula, Name, Previous
from mcx.checked.kinds import Kind
from mcx.checked.payoff import Action, Assign, Deliver, End, Event, Pay, Running
from mcx.dates.dated_contract import DatedContract, DatedEvent, Day, Moment, Occasion, Update
from mcx.faults import Fault, Place
from mcx.tape.builder import Builder
from mcx.tape.formulas import Formulas, Lacking, Scene, Unreadable, Values
from mcx.tape.hits import Due, Hits, Span, Stretch, which_first
from mcx.tape.ledger import Ledger, Payment
from mcx.tape.moments import moments_without_law
from mcx.tape.observations import Observations
from mcx.tape.ops import Op
from mcx.tape.past_hits import PastHit, past_hit
from mcx.tape.program import Leaf, LeafKind
from mcx.tape.running import FOLDS, Observed, Watched
from mcx.tape.shares import Shares
from mcx.tape.stated import against_fixings, contradictions, denied_today
from mcx.tape.state import Accruing, FixedAmount, PastEvent, State

AT_A_HIT = ("shares cannot be delivered at the moment of a hit that is watched continuously: their level on the "
            "delivery date, which depends on that moment, is not known; deliver on a date")
NO_NUMBER = "'{}' is no number before its last fixing, on {}, and what is watched all the time is held against numbers"


@dataclass(slots=True)
class _Branch:
    """What one side of an event does: the settable values after it, and whether it ends the contract."""

    values: dict[str, Values]
    ends: bool = False
    due: list[int] = field(default_factory=list)  # times, as values of the tape


class Walk:
    """The state of a contract while its dates are walked: alive flag, running values, ledger, faults."""

    def __init__(self, dated: DatedContract, builder: Builder | None = None, nodes: Sequence[float] = ()):
        self.dated = dated
        payoff = dated.contract.payoff
        self.builder = builder or Builder()
        self.observations = Observations(dated, self.builder)
        self.state = State(fixings=self.observations.used)
        self.formulas = Formulas(dated.contract, self.builder, self._observed_level)
        self.ledger = Ledger.opened(self.builder, payoff)
        self.alive = self.builder.constant(1.0)
        self.faults: list[Fault] = []
        self.observed: dict[str, Observed | Watched] = {}
        self.settable: dict[str, Values] = {}
        self._before: dict[str, int] = {}  # flags that this day's events wait for, as they stood before it
        self.memory: dict[Place, dict[int, Values]] = {}  # by the place of the running value or event
        self._previous: dict[Place, tuple[Previous, ...]] = {}
        self.hits = Hits(dated, nodes, self.formulas, self.observations)
        watches = {watch.running.name: watch for watch in dated.watches}
        for running in payoff.running:
            start = self._start(running.start)
            if running.how == "set":
                self.settable[running.name] = start
            elif running.name in watches:
                self.observed[running.name] = Watched(watches[running.name], self.formulas, self.observations, start)
            else:
                self.observed[running.name] = Observed(running, self.formulas, start, 1 if start else 0)
        found = (past_hit(hit, self.observed[hit.watch.running.name]) for hit in dated.hits)
        self._past = sorted((past for past in found if past), key=lambda past: past.last.time)

    def run(self) -> None:
        """Walk every moment, until the contract has ended on every path."""
        self.faults += which_first(self.dated)
        watched = [state for state in self.observed.values() if isinstance(state, Watched)]
        self.faults += (*contradictions(watched), *(fault for state in watched for fault in against_fixings(state)))
        self.state.denied += denied_today(watched)
        for moment in self.dated.moments:
            self._hit_until(moment.day.time)
            if self.builder.number(self.alive) == 0.0:
                break
            self._before = self._flags_before(moment)
            for update in moment.updates:
                self._update(update)
            for number, event in enumerate(moment.events):
                if self.builder.number(self.alive) == 0.0:  # what stands below it on this day is not reached
                    break
                try:
                    self._event(event, moment.events[: number + 1])
                except Unreadable as trouble:
                    self._note(trouble)
            if moment.day.time <= 0.0:
                self._note_state(moment.day)
        self._hit_until(math.inf)
        if self.hits.moments and not self.faults:
            outputs = (output.value for output in self.ledger.outputs())
            self.faults += moments_without_law(self.builder.instructions, outputs, self.hits.flags, self.hits.moments)

    def _note(self, trouble: Unreadable) -> None:
        """A fault, unless fixings that are missing say it."""
        if not isinstance(trouble, Lacking):
            self.faults.append(trouble.fault)

    def _note_state(self, day: Day) -> None:
        """The running values that are known after a day of the past."""
        asker = self.dated.contract.payoff.place
        for running in self.dated.contract.payoff.running:
            try:
                state = self.observed.get(running.name)
                values = state.known(day) if isinstance(state, Watched) else self._running(
                    Name(running.name, asker, Kind.NUMBER), day, self.settable)
            except Unreadable:
                continue  # not begun yet
            numbers = [self.formulas.fixed(value) for value in values]
            if numbers and None not in numbers:
                self.state.running[running.name] = tuple(numbers)
            else:
                self.state.running.pop(running.name, None)

    def _hit_until(self, time: float) -> None:
        """Everything that happens at hits up to a time, those of the past first."""
        while self._past and self._past[0].last.time <= time:
            past = self._past.pop(0)
            if self.builder.number(self.alive) != 0.0:
                try:
                    self._past_hit(past)
                except Unreadable as trouble:
                    self._note(trouble)
        for stretch in self.hits.until(time):
            if self.builder.number(self.alive) != 0.0:
                try:
                    self._hit(stretch)
                except Unreadable as trouble:
                    self._note(trouble)

    def _hit(self, stretch: Stretch) -> None:
        event, watch = stretch.hit.event, stretch.hit.watch
        before, after = self.hits.turn(stretch, self.observed[watch.running.name])
        turns = self._newly(before, after, event.at.place)
        if self.builder.number(turns) == 0.0 or self.observed[watch.running.name].lacking:
            return
        scene = self.hits.scene(stretch, after)
        condition = self.formulas.one(event.condition, scene) if event.condition else self.builder.constant(1.0)
        self._carry_out(event, stretch.day, turns, condition, scene,
                        due=lambda pay: self.hits.due(stretch, pay, scene.part),
                        otherwise_due=lambda: self.hits.ends(stretch, scene.part))

    def _past_hit(self, past: PastHit) -> None:
        event, scene = past.event(self.dated), past.scene(self.builder, self.dated)
        constant = self.builder.constant
        condition = constant(1.0)
        if event.condition:
            condition = self._settled(self.formulas.one(event.condition, scene), past.last)
        self._carry_out(event, past.day, constant(1.0), condition, scene, due=lambda pay: past.due(pay, self.builder),
                        otherwise_due=lambda: past.ends(self.dated, self.builder))
        held = self.builder.number(condition)
        self.state.events.append(PastEvent(past.hit.event, past.day, None if held is None else bool(held)))

    def _newly(self, before: int, after: int, place: Place) -> int:
        """Whether a flag holds that did not before."""
        emit = self.builder.emit
        return emit(Op.AND, emit(Op.NOT, before, place=place), after, place=place)

    def _flags_before(self, moment: Moment) -> dict[str, int]:
        """The flags that events of a day wait for, where they are observed on dates, as they stand before it."""
        names = {each.event.at.name for each in moment.events if each.event.at.part == "once"}
        states = {name: self.observed[name].values for name in names}
        return {name: values[0] if values else self.builder.constant(0.0) for name, values in states.items()}

    def _start(self, formula: Formula | None) -> Values | None:
        """The value of `start:`, of terms and numbers only."""
        if formula is None:
            return None
        try:
            return self.formulas.read(formula, Scene(spot=_not_at_start, running=_not_at_start))
        except Unreadable as trouble:
            self._note(trouble)
            return (self.builder.constant(0.0),)

    def _observed_level(self, name: str, place: Place, occasion: Occasion | None) -> Values:
        """A level term that is observed: the fixing on its date, or the average, lowest or highest of several."""
        days = self.dated.schedules[name]
        levels = [self.observations.all(day) for day in days]
        how = self.dated.contract.terms[name].how
        first, *rest = levels
        for values in rest:
            first = self.formulas.spread(FOLDS.get(how, Op.ADD), first, values)
        if how == "average":
            first = self.formulas.spread(Op.DIV, first, (self.builder.constant(len(days)),))
        known = [self.builder.number(value) for value in first]
        if None not in known:
            self.state.terms[name] = tuple(known)
        if occasion and occasion.day.time < days[-1].time:
            raise Unreadable(place, f"'{name}' is fixed on {days[-1]} only and read on {occasion.day}")
        if occasion is None and None in known:
            unknown = [(asset, day) for day, row in zip(days, levels, strict=True)
                       for asset, level in enumerate(row) if self.builder.number(level) is None]
            text = NO_NUMBER.format(name, days[-1])
            if any(self.dated.history.observed(asset, day).time > 0.0 for asset, day in unknown):
                raise Unreadable(place, text)
            raise Lacking(place, text, unknown)
        return first

    def _update(self, update: Update) -> None:
        running = update.running
        state = self.observed[running.name]
        try:
            scene = self._scene(running, update.occasion, running.formula)
            values = self.formulas.read(running.formula, scene)
            flag = running.formula.kind.is_flag
            state.update(tuple(self._settled(value, update.occasion.day) for value in values) if flag else values)
        except Unreadable as trouble:  # a fault only where somebody reads it
            state.trouble = trouble

    def _event(self, dated: DatedEvent, so_far: Sequence[DatedEvent]) -> None:
        event, occasion = dated.event, dated.occasion
        parts = _formulas_of((*event.then, *event.otherwise))
        scene = self._scene(event, occasion, event.condition, *parts)
        condition = self.builder.constant(1.0)
        if event.condition:
            condition = self._settled(self.formulas.one(event.condition, scene), occasion.day)
        turns = self.builder.constant(1.0)
        if event.at.part == "once":
            turns = self._newly(self._before[event.at.name], self.observed[event.at.name].values[0], event.at.place)
        constant, of_the_day = self.builder.constant, [each.time for one in so_far for each in one.due.values()]

        def due(pay: Pay) -> Due:
            day = dated.due[pay]
            return Due(self.builder.leaf(Leaf(LeafKind.DISCOUNT, end=day.time)), constant(day.time), day, (day.time,))

        happens = self._carry_out(event, occasion.day, turns, condition, scene, due=due,
                                  otherwise_due=lambda: constant(max(of_the_day or [occasion.day.time])))
        if occasion.day.time <= 0.0:
            held = self.builder.number(happens)
            self.state.events.append(PastEvent(event, occasion.day, None if held is None else bool(held)))

    def _carry_out(self, event: Event, day: Day | Span, turns: int, condition: int, scene: Scene, *,
                   due: Callable[[Pay], Due], otherwise_due: Callable[[], int]) -> int:
        """What an event does where it `turns`, by its condition; the flag of its happening. `otherwise_due` gives the
        time to which the contract lives if it ends here and the branch itself pays nothing."""
        emit = self.builder.emit
        chosen = emit(Op.AND, turns, condition, place=event.place)
        happens = emit(Op.AND, self.alive, chosen, place=event.place)
        if event.name:
            self.ledger.happened(event.name, day, happens)
        does = self._branch(event.then, event, day, happens, scene, due)
        flags = [(does, chosen)]
        values = self._merged(chosen, does.values, self.settable)
        if event.otherwise:
            other = emit(Op.AND, turns, emit(Op.NOT, condition, place=event.place), place=event.place)
            fails = emit(Op.AND, self.alive, other, place=event.place)
            does_not = self._branch(event.otherwise, event, day, fails, scene, due)
            flags.append((does_not, other))
            values = self._merged(other, does_not.values, values)
        self.settable = values
        for branch, flag in flags:
            if branch.ends:
                self._end(event, day, flag, branch.due, otherwise_due)
        return happens

    def _branch(self, actions: Iterable[Action], event: Event, day: Day | Span, flag: int, scene: Scene,
                due: Callable[[Pay], Due]) -> _Branch:
        """Carry out one side of an event, which is taken where `flag`. `end` leaves the rest of it undone."""
        branch = _Branch(dict(self.settable))
        if self.builder.number(flag) == 0.0:
            return branch
        scene = replace(scene, running=lambda name: self._running(name, day, branch.values))
        for action in actions:
            match action:
                case Deliver():
                    if scene.occasion is None:
                        raise Unreadable(action.place, AT_A_HIT)
                    when = due(action)
                    self._deliver(action, event.place, scene.occasion.day, when, flag, scene)
                    branch.due.append(when.time)
                case Pay():
                    amount, when = self.formulas.one(action.amount, scene), due(action)
                    self._pay(action, Payment(action.leg, action.part, event.place, day, when, flag, amount))
                    if scene.occasion:
                        self._accrue(action, scene.occasion, amount, flag)
                    branch.due.append(when.time)
                case Assign(values=pairs):
                    branch.values.update({name: self.formulas.read(value, scene) for name, value in pairs})
                case End():
                    branch.ends = True
                    break
        return branch

    def _settled(self, flag: int, day: Day) -> int:
        """A flag of the past as what fixings and terms make of it, so that what hangs on it folds."""
        known = self.formulas.fixed(flag) if day.time <= 0.0 else None
        return flag if known is None else self.builder.constant(known)

    def _accrue(self, pay: Pay, occasion: Occasion, amount: int, flag: int) -> None:
        """Note a coupon that is certain and whose period runs on the valuation date."""
        if pay.part != "coupon" or occasion.day.date is None or occasion.day.time <= 0.0:
            return
        listed = self.dated.schedules.get(occasion.schedule, ())
        since = listed[occasion.nth - 2] if occasion.nth > 1 else self.dated.start
        fixed = self.formulas.fixed(amount) if self.builder.number(flag) == 1.0 and since.time <= 0.0 else None
        if fixed is not None:
            self.state.accruing.append(Accruing(pay, occasion, since, fixed))

    def _deliver(self, action: Deliver, event: Place, day: Day, due: Due, flag: int, scene: Scene) -> None:
        shares = Shares(self.dated.contract, self.formulas, self.observations)
        worth, certain, counted = shares.worth(action, day, due.latest, scene, lambda flag: self._settled(flag, day))
        if not counted:
            self.state.uncounted[action] = None
        if day.time <= 0.0 and self.builder.number(flag) == 1.0:
            self.state.deliveries += certain
        if worth is not None:
            self._pay(action, Payment(action.leg, action.part, event, day, due, flag, worth))

    def _pay(self, pay: Pay, payment: Payment) -> None:
        emit, due = self.builder.emit, payment.due
        past = payment.decided.time <= 0.0 and self.builder.number(payment.flag) == 1.0
        fixed = self.formulas.fixed(payment.amount) if past else None
        if fixed is not None:
            self.state.payments.append(FixedAmount(pay, payment.decided, due.latest, fixed))
        if due.latest.time < 0.0:  # paid already
            return
        present = emit(Op.MUL, payment.amount, due.discount, place=pay.place)
        paid = emit(Op.SELECT, payment.flag, present, self.builder.constant(0.0), place=pay.place)
        self.ledger.pay(pay, paid, payment, settled=fixed is not None)

    def _merged(self, flag: int, yes: dict[str, Values], no: dict[str, Values]) -> dict[str, Values]:
        """The settable values: those of one branch where its flag holds, else the others."""
        return {name: value if value == no[name] else self.formulas.spread(Op.SELECT, (flag,), value, no[name])
                for name, value in yes.items()}

    def _end(self, event: Event, day: Day, flag: int, due: Sequence[int], otherwise: Callable[[], int]) -> None:
        """End where `flag`. Its life runs to the branch's own payments, else to the day's, else to the day."""
        emit = self.builder.emit
        ends = emit(Op.AND, self.alive, flag, place=event.place)
        self.ledger.ended(day, ends, self.builder.fold(Op.MAX, due) if due else otherwise())
        if day.time <= 0.0 and self.builder.number(ends) == 1.0:
            self.state.ended = day
        self.alive = emit(Op.AND, self.alive, emit(Op.NOT, flag), place=event.place)

    def _scene(self, owner: Running | Event, occasion: Occasion, *formulas: Formula | None) -> Scene:
        """The names on a date, for the formulas of a running value or event. What each `previous` in them must
        remember for the next date is taken now, before any action."""
        day = occasion.day
        if day.time < 0.0 and day.date is None:
            raise Unreadable(owner.place, f"observed on {day}, before the valuation date")
        scene = Scene(
            spot=lambda _: self.observations.all(day),
            running=lambda name: self._running(name, day, self.settable),
            occasion=occasion,
            remembered=self.memory.get(owner.place),
        )
        if owner.place not in self._previous:
            self._previous[owner.place] = tuple(self.formulas.previous_in(*formulas))
        if self._previous[owner.place]:
            self.memory[owner.place] = self._remember(self._previous[owner.place], scene)
        return scene

    def _remember(self, wanted: Iterable[Previous], scene: Scene) -> dict[int, Values]:
        kept: dict[int, Values] = {}
        for node in wanted:
            try:
                kept[id(node)] = self.formulas.read(node.operand, scene)
            except Unreadable:
                continue  # it stands in a branch that this contract does not take
        return kept

    def _running(self, name: Name, day: Day, values: dict[str, Values]) -> Values:
        if name.name in values:
            return values[name.name]
        state = self.observed[name.name]
        return state.read(name, day) if isinstance(state, Watched) else state.read(name)


def _formulas_of(actions: Iterable[Action]) -> list[Formula]:
    found: list[Formula] = []
    for action in actions:
        if isinstance(action, Pay):
            found.append(action.amount)
            found += [action.which] if isinstance(action, Deliver) and action.which is not None else []
        elif isinstance(action, Assign):
            found += [value for _, value in action.values]
    return found


def _not_at_start(name: Name) -> Values:
    raise Unreadable(name.place, f"'{name.name}' is not known before the first date")
