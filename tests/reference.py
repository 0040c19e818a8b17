"""A second, plain implementation: one path of a dated contract at a time, in plain Python.

It shares with `mcx` the checked documents and the dates, and nothing after them: formulas are evaluated recursively
from their trees, the market is worked out in `plain_market.py`, and nothing is unrolled, folded, vectorised or
compiled. Given the numbers that the machine drew for a path, it must find the machine's payments to rounding.

Read `Reference.path` first, then `Walk`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from plain_market import PlainMarket, bridge_high, bridge_high_given_low, bridge_low, moment_of_hit

from mcx.checked import formula as trees
from mcx.checked.contract import Figures, LevelFixing, Word
from mcx.checked.market import Market
from mcx.checked.payoff import Assign, Deliver, End, Event, Pay, Running
from mcx.dates.dated_contract import DatedContract, DatedEvent, DatedHit, Day, Moment, Occasion, Update, Watch
from mcx.faults import Place

Value = float | bool | tuple  # a number, a flag, or one of them for each asset

BINARY: dict[str, Callable] = {
    "+": lambda a, b: a + b, "-": lambda a, b: a - b, "*": lambda a, b: a * b, "/": lambda a, b: a / b,
    "**": lambda a, b: a**b, "<": lambda a, b: a < b, "<=": lambda a, b: a <= b, ">": lambda a, b: a > b,
    ">=": lambda a, b: a >= b, "==": lambda a, b: a == b, "!=": lambda a, b: a != b,
    "and": lambda a, b: bool(a) and bool(b), "or": lambda a, b: bool(a) or bool(b),
}
ELEMENTWISE: dict[str, Callable] = {
    "min": min, "max": max, "abs": abs, "exp": math.exp, "log": math.log, "sqrt": math.sqrt,
    "clip": lambda x, low, high: min(max(x, low), high),
}
OVER_ASSETS: dict[str, Callable] = {
    "worst": min, "best": max, "mean": lambda x: sum(x) / len(x), "any": any, "all": all,
    "basket": lambda x, weights: sum(row_of(elementwise(BINARY["*"], x, weights))),
    "ranked": lambda x, k: sorted(x)[round(k) - 1],
}
JOIN: dict[str, Callable] = {
    "average": BINARY["+"], "total": BINARY["+"], "product": BINARY["*"], "lowest": min, "highest": max,
    "ever": BINARY["or"], "always": BINARY["and"], "latest": lambda old, new: new,
}
SAME_TIME = 1e-9  # years
TINY, HUGE = 1e-9, 1e9  # levels far below and far above any that a contract speaks of


def row_of(value: Value) -> tuple:
    """A value as one entry for each asset."""
    return value if isinstance(value, tuple) else (value,)


def plain(values: Sequence) -> Value:
    """One entry for each asset; with one asset that is a plain value."""
    return values[0] if len(values) == 1 else tuple(values)


def elementwise(function: Callable, *values: Value) -> Value:
    """The function of plain values, asset by asset where any of them has one for each asset."""
    count = max(len(row_of(value)) for value in values)
    spread = [value if isinstance(value, tuple) else (value,) * count for value in values]
    rows = [function(*row) for row in zip(*spread, strict=True)]
    return tuple(rows) if any(isinstance(value, tuple) for value in values) else rows[0]


@dataclass(frozen=True)
class Payment:
    """An amount discounted to the valuation date, and when it is paid (years)."""

    leg: str
    part: str
    time: float
    value: float


@dataclass
class Result:
    """What one path paid, and the named events whose condition held, with their days."""

    payments: list[Payment] = field(default_factory=list)
    met: set[tuple[str, Day]] = field(default_factory=set)
    ended: Day | None = None  # when an `end` was reached
    life: float = 0.0  # years to the payment due for that, or to the last possible payment

    @property
    def price(self) -> float:
        return sum(payment.value for payment in self.payments)

    def leg(self, name: str) -> float:
        return sum(payment.value for payment in self.payments if payment.leg == name)

    def part(self, name: str) -> float:
        return sum(payment.value for payment in self.payments if (payment.part or "unsorted") == name)

    def held(self, name: str, day: str = "") -> bool:
        """Whether a named event's condition held on a day, or on any."""
        return any(name == other and day in ("", str(when)) for other, when in self.met)


class Walk:
    """The state of one path while it walks along the contract."""

    def __init__(self, dated: DatedContract, market: PlainMarket):
        self.contract, self.payoff, self.market = dated.contract, dated.contract.payoff, market
        self.lets = {let.name: let.formula for let in self.payoff.lets}
        self.running = {running.name: running for running in self.payoff.running}
        self.values: dict[str, Value] = {}
        self.counts: dict[str, int] = {}
        self.remembered: dict[tuple[Place, int], Value] = {}
        self.spot: Value | None = None
        self.occasion: Occasion | None = None
        self.owner: Place | None = None
        self.result = Result()
        self.schedules, self.levels = dated.schedules, {}  # by time, as the path goes
        self.deliveries: list[tuple[Deliver, float, list[float], tuple[float, ...]]] = []
        for running in self.payoff.running:
            if running.start is not None:
                self.values[running.name], self.counts[running.name] = self.evaluate(running.start), 1

    def evaluate(self, node: trees.Formula) -> Value:
        """The value of a formula on this date of this path."""
        match node:
            case trees.Number(value=value, kind=kind):
                return bool(value) if kind.is_flag else value
            case trees.Name(name=name):
                return self.named(name)
            case trees.ChoiceIs(term=term, word=word, negated=negated):
                return (self.contract.terms[term].text == word) != negated
            case trees.Given(term=term):
                return term in self.contract.terms
            case trees.Unary(symbol="-", operand=operand):
                return elementwise(lambda x: -x, self.evaluate(operand))
            case trees.Unary(operand=operand):
                return elementwise(lambda x: not x, self.evaluate(operand))
            case trees.Binary(symbol="and" | "or" as symbol, left=left, right=right):
                first = self.evaluate(left)
                if not isinstance(first, tuple) and bool(first) == (symbol == "or"):
                    return first  # decided: the other side need not have a value
                return elementwise(BINARY[symbol], first, self.evaluate(right))
            case trees.Binary(symbol=symbol, left=left, right=right):
                return elementwise(BINARY[symbol], self.evaluate(left), self.evaluate(right))
            case trees.IfElse(condition=condition, yes=yes, no=no):
                chosen = self.evaluate(condition)
                if not isinstance(chosen, tuple):  # only the branch that is taken need have a value
                    return self.evaluate(yes if chosen else no)
                return elementwise(lambda c, a, b: a if c else b, chosen, self.evaluate(yes), self.evaluate(no))
            case trees.Call(function=function, arguments=arguments) if function in OVER_ASSETS:
                first, *others = map(self.evaluate, arguments)
                everyone = first if isinstance(first, tuple) else (first,) * len(self.contract.assets)
                return OVER_ASSETS[function](everyone, *others)
            case trees.Call(function=function, arguments=arguments):
                return elementwise(ELEMENTWISE[function], *map(self.evaluate, arguments))
            case trees.OfAsset(operand=operand, asset=asset):
                name = asset if asset in self.contract.assets else self.contract.terms[asset].text
                value = self.evaluate(operand)
                return value[self.contract.assets.index(name)] if isinstance(value, tuple) else value
            case trees.Previous(first=first):
                if self.occasion.earlier is None:
                    return self.evaluate(first)
                return self.remembered[self.owner, id(node)]
        raise TypeError(f"no meaning for {node!r}")

    def named(self, name: str) -> Value:
        """The value of a name on this date."""
        if name == "spot":
            if self.spot is None:
                raise LookupError(f"the level on {self.occasion.day} is not on the grid")
            return self.spot
        if name in ("nth", "n_dates", "years", "period"):
            return float(getattr(self.occasion, name))
        if name in self.lets:
            return self.evaluate(self.lets[name])
        if name in self.running:
            value = self.values[name]
            averaged = self.running[name].how == "average"
            return elementwise(lambda total: total / self.counts[name], value) if averaged else value
        match self.contract.terms[name]:
            case Figures(rows=rows, per_date=False):
                return plain(rows[0])
            case Figures(rows=rows):
                return plain(rows[self.occasion.dates[self.payoff.term(name).per]])
            case Word(text=text):
                return text == "true"
            case LevelFixing(how=how):
                days = self.schedules[name]
                seen = [next(levels for time, levels in self.levels.items() if abs(time - day.time) < SAME_TIME)
                        for day in days]
                join = {"lowest": min, "highest": max}.get(how, lambda each: sum(each) / len(days))
                return plain(tuple(map(join, zip(*seen, strict=True))))
        raise TypeError(f"'{name}' has no value in a formula")

    def shares(self, action: Deliver) -> list[float]:
        """How many shares of each asset for each unit of the notional, 0 for those that are not delivered."""
        count = len(self.contract.assets)
        numbers, chosen = (self.evaluate(each) if each is not None else True for each in (action.amount, action.which))
        numbers, chosen = (row_of(each) if len(row_of(each)) == count else row_of(each) * count
                           for each in (numbers, chosen))
        return [number if taken else 0.0 for number, taken in zip(numbers, chosen, strict=True)]

    def deliver(self, time: float, levels: tuple[float, ...]) -> None:
        """The deliveries of a time: whole shares of each note at their level then, fractions at the level before."""
        for action, due, numbers, before in [each for each in self.deliveries if abs(each[1] - time) < SAME_TIME]:
            lot, worth = self.contract.denomination or 1.0, 0.0
            for number, now, then in zip(numbers, levels, before, strict=True):
                whole = math.floor(number * lot * (1 + 1e-12)) / lot
                worth += whole * now + (number - whole) * then
            self.result.payments.append(Payment(action.leg, action.part, due, worth * self.market.discount(due)))

    def look(self, occasion: Occasion | None, owner: Running | Event, levels: Value | None) -> None:
        """Formulas now speak of these levels and of this occasion of this running value or event."""
        self.occasion, self.owner, self.spot = occasion, owner.place, levels

    def kept_for_next(self, formulas: Sequence[trees.Formula]) -> dict[tuple[Place, int], Value]:
        """What `previous` in these formulas will ask for on the next date of this running value or event."""
        queue, kept = list(formulas), {}
        while queue:
            for node in trees.walk(queue.pop()):
                if isinstance(node, trees.Name) and node.name in self.lets:
                    queue.append(self.lets[node.name])
                elif isinstance(node, trees.Previous):
                    kept[self.owner, id(node)] = self.evaluate(node.operand)
        return kept

    def observe(self, running: Running) -> None:
        """One more observation enters a running value."""
        value = self.evaluate(running.formula)
        if self.occasion is not None:
            self.remembered |= self.kept_for_next([running.formula])
        if running.how in ("total", "average", "product"):
            value = elementwise(float, value)
        name = running.name
        self.values[name] = elementwise(JOIN[running.how], self.values[name], value) if name in self.values else value
        self.counts[name] = self.counts.get(name, 0) + 1

    def happen(self, dated_event: DatedEvent) -> bool:
        """Carry out an event; True if the contract ends."""
        event, day = dated_event.event, dated_event.occasion.day
        holds = event.condition is None or all(row_of(self.evaluate(event.condition)))
        if holds and event.name:
            self.result.met.add((event.name, day))
        kept, due = self.kept_for_next(formulas_of(event)), []
        for action in event.then if holds else event.otherwise:
            match action:
                case Deliver():
                    due.append(dated_event.due[action].time)
                    self.deliveries.append((action, due[-1], self.shares(action), row_of(self.spot)))
                case Pay(amount=amount, leg=leg, part=part):
                    (paid,) = row_of(self.evaluate(amount))
                    due.append(dated_event.due[action].time)
                    if due[-1] < 0.0:
                        continue  # paid already
                    self.result.payments.append(Payment(leg, part, due[-1], paid * self.market.discount(due[-1])))
                case Assign(values=values):
                    self.values.update([(name, self.evaluate(right)) for name, right in values])
                case End():
                    self.result.ended, self.result.life = day, max(due, default=math.nan)
                    return True
        self.remembered |= kept
        return False


def formulas_of(event: Event) -> list[trees.Formula]:
    """Every formula written in an event."""
    found = [event.condition] if event.condition is not None else []
    for action in (*event.then, *event.otherwise):
        if isinstance(action, Pay):
            found.append(action.amount)
        elif isinstance(action, Assign):
            found += [right for _, right in action.values]
    return found


class Reference:
    """A dated contract under a market, on the grid of steps that a path was drawn for.

    `grid` holds the ends of the steps in years; the first step begins at the valuation date. Every date on which a
    level is read must be on the grid, and inside a continuous watch every node of rates, yields and vols as well.
    `assets` are the numbers of those that move, in order; nothing later than the spot of the others may be read.
    """

    def __init__(self, dated: DatedContract, market: Market, grid: Sequence[float], assets: Sequence[int]):
        self.dated, self.grid, self.assets = dated, tuple(grid), tuple(assets)
        self.market = PlainMarket(market, dated.contract, max(grid, default=0.0))
        self.rates = [self.market.row_of_rate(number) for number in range(len(self.market.assets))]
        self.spots = tuple(asset.spot.value * (1.0 if rate is None else self.market.start(rate))
                           for asset, rate in zip(self.market.assets, self.rates, strict=True))
        self.starts = {row: math.log(self.market.start(row)) for row in assets}
        self.escrows = [bool(self.market.cash(number)) for number in range(len(self.market.assets))]
        self.steps = [self.market.step(assets, start, end) for start, end in zip((0.0, *grid), grid, strict=False)]
        self.moments: dict[float, list[Moment]] = {}
        for moment in dated.moments:
            self.moments.setdefault(self.snap(moment.day.time), []).append(moment)
        self.order = {running.name: k for k, running in enumerate(dated.contract.payoff.running)}
        self.sides = {watch.running.name: self.watched_sides(watch.running) for watch in dated.watches}
        for watch in dated.watches:
            inside = [t for t in self.market.nodes if watch.start.time < t < watch.end.time]
            missing = {*map(self.snap, inside), self.snap(watch.end.time)} - {*grid, 0.0}
            assert not missing, f"{running_label(watch.running)} is watched over {sorted(missing)}, not on the grid"

    def snap(self, time: float) -> float:
        """The grid time that a time is, but for rounding."""
        return next((known for known in (0.0, *self.grid) if abs(known - time) < SAME_TIME), time)

    def watched_sides(self, running: Running) -> set[tuple[int, str]]:
        """Which extremes of which assets a continuous watch needs, found by trying levels in its formula.

        An extreme of a number needs the assets that the number depends on. A flag is needed from the side on which,
        one asset moved alone from one far end to the other, or from the spots to one of them, it becomes what it waits
        for.
        """
        walk, count, found = Walk(self.dated, self.market), len(self.spots), set()

        def value(levels: list[float]) -> Value:
            walk.look(None, running, plain(levels))
            return walk.evaluate(running.formula)

        for asset in range(count):
            for side, far, calm in (("low", TINY, [HUGE] * count), ("high", HUGE, [TINY] * count),
                                    ("low", TINY, self.spots), ("high", HUGE, self.spots)):
                before = value(list(calm))
                after = value([far if k == asset else level for k, level in enumerate(calm)])
                if running.how in ("lowest", "highest"):
                    wanted = before != after and side == {"lowest": "low", "highest": "high"}[running.how]
                else:
                    wanted = before != after and after == (running.how == "ever")
                if wanted:
                    found.add((asset, side))
        return found

    def path(self, normal: Callable[[int, int], float], uniform: Callable[[int, int, str], float],
             pair: tuple[float, float] = (math.nan, math.nan)) -> Result:
        """What the contract pays on one path.

        `normal(step, k)` is the normal of the k-th moving asset in a step, `uniform(step, asset, side)` the uniform of
        a watched extreme inside it, side 'low' or 'high'; `pair` a normal and a uniform for the moment of a hit.
        """
        self.pair = pair
        walk, levels, logs = Walk(self.dated, self.market), self.spots, dict(self.starts)
        walk.result.life = max((day.time for moment in self.dated.moments for event in moment.events
                                for day in event.due.values()), default=0.0)
        for hit in self.dated.hits:
            pays = [one for one in (*hit.event.then, *hit.event.otherwise) if isinstance(one, Pay)]
            latest = [hit.due[pay][-1].time if pay in hit.due else hit.watch.end.time for pay in pays]
            walk.result.life = max([walk.result.life, *latest])
        starts = {self.snap(watch.start.time) for watch in self.dated.watches}
        ended, today = False, self.spots
        fixed = {self.snap(day.time): day for days in self.dated.schedules.values() for day in days if day.time <= 0.0}
        for time in sorted({0.0, *self.grid, *self.moments, *starts, *fixed}):
            if time <= 0.0:
                levels = self.fixings(fixed[time]) if time in fixed else today
            low = high = None
            before = levels
            if time in self.grid:
                step = self.grid.index(time)
                levels, low, high = self.advance(step, levels if step else today, logs, normal, uniform)
            known = time <= 0.0 or time in self.grid
            walk.levels[time] = levels
            ended = ended or self.live(walk, time, plain(levels) if known else None, low, high, (before, levels))
            walk.deliver(time, levels)
            if ended and not any(due > time + SAME_TIME for _, due, *_ in walk.deliveries):
                break
        return walk.result

    def fixings(self, day: Day) -> tuple[float, ...]:
        """The levels that were fixed on a day, as published; today's level where there is none. For contracts without
        adjustments, disrupted days and composite assets."""
        fixed = self.market.market.fixings
        return tuple(fixed.get(asset.name, {}).get(day.date, spot if day.time == 0.0 else math.nan)
                     for asset, spot in zip(self.market.assets, self.spots, strict=True))

    def advance(self, step: int, levels: tuple[float, ...], logs: dict[int, float], normal: Callable[[int, int], float],
                uniform: Callable[[int, int, str], float]) -> tuple[tuple[float, ...], Value, Value]:
        """Levels at the end of a step, and the lowest and highest inside it where they are watched; moves the logs of
        what is simulated on."""
        numbers, time, before = self.steps[step], self.grid[step], dict(logs)
        for row, drift, weights in zip(self.assets, numbers.drifts, numbers.factor, strict=True):
            logs[row] += drift + sum(weight * normal(step, k) for k, weight in enumerate(weights) if weight)
        after = list(levels)
        for asset in range(len(levels)):
            if asset in logs:
                after[asset] = math.exp(logs[asset]) + (self.market.escrow(asset, time) if self.escrows[asset] else 0.0)
                after[asset] *= 1.0 if self.rates[asset] is None else math.exp(logs[self.rates[asset]])
        low, high = list(after), list(after)
        watched, drawn = self.watched_in(step), {}
        for asset, side in sorted(watched, key=lambda one: (one[0], one[1] == "high")):  # minima first
            drawn[asset, side] = self.bridge(step, asset, side, before, logs, uniform(step, asset, side),
                                             drawn.get((asset, "low")))
            found = self.extreme(step, asset, drawn[asset, side])
            if side == "low":
                low[asset] = min(found, levels[asset], after[asset])
            else:
                high[asset] = max(found, levels[asset], after[asset])
        return tuple(after), plain(low), plain(high)

    def bridge(self, step: int, asset: int, side: str, before: dict[int, float], after: dict[int, float],
               uniform: float, lowest: float | None) -> float:
        """The lowest or highest log inside a step, until just before a dividend at its end; `lowest` where it is
        known."""
        rows, variance = self.rows(asset), self.variance(step, asset)
        jump = self.market.jump(asset, self.grid[step])
        ends = sum(before[row] for row in rows), sum(after[row] for row in rows) - jump
        if side == "low":
            return bridge_low(*ends, variance, uniform)
        if lowest is not None:
            return bridge_high_given_low(*ends, variance, lowest, uniform)
        return bridge_high(*ends, variance, uniform)

    def rows(self, asset: int) -> list[int]:
        """What is simulated of which an asset's level is made."""
        return [asset] if self.rates[asset] is None else [asset, self.rates[asset]]

    def variance(self, step: int, asset: int) -> float:
        """The variance of the log of an asset's level over a step."""
        start, end, rows = (0.0, *self.grid)[step], self.grid[step], self.rows(asset)
        return sum(self.market.covariance(one, other, start, end) for one in rows for other in rows)

    def extreme(self, step: int, asset: int, log: float) -> float:
        """The level that a bridge's extreme is."""
        market, start, end = self.market, (0.0, *self.grid)[step], self.grid[step]
        level = math.exp(log)
        if not self.escrows[asset]:
            return level
        return level + (market.escrow(asset, start) + market.escrow(asset, end, before=True)) / 2

    def watched_in(self, step: int) -> set[tuple[int, str]]:
        """The assets and sides that are watched inside a step."""
        start, end = (0.0, *self.grid)[step], self.grid[step]
        return {side for watch in self.dated.watches
                if self.snap(watch.start.time) <= start and end <= self.snap(watch.end.time)
                for side in self.sides[watch.running.name] if side[0] in self.assets}

    def live(self, walk: Walk, time: float, levels: Value | None, low: Value | None, high: Value | None,
             ends: tuple[tuple[float, ...], tuple[float, ...]]) -> bool:
        """All that happens at one time: running values in file order, then events; True if the contract ends."""
        moments = self.moments.get(time, [])
        todo: list[Watch | Update] = [update for moment in moments for update in moment.updates]
        todo += [watch for watch in self.dated.watches
                 if self.snap(watch.start.time) <= time <= self.snap(watch.end.time)]
        before = dict(walk.values)
        for item in sorted(todo, key=lambda one: self.order[one.running.name]):
            if isinstance(item, Update):
                walk.look(item.occasion, item.running, levels)
                walk.observe(item.running)
                continue
            seen = [levels] if self.snap(item.start.time) == time else [low, high] if low is not None else []
            for extreme in seen:
                walk.look(None, item.running, extreme)
                walk.observe(item.running)
        for hit in self.dated.hits:
            name = hit.event.at.name
            if walk.values.get(name) and not before.get(name) and self.hit(walk, hit, time, ends):
                return True
        events = [event for moment in moments for event in moment.events]
        for number, dated_event in enumerate(events):
            name = dated_event.event.at.name
            if dated_event.event.at.part == "once" and (before.get(name) or not walk.values[name]):
                continue
            walk.look(dated_event.occasion, dated_event.event, levels)
            if walk.happen(dated_event):
                if math.isnan(walk.result.life):  # nothing is paid with the end itself: what fell due that day, if any
                    due = [day.time for event in events[: number + 1] for day in event.due.values()]
                    walk.result.life = max(due, default=dated_event.occasion.day.time)
                return True
        return False


    def hit(self, walk: Walk, hit: DatedHit, time: float, ends: tuple[tuple[float, ...], tuple[float, ...]]) -> bool:
        """What happens at the hit of a watch inside the step that ends at `time`; True if the contract ends."""
        running, moment, levels = hit.watch.running, time, ends[1]
        if time > self.snap(hit.watch.start.time):
            ((asset, _),) = self.sides[running.name]
            level, step = self.turning_level(walk, running, asset, ends[0]), self.grid.index(time)
            d0, d1 = (abs(math.log(end[asset] / level)) for end in ends)
            variance = self.variance(step, asset)
            start = (0.0, *self.grid)[step]
            moment = start + (time - start) * moment_of_hit(d0, d1, variance, *self.pair)
            levels = tuple(level if k == asset else math.nan for k in range(len(levels)))
        day, number = Day(moment), 0
        if hit.days:  # a day ends with its close
            number = next(k for k, one in enumerate(hit.days) if one.time >= moment - SAME_TIME)
            day = hit.days[number]

        def due_of(hit: DatedHit) -> dict[Pay, Day]:
            pays = [one for one in (*hit.event.then, *hit.event.otherwise) if isinstance(one, Pay)]
            return {pay: hit.due[pay][number] if pay in hit.due else day for pay in pays}

        occasion = Occasion(day, "", 1, 1, math.nan, day.time - self.dated.start.time, {})
        walk.look(occasion, hit.event, plain(levels))
        ended = walk.happen(DatedEvent(hit.event, occasion, due_of(hit)))
        if ended and math.isnan(walk.result.life):  # as on a date
            same = [one for one in self.dated.hits if one.watch == hit.watch]
            due = [paid.time for one in same[: same.index(hit) + 1] for paid in due_of(one).values()]
            walk.result.life = max(due, default=day.time)
        return ended

    def turning_level(self, walk: Walk, running: Running, asset: int, levels: tuple[float, ...]) -> float:
        """The level of an asset at which a flag turns, by halving between where it is and far beyond."""
        def holds(level: float) -> bool:
            walk.look(None, running, plain([level if k == asset else HUGE for k in range(len(levels))]))
            return bool(walk.evaluate(running.formula))

        calm = levels[asset]
        far = TINY if holds(TINY) else HUGE
        for _ in range(200):
            middle = math.sqrt(calm * far)
            calm, far = (calm, middle) if holds(middle) else (middle, far)
        return far


def running_label(running: Running) -> str:
    return f"'{running.name}' at {running.place}"
