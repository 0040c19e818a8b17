"""How a contract's value moves: every sensitivity with its error and the estimator that gave it.

Which estimators are valid is decided by the tape. Among the valid ones a pilot on its own stream chooses, for each
asset's delta, each vol curve and so on, the one with the smallest variance times cost; costs come from a fixed table,
so that one seed has one answer.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from itertools import groupby

import numpy as np

from mcx.checked.market import Market
from mcx.estimators.batches import Batches, Sampling
from mcx.estimators.bracket import Refinement
from mcx.estimators.derivative_tape import pairs_of
from mcx.estimators.differentiate import Coefficients, Differentiator
from mcx.estimators.drawn import Drawn
from mcx.estimators.estimate import Estimate
from mcx.estimators.ladder import Point, Step, grid, ladder, spot_shifts, today, turning
from mcx.estimators.methods import PATHWISE, Method, methods
from mcx.estimators.pace import announce, pace
from mcx.estimators.plan import Plan, Precision, plan
from mcx.estimators.price import refined
from mcx.estimators.ready import Ready
from mcx.estimators.revalue import (
    IN_PROPORTION,
    RATES,
    Revaluer,
    central_differences,
    impossible,
    second_differences,
    step_of,
)
from mcx.estimators.sensitivities import Curvature, Sensitivity, first_order, second_order
from mcx.estimators.theta import between, theta
from mcx.leaves.jacobian import Input, inputs, moved, without_derivative
from mcx.leaves.market_map import MarketMap
from mcx.machine.run import Notice, Stream, values_by_path
from mcx.tape.smooth import Jump

PILOT_PATHS = 1 << 14
NEAR = 1.0 / 12.0  # years
NEARBY = 0.01  # of the spots
ESTIMATORS = ("auto", "pathwise", "likelihood", "mixed")
REVALUATION = "revaluation"
AS_ONE = ("assets that move as one are watched together: moved alone its vol would part them, and then of their joint "
          "law only bounds are known; a grid of vol moves takes all along")


@dataclass(frozen=True, slots=True)
class Wish:
    """What is asked for. `assets` () are all; no `spot_moves`: no ladder; no `vol_moves`: no grid."""

    estimator: str = "auto"
    bump: float | None = None
    assets: tuple[str, ...] = ()
    spot_moves: tuple[float, ...] = ()
    vol_moves: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True)
class Value:
    """A sensitivity in the units of the trade, with what gave it."""

    what: Sensitivity | Curvature
    estimate: Estimate
    estimator: str
    note: str = ""


@dataclass(frozen=True, slots=True)
class Found:
    """Everything that a run found; `refused` are sensitivities with the reason why there is no value. `ready` is the contract
    as it was run; `refinement` how fine its steps are, where the price lies between bounds and everything is about their
    middle."""

    price: Estimate
    values: tuple[Value, ...]
    refused: tuple[tuple[Sensitivity | Curvature, str], ...]
    comparison: tuple[Value, ...]
    choices: tuple[str, ...]
    jumps: tuple[Jump, ...]
    ladder: tuple[Step, ...]
    grid: tuple[Point, ...]
    notes: tuple[str, ...]
    plan: Plan
    seed: int
    reduction: tuple[str, ...]
    seconds: float
    ready: Ready
    refinement: Refinement | None
    interrupted: bool = False


def sensitivities(
    ready: Ready,
    market: Market,
    wish: Wish,
    asked: Precision,
    *,
    seed: int,
    threads: int | None = None,
    pieces: int | None = None,
    progress: Callable[[int, int, float], None] | None = None,
    notice: Notice | None = None,
    reduction: tuple[str, ...] = (),
) -> Found:
    """All sensitivities of a contract that were asked for; `pieces` prescribe how fine the steps are where the price lies
    between bounds, `reduction` names methods that change how paths are drawn (`estimators.drawn`).

    Raises Refusal where the estimator or a method asked for is not valid, RequestError for numbers of paths that points
    cannot have, and NonFinitePath, NonFiniteSum, KeyboardInterrupt as
    `Sampling.sums` does.
    """
    drawn = Drawn(reduction, seed, threads, notice)
    return _Run(ready, market, wish, asked, drawn, pieces, progress).found()


class _Run:
    """One contract's sensitivities under way."""

    def __init__(self, ready: Ready, market: Market, wish: Wish, asked: Precision, drawn: Drawn, pieces: int | None,
                 progress: Callable[[int, int, float], None] | None):
        self.ready, self.market, self.wish, self.drawn = ready, market, wish, drawn
        self.contract = ready.dated.contract
        self.numbers = inputs(market, self.contract)
        self.lines = [line for line in first_order(self.numbers, self.contract) if self._wanted(line.subject)]
        self.curvatures = [line for line in second_order(self.numbers, self.contract) if self._wanted(line.subject)]
        self._prepare(ready)
        self.plan, self.refinement = self._plan(asked), None
        if ready.unrolled.bracketed:
            self._refine(asked, pieces)
        announce(self.plan.paths, self._pace(), drawn.notice)
        counted = progress and (lambda done, _, error: progress(done, self.plan.paths, error))
        self.sampling = replace(drawn.sampling(self.ready, self.plan.paths), progress=counted)
        self.plan = replace(self.plan, paths=self.sampling.paths)
        self.revaluer = Revaluer.of(self.ready.unrolled.tape, self.contract, pairs=self.sampling.each == 2)
        self.piloted: dict[str, tuple[Coefficients, Batches, Batches]] = {}
        self.done: dict[str, tuple[Batches, Batches]] = {}
        self.base: tuple[Batches, Estimate] | None = None  # the price of the main run
        self.choices: list[str] = []
        self.refused: list[tuple[Sensitivity | Curvature, str]] = []
        self.notes: list[str] = []
        self.interrupted = False

    def _prepare(self, ready: Ready) -> None:
        """The contract as it is, how its pilot is drawn, and what is valid for it."""
        self.ready = ready
        self.pilot = self.drawn.sampling(ready, PILOT_PATHS, Stream.PILOT)
        self.methods = methods(ready, self.market, self.wish.estimator, self.pilot)
        self.bound: dict[str, Differentiator] = {}

    def found(self) -> Found:
        begun = time.perf_counter()
        kinks = {self.numbers.index(number): reason
                 for number, reason in without_derivative(self.market, self.contract).items()}
        kinks |= {k: AS_ONE for k, number in enumerate(self.numbers) if self._parts(number)}
        values = [*self._first(kinks), *self._second()]
        base, price = self.base or self.revaluer.price(self.market, self.sampling)
        comparison: list[Value] = []
        rungs: list[Step] = []
        points: list[Point] = []
        if not self.interrupted:
            try:
                values.append(self._theta(base))
                comparison += self._comparison(base)
                rungs += self._ladder(base)
                points += self._grid(base)
            except KeyboardInterrupt:
                self.interrupted = True
        self.notes += [*between(self.ready.dated, self.ready.unrolled.state), *self._near(values), *self._turning()]
        return Found(price, tuple(values), tuple(self.refused), tuple(comparison), tuple(self.choices),
                     self.methods.jumps, tuple(rungs), tuple(points), tuple(self.notes), self.plan, self.sampling.seed,
                     self.drawn.names, time.perf_counter() - begun, self.ready, self.refinement, self.interrupted)

    def _parts(self, number: Input) -> bool:
        """Whether a number that is moved alone parts assets that are watched as one."""
        return number.kind == "vol" and number.subject in {self.contract.assets[asset]
                                                           for asset in self.ready.unrolled.joined}

    def _wanted(self, subject: str) -> bool:
        """Whether an asset's or a pair's line was asked for; a currency's always is."""
        named = [name for name in subject.split("/") if name in self.contract.assets]
        return not self.wish.assets or all(name in self.wish.assets for name in named)

    def _prices(self, paths: int) -> np.ndarray:
        """The price on each path of the pilot."""
        program = replace(self.ready.program, outputs=self.ready.program.outputs[:1])
        return values_by_path(program, paths=paths, seed=self.pilot.seed, stream=Stream.PILOT,
                              threads=self.pilot.threads)[0]

    def _refine(self, asked: Precision, pieces: int | None) -> None:
        """Go on with steps so fine that the bounds of the price are close."""
        ready, self.plan, self.refinement = refined(self.ready, asked, self.plan, self._prices, seed=self.pilot.seed,
                                                    threads=self.pilot.threads, pieces=pieces)
        self._prepare(ready)

    def _plan(self, asked: Precision) -> Plan:
        def seconds_for(paths: int) -> float:
            begun = time.perf_counter()
            for method in self.methods.valid:
                self._bound(method).derivatives(self.drawn.sampling(self.ready, paths, Stream.PILOT))
            return time.perf_counter() - begun

        sampler = self.drawn.sampler(self.ready)
        found = plan(asked, sampler.independent, seconds_for, exact=self.ready.program.outputs[0] < 0, pace=self._pace())
        return found if asked.seconds is None else replace(found, paths=sampler.within_time(found.paths))

    def _pace(self) -> float:
        programs = (self._bound(method).program for method in self.methods.valid)
        return pace(programs, self.pilot.threads) / self.pilot.each

    def _bound(self, method: Method) -> Differentiator:
        """A method's tape on the market as it stands."""
        if method.name not in self.bound:
            self.bound[method.name] = method.on(self.market)
        return self.bound[method.name]

    def _pilot(self, method: Method) -> tuple[Coefficients, Batches, Batches]:
        """The coefficients of a method's controls, and what it finds on the pilot; each runs once."""
        if method.name not in self.piloted:
            found = self._bound(method).derivatives(self.pilot)
            if found.price.paths < self.pilot.paths:
                raise KeyboardInterrupt
            coefficients = found.fitted()
            self.piloted[method.name] = (coefficients, *found.with_controls(coefficients))
        return self.piloted[method.name]

    def _main(self, method: Method) -> tuple[Batches, Batches] | None:
        """First and second derivatives by a method, from the main run; None after an interruption of another's."""
        if method.name not in self.done:
            if self.interrupted:
                return None
            coefficients = self._pilot(method)[0]
            found = self._bound(method).derivatives(self.sampling)
            self.done[method.name] = found.with_controls(coefficients)
            self.base = found.base, found.price
            self.interrupted = found.price.paths < self.sampling.paths
        return self.done[method.name]

    def _first(self, kinks: Mapping[int, str]) -> Iterator[Value]:
        """The first-order sensitivities; all lines of one asset's delta, or of one curve, by one estimator, so that
        the nodes add up to the whole."""
        size = len(self.numbers)
        for (kind, subject), group in groupby(self.lines, key=self._family):
            lines = list(group)
            whole = lines[-1].weights(size)
            method = self._choice(f"{lines[0].name} of {subject}", kind, lambda pilot: pilot[1].estimate(whole))
            for line in lines:
                reason = next((kinks[column] for column in line.columns if column in kinks), "")
                found = None if method is None or reason else self._main(method)
                if found:
                    yield Value(line, found[0].estimate(line.weights(size)), method.name)
                else:
                    self.refused.append((line, reason or self._why_not(method, kind)))

    def _family(self, line: Sensitivity) -> tuple[str, str]:
        return self.numbers[line.columns[0]].kind, line.subject

    def _second(self) -> Iterator[Value]:
        every = pairs_of(len(self.contract.assets))
        for line in self.curvatures:
            weights = np.zeros(len(every))
            weights[every.index(line.assets)] = line.factor
            method = self._choice(f"{line.name} of {line.subject}", "gamma", lambda pilot: pilot[2].estimate(weights))
            found = method and self._main(method)
            if found:
                yield Value(line, found[1].estimate(weights), method.gamma)
            else:
                self.refused.append((line, self._why_not(method, "gamma")))

    def _why_not(self, method: Method | None, kind: str) -> str:
        return self.methods.why_not(kind) if method is None else "interrupted before its estimator had run"

    def _choice(self, words: str, kind: str, estimate: Callable[[tuple], Estimate]) -> Method | None:
        """The valid estimator with the smallest variance times cost in the pilot; None where none is valid."""
        valid = self.methods.for_kind(kind)
        if len(valid) < 2:
            return valid[0] if valid else None
        burden = {method.name: estimate(self._pilot(method)).standard_error**2
                  * self._bound(method).cost(self.pilot.plan) for method in valid}
        best = min(valid, key=lambda method: burden[method.name])
        others = ", ".join(f"{_times(burden[method.name], burden[best.name])} {method.name}" for method in valid
                           if method is not best)
        self.choices.append(f"{words}: {best.name}; variance times cost in the pilot: {others}")
        return best

    def _theta(self, base: Batches) -> Value:
        line = Sensitivity("theta", "", "1 day", f"{self.contract.currency} per calendar day", (), ())
        estimate = theta(self.ready, self.market, self._sampled, base).estimate(np.array([self.contract.size]))
        return Value(line, estimate, REVALUATION, "the document read one calendar day on")

    def _sampled(self, ready: Ready) -> Sampling:
        """The paths of the main run, on other steps of the contract."""
        return replace(self.sampling, plan=self.drawn.sampler(ready).scheme.plan)

    def _near(self, values: list[Value]) -> Iterator[str]:
        """A word about a first date so near that likelihood ratios scatter."""
        first = self.ready.unrolled.grid.times[1:2]
        scored = any(value.what.name == "delta" and value.estimator != PATHWISE for value in values)
        if scored and first and first[0] < NEAR:
            yield (f"the first simulated date is only {_so_many(365.0 * first[0], 'day')} away: the error of a "
                   f"likelihood ratio's delta grows as the root of that time shrinks, that of its gamma as the time "
                   f"itself does; a ladder of spot moves says more")

    def _turning(self) -> Iterator[str]:
        """A word about conditions on today's levels that a small move of the spots turns."""
        here, *there = (today(self.revaluer.tape, moved(self.market, spot_shifts(self._moving(), move)), self.contract)
                        for move in (0.0, -NEARBY, NEARBY))
        for place in turning(here, *there):
            yield (f"the condition at {place} is decided by today's levels and turns where spots move by "
                   f"{NEARBY:.0%}: the price may jump there, which no sensitivity shows; a ladder of spot moves does")

    def _moving(self) -> list[Input]:
        """The numbers that a ladder or a grid moves: spots and vols of the assets asked for."""
        return [number for number in self.numbers if number.kind in ("spot", "vol") and self._wanted(number.subject)]

    def _comparison(self, base: Batches) -> list[Value]:
        """The same sensitivities by revaluation, where a bump was asked for."""
        size, values = self.wish.bump, []
        if size is None:
            return values
        steps = {}
        for column, number in enumerate(self.numbers):
            if any(column in line.columns for line in self.lines):
                step = step_of(number, size)
                reasons = (impossible(self.market, self.contract, {number: side * step}) for side in (1.0, -1.0))
                reason = AS_ONE if self._parts(number) else next(filter(None, reasons), "")
                if reason:
                    self.notes.append(f"no revaluation for the {number}: moved by ±{step:g}, {reason}")
                else:
                    steps[number] = step
        found = central_differences(self.revaluer, self.market, steps, self.sampling) if steps else None
        at = {self.numbers.index(number): column for column, number in enumerate(steps)}
        for line in self.lines:
            if all(column in at for column in line.columns):
                weights = np.zeros(len(at))
                weights[[at[column] for column in line.columns]] = line.factors
                note = _bumped(self.numbers[line.columns[0]], size)
                values.append(Value(line, found.estimate(weights), REVALUATION, note))
        if self.curvatures:
            pairs = [tuple(self.numbers[column] for column in line.columns) for line in self.curvatures]
            second = second_differences(self.revaluer, self.market, pairs, size, self.sampling, base)
            for number, line in enumerate(self.curvatures):
                weights = np.zeros(len(pairs))
                weights[number] = line.factor
                values.append(Value(line, second.estimate(weights), REVALUATION, _bumped(pairs[number][0], size)))
        return values

    def _grid(self, base: Batches) -> tuple[Point, ...]:
        if not self.wish.vol_moves:
            return ()
        joined = {asset: leader for asset, leader in self.ready.market.makeup(self.ready.apart).leaders.items()
                  if asset in self.ready.unrolled.joined}

        def parted(there: Market) -> str:
            """Why the tape does not hold on a market: assets that it watches as one are so no more."""
            left = MarketMap.of(there, self.ready.dated).makeup().leaders if joined else {}
            return AS_ONE if any(left.get(asset) != leader for asset, leader in joined.items()) else ""

        return grid(self.revaluer, self.market, self._moving(), self.wish.spot_moves or (0.0,), self.wish.vol_moves,
                    self.sampling, base, parted)

    def _ladder(self, base: Batches) -> tuple[Step, ...]:
        if not self.wish.spot_moves:
            return ()
        spots = [column for column, number in enumerate(self.numbers)
                 if number.kind == "spot" and self._wanted(number.subject)]
        every = np.isin(np.arange(len(self.numbers)), spots).astype(float)
        method = self._choice("deltas of the ladder", "spot", lambda pilot: pilot[1].estimate(every))

        def deltas(market: Market) -> Batches | None:
            if method is None:
                return None
            found = method.on(market).derivatives(self.sampling).with_controls(self._pilot(method)[0])[0]
            return found.through(np.eye(len(self.numbers))[:, spots])

        return ladder(self.revaluer, self.market, self._moving(), self.wish.spot_moves, self.sampling, base, deltas)


def _times(burden: float, best: float) -> str:
    return f"{burden / best:.3g} times as much for" if best > 0.0 else "not 0 for"


def _so_many(number: float, unit: str) -> str:
    written = f"{number:.3g}"
    return f"{written} {unit}" if written == "1" else f"{written} {unit}s"


def _bumped(number: Input, size: float) -> str:
    if number.kind in IN_PROPORTION:
        return f"moved by ±{100 * size:.3g} %"
    step = step_of(number, size)
    return f"moved by ±{1e4 * step:.3g} bp" if number.kind in RATES else f"moved by ±{_so_many(100 * step, 'point')}"
