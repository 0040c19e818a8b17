"""Candidate controls for what is watched on many dates: the same watched continuously, whose law is known.

A barrier or an extreme that is watched on dates is nearly one watched continuously a little further out: by 0.5826 of
a step's deviation (M. Broadie, P. Glasserman, S. Kou, "A continuity correction for discrete barrier options", 1997;
"Connecting discrete and continuous path-dependent options", 1999). Whether the moved barrier was touched between two
dates enters as a probability, given both levels, and not as a drawn flag: far less of the variance is then left.

The closed forms want a drift that is one multiple of the variance in every step. Where curves make it differ, the
control's own barrier moves with the forward, so that the level over its forward, of which this always holds, is watched
against a fixed one.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from mcx.estimators.reduction.candidates import Candidate, Market
from mcx.estimators.reduction.laws import Walk, extreme_call_mean, extreme_put_mean
from mcx.estimators.reduction.scheme import Control
from mcx.estimators.reduction.turning import Day
from mcx.tape.ops import Op
from mcx.tape.program import LevelKey

SHIFT = 0.5825971579390107  # -zeta(1/2) / sqrt(2 pi)
FEWEST_DATES = 4
MOST_BARRIERS = 3
ALIKE = 1e-9


@dataclass(frozen=True, slots=True)
class Watched:
    """One asset's level against one level on several days; `drift`: for each unit of variance, None where it varies."""

    asset: int
    level: float
    days: tuple[Day, ...]
    variances: np.ndarray  # (days,): of each step, the first from today
    log_forwards: np.ndarray  # (days,)
    spot: float
    drift: float | None

    @property
    def up(self) -> bool:
        return self.level > self.spot

    @property
    def moved(self) -> float:
        """The log of the level that is watched continuously in its place."""
        out = SHIFT * math.sqrt(float(self.variances.mean()))
        return math.log(self.level) + (out if self.up else -out)


def watched_candidates(market: Market) -> Iterator[Candidate]:
    """Survival weights, with what may be paid at the end of the watch, and continuous extremes."""
    for watched in _watched(market):
        yield from _survival(market, watched)
        yield from _extremes(market, watched, watched.up, watched.level)
    for asset in _compared_with_itself(market):
        spot = market.spot(asset)
        watched = _on(market, asset, spot, spot, max(day[1] for day in market.days if day[0] == asset))
        for up in (False, True):
            yield from _extremes(market, watched, up, spot)


def _compared_with_itself(market: Market) -> list[int]:
    """Assets whose levels are compared with one another, over several days: their extreme is taken."""
    days: dict[int, set[Day]] = {}
    for turn in market.turns:
        parts = [part for side in (turn.above, turn.below) for product, _ in side for part in product]
        if len(turn.above) == len(turn.below) == 1 and len(parts) == 2 and parts[0][1] == parts[1][1] == 1.0:
            (one, _), (other, _) = parts
            if one[0] == other[0]:
                days.setdefault(one[0], set()).update((one, other))
    return [asset for asset, found in sorted(days.items()) if len(found) >= FEWEST_DATES]


def _watched(market: Market) -> list[Watched]:
    """Levels that one asset is compared with on several dates, the most often watched first."""
    groups: dict[tuple[int, float], set[Day]] = {}
    for turn in market.turns:
        if not turn.below and len(turn.above) == 1 and len(turn.above[0][0]) == 1:
            ((day, power),) = turn.above[0][0]
            if power == 1.0:
                groups.setdefault((day[0], float(f"{turn.strike:.12g}")), set()).add(day)
    found = []
    for (asset, level), days in sorted(groups.items(), key=lambda group: (-len(group[1]), group[0])):
        spot = market.spot(asset)
        if len(days) >= FEWEST_DATES and abs(math.log(level / spot)) > ALIKE:
            found.append(_on(market, asset, level, spot, max(day[1] for day in days)))
    return found[:MOST_BARRIERS]


def _on(market: Market, asset: int, level: float, spot: float, end: float) -> Watched:
    days = tuple(day for day in market.days if day[0] == asset and day[1] <= end)
    to_date = np.array([market.law.variance_to(day) for day in days])
    log_forwards = np.array([market.law.log_forward(day) for day in days])
    variances = np.diff(to_date, prepend=0.0)
    nodes = [time for time in market.ready.market.nodes() if 0.0 < time < end and all(time != day[1] for day in days)]
    growth = np.diff(log_forwards, prepend=math.log(spot))
    positive = np.all(variances > 0.0)
    drifts = growth / variances if positive else np.array([0.0, 1.0])
    steady = not nodes and np.ptp(drifts) <= 1e-9 * max(1.0, float(np.abs(drifts).max()))
    return Watched(asset, level, days, variances, log_forwards, spot, float(drifts.mean()) - 0.5 if steady else None)


def _survival(market: Market, watched: Watched) -> Iterator[Candidate]:
    """The chance that the moved barrier was not touched, given the levels on the dates, times what may be paid."""
    if not np.all(watched.variances > 0.0):
        return
    emit, constant = market.builder.emit, market.builder.constant
    name, end = market.names[watched.asset], watched.days[-1]
    log_spot, drift, moved = math.log(watched.spot), watched.drift, watched.moved
    still = np.zeros(len(watched.days))
    if drift is None:  # watch the level over its forward: the barrier that moves with it
        still, drift = watched.log_forwards - log_spot, -0.5
        moved -= float(still.mean())
    walk = Walk(log_spot, drift, float(watched.variances.sum()), moved, watched.up)
    sign = -1.0 if watched.up else 1.0
    room = constant(max(sign * (log_spot - moved), 0.0))
    weight = constant(1.0)
    for day, variance, shift in zip(watched.days, watched.variances.tolist(), still.tolist(), strict=True):
        distance = emit(Op.SUB, market.log(day), constant(moved + shift))
        if watched.up:
            distance = emit(Op.NEG, distance)
        beyond = emit(Op.MAX, distance, constant(0.0))
        product = market.scaled(emit(Op.MUL, room, beyond), -2.0 / variance)
        weight = emit(Op.MUL, weight, emit(Op.SUB, constant(1.0), emit(Op.EXP, product)))
        room = beyond
    level = market.level(end)
    growth = math.exp(float(still[-1]))  # of the last level over what the walk ends at
    scale = 1.0 / watched.spot
    label = f"of {name} not at {watched.level:.6g} by {end[1]:.4g}y"
    yield Candidate(Control(f"chance {label}", walk.untouched(0.0, 1.0, -math.inf, math.inf)), weight)
    yield Candidate(Control(f"level {label}", scale * growth * walk.untouched(1.0, 0.0, -math.inf, math.inf)),
                    emit(Op.MUL, weight, market.scaled(level, scale)))
    for strike in _strikes_at(market, end):
        low = math.log(strike / growth)
        call = scale * walk.untouched(growth, -strike, low, math.inf)
        yield Candidate(Control(f"call at {strike:.6g} {label}", call),
                        emit(Op.MUL, weight, market.scaled(market.call(level, strike), scale)))
        yield Candidate(Control(f"digital at {strike:.6g} {label}", walk.untouched(0.0, 1.0, low, math.inf)),
                        emit(Op.MUL, weight, market.above(level, strike)))


def _strikes_at(market: Market, day: Day) -> list[float]:
    """Where the contract turns in the level of one day."""
    return sorted({turn.strike for turn in market.turns
                   if not turn.below and len(turn.above) == 1 and turn.above[0][0] == ((day, 1.0),)})


def _extremes(market: Market, watched: Watched, up: bool, level: float) -> Iterator[Candidate]:
    """What the continuous extreme, moved in, is beyond a level."""
    if watched.drift is None or not np.all(watched.variances > 0.0):
        return
    if watched.asset in market.makeup.cash or watched.asset in market.makeup.rates:
        return
    emit, constant = market.builder.emit, market.builder.constant
    end, start, variance = watched.days[-1][1], math.log(watched.spot), float(watched.variances.sum())
    inward = math.exp(SHIFT * math.sqrt(float(watched.variances.mean())) * (-1.0 if up else 1.0))
    extreme = market.scaled(market.builder.input(Op.HIGH if up else Op.LOW, LevelKey(watched.asset, end, 0.0)), inward)
    beyond = emit(Op.SUB, extreme, constant(level))
    gain = emit(Op.MAX, beyond if up else emit(Op.NEG, beyond), constant(0.0))
    exact = inward * (extreme_call_mean if up else extreme_put_mean)(start, watched.drift, variance, level / inward)
    side = "highest" if up else "lowest"
    yield Candidate(Control(f"option on the {side} of {market.names[watched.asset]} by {end:.4g}y at {level:.6g}",
                            exact / watched.spot), market.scaled(gain, 1.0 / watched.spot))
