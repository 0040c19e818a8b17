"""A dated contract becomes a tape: the walk over its dates that every later stage takes its meaning from.

On each date the running values are updated, then the events happen, both in file order, as `payoffs/README.md` says
them. What is random stays a value of the tape; what the contract and its dates decide folds away while building.
Running values need no care after the contract has ended, because nothing is paid or reported any more from there on.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace

from mcx.checked.formula import Formula, Name, Previous
from mcx.checked.payoff import Action, Assign, End, Event, Pay, Running
from mcx.dates.dated_contract import DatedContract, DatedEvent, Day, Moment, Occasion, Update
from mcx.faults import Fault, Place
from mcx.tape.builder import Builder
from mcx.tape.formulas import Formulas, Scene, Unreadable, Values, fixed_values
from mcx.tape.hits import Due, Hits, Stretch, which_first
from mcx.tape.ledger import Ledger
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Instruction, Leaf, LeafKind, LevelKey, Output, Tape
from mcx.tape.running import Observed, Watched
from mcx.tape.steps import PLAIN, SAME_TIME, Grid, Makeup, expand_levels
from mcx.tape.watching import conflicts
from mcx.tape.weights import Weighted, weigh

UNKNOWN_SUM = ("an asset with cash dividends that is converted at the rate of the day cannot be watched continuously: "
               "its law between two dates is not known; name the dates on which it is watched")
UNKNOWN_MOMENT = ("the moment of a hit is not known where cash dividends are still to come or a dividend on an ex date "
                  "may bring the hit about; name the dates on which the level is watched")


@dataclass(frozen=True, slots=True)
class WatchNote:
    """How a continuously watched running value enters: by which extremes of which assets, and by which law.

    `sides` are (asset, 'low' or 'high'), empty where nothing reads it; `law` is 'exact', 'nearly exact' (cash dividends
    to come enter at their mean over a step), 'bracketed' or 'unread'; `drawn` whether extremes are drawn instead of
    entering by their chances.
    """

    name: str
    sides: tuple[tuple[str, str], ...]
    law: str
    drawn: bool = False


@dataclass(frozen=True, slots=True)
class Unrolled:
    """A contract as a tape. With faults the tapes are empty.

    tape      reads normals and uniforms only: ready for `lower`
    bracketed whether outputs are the middle between two bounds, as far apart as their 'gap' outputs say
    observed  the same contract still reading LEVEL, LOW and HIGH: its meaning on given levels
    grid      the simulated times and assets
    levels    for each 'level' output, by its name, the asset's number and the time: its mean is the forward
    """

    tape: Tape
    observed: Tape
    grid: Grid
    levels: dict[str, tuple[int, float]]
    watches: tuple[WatchNote, ...]
    faults: tuple[Fault, ...] = ()
    bracketed: bool = False


def unroll(
    dated: DatedContract, *, nodes: Sequence[float], makeup: Makeup = PLAIN, pieces: int = 1,
    everything_drawn: bool = False,
) -> Unrolled:
    """The tape of a contract; `nodes` are the times of the market's curve points (`MarketMap.nodes`), `makeup` how
    levels come about (`MarketMap.makeup`).

    `pieces` refines the steps in which several assets are watched together; `everything_drawn` makes flags of
    continuous watches draws on each path where they could be probabilities.
    """
    walk = _Walk(dated, nodes)
    walk.run()
    observed = drop_dead_code(walk.builder.tape(walk.ledger.outputs()))
    faults = walk.faults or _unknown_laws(observed, makeup)
    if faults:
        return _refused(faults)
    observed, levels = _with_last_levels(observed, dated.contract.assets)
    weighted = weigh(observed, fixed_values(observed, dated.contract), everything_drawn)
    faults = conflicts(weighted.tape)
    if faults:
        return _refused(faults)
    tape, grid = expand_levels(weighted.tape, nodes, makeup, pieces)
    return Unrolled(tape, observed, grid, levels, walk.notes(weighted, makeup), (), bool(weighted.bracketed))


def _refused(faults: Iterable[Fault]) -> Unrolled:
    return Unrolled(Tape((), ()), Tape((), ()), Grid((0.0,), ()), {}, (), tuple(sorted(set(faults))))


def last_read(dated: DatedContract) -> float:
    """The last time at which the contract reads a level, in years; 0 if it reads none later."""
    walk = _Walk(dated, ())
    walk.run()
    observed = drop_dead_code(walk.builder.tape(walk.ledger.outputs()))
    return max((step.payload.time for step in observed.instructions if isinstance(step.payload, LevelKey)), default=0.0)


def _unknown_laws(tape: Tape, makeup: Makeup) -> list[Fault]:
    """Continuous watches of an asset with cash dividends that is converted at the rate of the day, and moments of hits
    that a dividend may bring about."""
    faults = []
    for step in tape.instructions:
        if step.op in (Op.LOW, Op.HIGH) and step.payload.asset in set(makeup.cash) & set(makeup.rates):
            faults.append(Fault(step.place, UNKNOWN_SUM))
        if step.op is Op.MOMENT:
            asset, start, end = step.payload.asset, step.payload.start, step.payload.time
            falls = any(asset == other and start < when < end + SAME_TIME for other, when in makeup.ex)
            if falls or asset in makeup.cash:
                faults.append(Fault(step.place, UNKNOWN_MOMENT))
    return faults


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
    due: list[int] = field(default_factory=list)  # times, as values of the tape


class _Walk:
    """The state of a contract while its dates are walked: alive flag, running values, ledger, faults."""

    def __init__(self, dated: DatedContract, nodes: Sequence[float] = ()):
        self.dated = dated
        payoff = dated.contract.payoff
        self.builder = Builder()
        self.formulas = Formulas(dated.contract, self.builder)
        self.ledger = Ledger.opened(self.builder, payoff)
        self.alive = self.builder.constant(1.0)
        self.faults: list[Fault] = []
        self.observed: dict[str, Observed | Watched] = {}
        self.settable: dict[str, Values] = {}
        self._before: dict[str, int] = {}  # flags that this day's events wait for, as they stood before it
        self.memory: dict[Place, dict[int, Values]] = {}  # by the place of the running value or event
        self._previous: dict[Place, tuple[Previous, ...]] = {}
        self.hits = Hits(dated, nodes, self.formulas)
        watches = {watch.running.name: watch for watch in dated.watches}
        for running in payoff.running:
            start = self._start(running.start)
            if running.how == "set":
                self.settable[running.name] = start
            elif running.name in watches:
                watch = watches[running.name]
                if watch.start.time < 0.0:
                    text = f"watched from {watch.start}, before the valuation date"
                    self.faults.append(Fault(running.place, text))
                self.observed[running.name] = Watched(watch, self.formulas, start)
            else:
                self.observed[running.name] = Observed(running, self.formulas, start, 1 if start else 0)

    def run(self) -> None:
        """Walk every moment, until the contract has ended on every path."""
        self.faults += which_first(self.dated)
        for moment in self.dated.moments:
            self._hit_until(moment.day.time)
            if self.builder.number(self.alive) == 0.0:
                break
            self._before = self._flags_before(moment)
            for update in moment.updates:
                self._update(update)
            for number, event in enumerate(moment.events):
                try:
                    self._event(event, moment.events[: number + 1])
                except Unreadable as trouble:
                    self.faults.append(trouble.fault)
        self._hit_until(math.inf)

    def _hit_until(self, time: float) -> None:
        """Everything that happens at hits up to a time."""
        for stretch in self.hits.until(time):
            if self.builder.number(self.alive) != 0.0:
                try:
                    self._hit(stretch)
                except Unreadable as trouble:
                    self.faults.append(trouble.fault)

    def _hit(self, stretch: Stretch) -> None:
        event = stretch.hit.event
        before, after = self.hits.turn(stretch, self.observed[stretch.hit.watch.running.name])
        turns = self._newly(before, after, event.at.place)
        if self.builder.number(turns) == 0.0:
            return
        scene = self.hits.scene(stretch, after)
        condition = self.formulas.one(event.condition, scene) if event.condition else self.builder.constant(1.0)
        self._carry_out(event, stretch.day, turns, condition, scene,
                        due=lambda pay: self.hits.due(stretch, pay, scene.part),
                        otherwise_due=lambda: self.hits.time(stretch, scene.part))

    def _newly(self, before: int, after: int, place: Place) -> int:
        """Whether a flag holds that did not before."""
        emit = self.builder.emit
        return emit(Op.AND, emit(Op.NOT, before, place=place), after, place=place)

    def _flags_before(self, moment: Moment) -> dict[str, int]:
        """The flags that events of a day wait for, where they are observed on dates, as they stand before it."""
        names = {each.event.at.name for each in moment.events if each.event.at.part == "once"}
        states = {name: self.observed[name].values for name in names}
        return {name: values[0] if values else self.builder.constant(0.0) for name, values in states.items()}

    def notes(self, weighted: Weighted, makeup: Makeup) -> tuple[WatchNote, ...]:
        names, found = self.dated.contract.assets, []
        for name, state in self.observed.items():
            if isinstance(state, Watched):
                sides = dict.fromkeys((names[one.key.asset], one.op.name.lower()) for one in state.barriers)
                nearly = any(one.key.asset in makeup.cash for one in state.barriers)
                law = "bracketed" if weighted.bracketed & set(state.barriers) else "nearly exact" if nearly else "exact"
                law = law if sides else "unread"
                found.append(WatchNote(name, tuple(sides), law, bool(weighted.drawn & set(state.barriers))))
        return tuple(found)

    def _start(self, formula: Formula | None) -> Values | None:
        """The value of `start:`, of terms and numbers only."""
        if formula is None:
            return None
        try:
            return self.formulas.read(formula, Scene(spot=_not_at_start, running=_not_at_start))
        except Unreadable as trouble:
            self.faults.append(trouble.fault)
            return (self.builder.constant(0.0),)

    def _update(self, update: Update) -> None:
        running = update.running
        state = self.observed[running.name]
        try:
            scene = self._scene(running, update.occasion, running.formula)
            state.update(self.formulas.read(running.formula, scene))
        except Unreadable as trouble:  # a fault only where somebody reads it
            state.trouble = trouble

    def _event(self, dated: DatedEvent, so_far: Sequence[DatedEvent]) -> None:
        event, occasion = dated.event, dated.occasion
        parts = _formulas_of((*event.then, *event.otherwise))
        scene = self._scene(event, occasion, event.condition, *parts)
        condition = self.formulas.one(event.condition, scene) if event.condition else self.builder.constant(1.0)
        turns = self.builder.constant(1.0)
        if event.at.part == "once":
            turns = self._newly(self._before[event.at.name], self.observed[event.at.name].values[0], event.at.place)
        constant, of_the_day = self.builder.constant, [each.time for one in so_far for each in one.due.values()]

        def due(pay: Pay) -> Due:
            day = dated.due[pay]
            return Due(self.builder.leaf(Leaf(LeafKind.DISCOUNT, end=day.time)), constant(day.time), day.time)

        self._carry_out(event, occasion.day, turns, condition, scene, due=due,
                        otherwise_due=lambda: constant(max(of_the_day or [occasion.day.time])))

    def _carry_out(self, event: Event, day: Day, turns: int, condition: int, scene: Scene, *,
                   due: Callable[[Pay], Due], otherwise_due: Callable[[], int]) -> None:
        """What an event does where it `turns`, by its condition. `otherwise_due` gives the time to which the contract
        lives if it ends here and the branch itself pays nothing."""
        emit = self.builder.emit
        chosen = emit(Op.AND, turns, condition, place=event.place)
        happens = emit(Op.AND, self.alive, chosen, place=event.place)
        if event.name:
            self.ledger.happened(event.name, day, happens)
        does = self._branch(event.then, day, happens, scene, due)
        flags = [(does, chosen)]
        values = self._merged(chosen, does.values, self.settable)
        if event.otherwise:
            other = emit(Op.AND, turns, emit(Op.NOT, condition, place=event.place), place=event.place)
            fails = emit(Op.AND, self.alive, other, place=event.place)
            does_not = self._branch(event.otherwise, day, fails, scene, due)
            flags.append((does_not, other))
            values = self._merged(other, does_not.values, values)
        self.settable = values
        for branch, flag in flags:
            if branch.ends:
                self._end(event, day, flag, branch.due, otherwise_due)

    def _branch(self, actions: Iterable[Action], day: Day, flag: int, scene: Scene,
                due: Callable[[Pay], Due]) -> _Branch:
        """Carry out one side of an event, which is taken where `flag`. `end` leaves the rest of it undone."""
        branch = _Branch(dict(self.settable))
        if self.builder.number(flag) == 0.0:
            return branch
        scene = replace(scene, running=lambda name: self._running(name, day, branch.values))
        for action in actions:
            match action:
                case Pay():
                    amount, when = self.formulas.one(action.amount, scene), due(action)
                    self._pay(action, amount, when, flag)
                    branch.due.append(when.time)
                case Assign(values=pairs):
                    branch.values.update({name: self.formulas.read(value, scene) for name, value in pairs})
                case End():
                    branch.ends = True
                    break
        return branch

    def _pay(self, pay: Pay, amount: int, due: Due, flag: int) -> None:
        emit = self.builder.emit
        present = emit(Op.MUL, amount, due.discount, place=pay.place)
        paid = emit(Op.SELECT, flag, present, self.builder.constant(0.0), place=pay.place)
        self.ledger.pay(pay, paid, due.latest)

    def _merged(self, flag: int, yes: dict[str, Values], no: dict[str, Values]) -> dict[str, Values]:
        """The settable values: those of one branch where its flag holds, else the others."""
        return {name: value if value == no[name] else self.formulas.spread(Op.SELECT, (flag,), value, no[name])
                for name, value in yes.items()}

    def _end(self, event: Event, day: Day, flag: int, due: Sequence[int], otherwise: Callable[[], int]) -> None:
        """End where `flag`. Its life runs to the branch's own payments, else to the day's, else to the day."""
        emit = self.builder.emit
        ends = emit(Op.AND, self.alive, flag, place=event.place)
        self.ledger.ended(day, ends, self.builder.fold(Op.MAX, due) if due else otherwise())
        self.alive = emit(Op.AND, self.alive, emit(Op.NOT, flag), place=event.place)

    def _scene(self, owner: Running | Event, occasion: Occasion, *formulas: Formula | None) -> Scene:
        """The names on a date, for the formulas of a running value or event. What each `previous` in them must
        remember for the next date is taken now, before any action."""
        day = occasion.day
        if day.time < 0.0:
            raise Unreadable(owner.place, f"observed on {day}, before the valuation date")
        scene = Scene(
            spot=lambda _: self._spot(day),
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

    def _spot(self, day: Day) -> Values:
        return tuple(
            self.builder.input(Op.LEVEL, LevelKey(asset, day.time)) for asset in range(len(self.dated.contract.assets))
        )

    def _running(self, name: Name, day: Day, values: dict[str, Values]) -> Values:
        if name.name in values:
            return values[name.name]
        state = self.observed[name.name]
        return state.read(name, day.time) if isinstance(state, Watched) else state.read(name)


def _formulas_of(actions: Iterable[Action]) -> list[Formula]:
    found: list[Formula] = []
    for action in actions:
        if isinstance(action, Pay):
            found.append(action.amount)
        elif isinstance(action, Assign):
            found += [value for _, value in action.values]
    return found


def _not_at_start(name: Name) -> Values:
    raise Unreadable(name.place, f"'{name.name}' is not known before the first date")
