"""A dated contract becomes a tape: the walk over its dates that every later stage takes its meaning from.

On each date the running values are updated, then the events happen, both in file order, as `payoffs/README.md` says
them. What is random stays a value of the tape; what the contract and its dates decide folds away while building.
Running values need no care after the contract has ended, because nothing is paid or reported any more from there on.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field

from mcx.checked.formula import Formula, Name, Previous
from mcx.checked.kinds import Kind
from mcx.checked.payoff import Action, Assign, Deliver, End, Event, Pay, Running
from mcx.dates.dated_contract import DatedContract, DatedEvent, Day, Occasion, Update
from mcx.faults import Fault, Place
from mcx.tape.builder import Builder
from mcx.tape.formulas import Formulas, Scene, Unreadable, Values
from mcx.tape.ledger import Ledger, Payment
from mcx.tape.observations import Observations
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Instruction, Leaf, LeafKind, LevelKey, Output, Tape
from mcx.tape.running import FOLDS, Observed, Watched
from mcx.tape.shares import Shares
from mcx.tape.state import Accruing, FixedAmount, PastEvent, State
from mcx.tape.steps import PLAIN, Grid, Makeup, expand_levels
from mcx.tape.watching import conflicts

UNKNOWN_SUM = ("an asset with cash dividends that is converted at the rate of the day cannot be watched continuously: "
               "its law between two dates is not known; name the dates on which it is watched")


@dataclass(frozen=True, slots=True)
class WatchNote:
    """How a continuously watched running value enters: by which extreme of which asset, and by which law.

    `side` is 'low', 'high' or '' where nothing reads it; `law` is 'exact', 'nearly exact' (cash
    dividends to come enter at their mean over a step) or 'unread'.
    """

    name: str
    asset: str
    side: str
    law: str


@dataclass(frozen=True, slots=True)
class Unrolled:
    """A contract as a tape. With faults the tapes are empty.

    tape      reads normals and uniforms only: ready for `lower`
    observed  the same contract still reading LEVEL, LOW and HIGH: its meaning on given levels
    grid      the simulated times and assets
    levels    for each 'level' output, by its name, the asset's number and the time: its mean is the forward
    state     what fixings have settled already
    """

    tape: Tape
    observed: Tape
    grid: Grid
    levels: dict[str, tuple[int, float]]
    watches: tuple[WatchNote, ...]
    state: State
    faults: tuple[Fault, ...] = ()


def unroll(dated: DatedContract, *, nodes: Sequence[float], makeup: Makeup = PLAIN, given: bool = False) -> Unrolled:
    """The tape of a contract; `nodes` are the times of the market's curve points (`MarketMap.nodes`), `makeup` how
    levels come about (`MarketMap.makeup`). A missing fixing is a fault unless levels will be `given`."""
    walk = _Walk(dated)
    walk.run()
    observed = drop_dead_code(walk.builder.tape(walk.ledger.outputs()))
    missing = [] if given else walk.observations.missing(observed)
    wrong = walk.faults or conflicts(observed) or unknown_laws(observed, makeup)
    faults = [*wrong, *walk.observations.unstated.values(), *missing]
    if faults:
        return Unrolled(Tape((), ()), Tape((), ()), Grid((0.0,), ()), {}, (), State(), tuple(sorted(set(faults))))
    if given:
        return Unrolled(Tape((), ()), observed, Grid((0.0,), ()), {}, walk.notes(makeup), walk.state)
    observed, levels = _with_last_levels(observed, dated.contract.assets)
    tape, grid = expand_levels(observed, nodes, makeup)
    return Unrolled(tape, observed, grid, levels, walk.notes(makeup), walk.state)


def last_read(dated: DatedContract) -> float:
    """The last time at which the contract reads a level, in years; 0 if it reads none later."""
    walk = _Walk(dated)
    walk.run()
    observed = drop_dead_code(walk.builder.tape(walk.ledger.outputs()))
    return max((step.payload.time for step in observed.instructions if isinstance(step.payload, LevelKey)), default=0.0)


def unknown_laws(tape: Tape, makeup: Makeup) -> list[Fault]:
    """Continuous watches of an asset with cash dividends that is converted at the rate of the day."""
    return sorted({Fault(step.place, UNKNOWN_SUM) for step in tape.instructions
                   if step.op in (Op.LOW, Op.HIGH) and step.payload.asset in set(makeup.cash) & set(makeup.rates)})


@dataclass(frozen=True, slots=True)
class Walked:
    """A contract on a tape that may hold others beside it, as values of that tape.

    outputs   all named results but the levels, price first
    payments  every amount that may be owed, in the order in which it is decided
    ends      for each day on which the contract may end early, whether it does; at most one of them is true
    observations  what it observes, and which fixings are missing
    """

    outputs: tuple[Output, ...]
    payments: tuple[Payment, ...]
    ends: dict[Day, int]
    observations: Observations
    faults: tuple[Fault, ...]


def walked(dated: DatedContract, builder: Builder) -> Walked:
    """A contract put on a tape under construction, still reading levels. Contracts that share a builder share what
    they have in common; continuous watches are not checked against each other."""
    walk = _Walk(dated, builder)
    walk.run()
    ledger = walk.ledger
    return Walked(tuple(ledger.outputs()), tuple(ledger.payments), dict(ledger.ends), walk.observations,
                  tuple(walk.faults))


def _with_last_levels(tape: Tape, assets: Sequence[str]) -> tuple[Tape, dict[str, tuple[int, float]]]:
    """The tape with each simulated asset's level at its last observed time as an output, for the martingale test."""
    last: dict[int, float] = {}
    known: dict[LevelKey, int] = {}
    for number, step in enumerate(tape.instructions):
        if isinstance(step.payload, LevelKey):
            last[step.payload.asset] = max(last.get(step.payload.asset, 0.0), step.payload.time)
            if step.op is Op.LEVEL:
                known[step.payload] = number
    instructions, outputs = list(tape.instructions), list(tape.outputs)
    levels: dict[str, tuple[int, float]] = {}
    for asset, time in sorted(last.items()):
        key = LevelKey(asset, time)
        if time > 0.0 and key not in known:
            known[key] = len(instructions)
            instructions.append(Instruction(Op.LEVEL, (), key))
        if time > 0.0:
            output = Output.of("level", known[key], assets[asset])
            outputs.append(output)
            levels[output.name] = (asset, time)
    return Tape(tuple(instructions), tuple(outputs)), levels


@dataclass(slots=True)
class _Branch:
    """What one side of an event does: the settable values after it, and whether it ends the contract."""

    values: dict[str, Values]
    ends: bool = False
    due: list[float] = field(default_factory=list)


class _Walk:
    """The state of a contract while its dates are walked: alive flag, running values, ledger, faults."""

    def __init__(self, dated: DatedContract, builder: Builder | None = None):
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
        self.memory: dict[Place, dict[int, Values]] = {}  # by the place of the running value or event
        self._previous: dict[Place, tuple[Previous, ...]] = {}
        watches = {watch.running.name: watch for watch in dated.watches}
        for running in payoff.running:
            start = self._start(running.start)
            if running.how == "set":
                self.settable[running.name] = start
            elif running.name in watches:
                self.observed[running.name] = Watched(watches[running.name], self.formulas, self.observations, start)
            else:
                self.observed[running.name] = Observed(running, self.formulas, start, 1 if start else 0)

    def run(self) -> None:
        """Walk every moment, until the contract has ended on every path."""
        for moment in self.dated.moments:
            if self.builder.number(self.alive) == 0.0:
                break
            for update in moment.updates:
                self._update(update)
            for number, event in enumerate(moment.events):
                if self.builder.number(self.alive) == 0.0:  # what stands below it on this day is not reached
                    break
                try:
                    self._event(event, moment.events[: number + 1])
                except Unreadable as trouble:
                    self.faults.append(trouble.fault)
            if moment.day.time <= 0.0:
                self._note_state(moment.day)

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

    def notes(self, makeup: Makeup) -> tuple[WatchNote, ...]:
        names = self.dated.contract.assets
        return tuple(
            WatchNote(name, names[state.side.asset], state.side.level_op.name.lower(),
                      "nearly exact" if state.side.asset in makeup.cash else "exact")
            if state.side
            else WatchNote(name, "", "", "unread")
            for name, state in self.observed.items()
            if isinstance(state, Watched)
        )

    def _start(self, formula: Formula | None) -> Values | None:
        """The value of `start:`, of terms and numbers only."""
        if formula is None:
            return None
        try:
            return self.formulas.read(formula, Scene(spot=_not_at_start, running=_not_at_start))
        except Unreadable as trouble:
            self.faults.append(trouble.fault)
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
        if occasion.day.time < days[-1].time if occasion else None in known:
            when = f"read on {occasion.day}" if occasion else "read before"
            raise Unreadable(place, f"'{name}' is fixed on {days[-1]} only and {when}")
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
        happens = self.builder.emit(Op.AND, self.alive, condition, place=event.place)
        if event.name:
            self.ledger.happened(event.name, occasion.day, happens)
        if occasion.day.time <= 0.0 and self.builder.number(self.alive) != 0.0:
            held = self.builder.number(happens)
            self.state.events.append(PastEvent(event, occasion.day, None if held is None else bool(held)))
        does = self._branch(event.then, dated, happens, scene)
        if event.otherwise:
            opposite = self.builder.emit(Op.NOT, condition, place=event.place)
            fails = self.builder.emit(Op.AND, self.alive, opposite, place=event.place)
            does_not = self._branch(event.otherwise, dated, fails, scene)
        else:
            does_not = _Branch(self.settable)
        self._merge(condition, does.values, does_not.values)
        for branch, flag in ((does, condition), (does_not, self.builder.emit(Op.NOT, condition))):
            if branch.ends:
                self._end(flag, branch.due, so_far)

    def _branch(self, actions: Iterable[Action], dated: DatedEvent, flag: int, scene: Scene) -> _Branch:
        """Carry out one side of an event, which is taken where `flag`. `end` leaves the rest of it undone."""
        branch = _Branch(dict(self.settable))
        if self.builder.number(flag) == 0.0:
            return branch
        day = dated.occasion.day
        scene = Scene(scene.spot, lambda name: self._running(name, day, branch.values), scene.occasion,
                      scene.remembered)
        for action in actions:
            match action:
                case Deliver():
                    self._deliver(action, dated.event.place, dated.occasion.day, dated.due[action], flag, scene)
                    branch.due.append(dated.due[action].time)
                case Pay():
                    due, amount = dated.due[action], self.formulas.one(action.amount, scene)
                    self._pay(action, Payment(action.leg, action.part, dated.event.place, day, due, flag, amount))
                    self._accrue(action, dated.occasion, amount, flag)
                    branch.due.append(due.time)
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

    def _deliver(self, action: Deliver, event: Place, day: Day, due: Day, flag: int, scene: Scene) -> None:
        shares = Shares(self.dated.contract, self.formulas, self.observations)
        worth, certain = shares.worth(action, day, due, scene, lambda chosen: self._settled(chosen, day))
        if day.time <= 0.0 and self.builder.number(flag) == 1.0:
            self.state.deliveries += certain
        if worth is not None:
            self._pay(action, Payment(action.leg, action.part, event, day, due, flag, worth))

    def _pay(self, pay: Pay, payment: Payment) -> None:
        emit = self.builder.emit
        past = payment.decided.time <= 0.0 and self.builder.number(payment.flag) == 1.0
        fixed = self.formulas.fixed(payment.amount) if past else None
        if fixed is not None:
            self.state.payments.append(FixedAmount(pay, payment.decided, payment.due, fixed))
        if payment.due.time < 0.0:  # paid already
            return
        discount = self.builder.leaf(Leaf(LeafKind.DISCOUNT, end=payment.due.time))
        present = emit(Op.MUL, payment.amount, discount, place=pay.place)
        paid = emit(Op.SELECT, payment.flag, present, self.builder.constant(0.0), place=pay.place)
        self.ledger.pay(pay, paid, payment, settled=fixed is not None)

    def _merge(self, condition: int, yes: dict[str, Values], no: dict[str, Values]) -> None:
        for name, value in yes.items():
            if value != no[name]:
                self.settable[name] = self.formulas.spread(Op.SELECT, (condition,), value, no[name])
            else:
                self.settable[name] = value

    def _end(self, flag: int, due: Sequence[float], so_far: Sequence[DatedEvent]) -> None:
        """End where `flag`. Its life runs to the branch's own payments, else to the day's, else to the day."""
        event, day = so_far[-1].event, so_far[-1].occasion.day
        of_the_day = [payment.time for dated in so_far for payment in dated.due.values()]
        emit = self.builder.emit
        ends = emit(Op.AND, self.alive, flag, place=event.place)
        self.ledger.ended(day, ends, max(due or of_the_day or [day.time]))
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
