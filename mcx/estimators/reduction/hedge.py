"""Gains of a delta hedge as controls, and the risk that a hedger who trades on those dates is left with.

On each date the hedger holds, of each asset, a delta regressed on a pilot run over what is known then: powers of the
level, its average so far, on which side of the contract's own levels it stands; nothing once the contract has ended.
Times the asset's move over its forward until the next date that is a martingale's gain, with mean zero exactly (L.
Clewlow, A. Carverhill, "On the simulation of contingent claims", J. Derivatives 2 (1994); M. Potters, J.-P. Bouchaud,
D. Sestovic, "Hedged Monte-Carlo", Physica A 289 (2001)). All under the pricing measure and without costs.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace

from mcx.dates.dated_contract import DatedContract
from mcx.estimators.reduction.candidates import Market, evenly
from mcx.estimators.reduction.scheme import Case, Control, Draft, Inapplicable, Method, Stage
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import Output

MOST_GAINS = 320
FEATURES = 6  # of each asset on each date, about
MOST_LEVELS = 2  # of the contract, of each asset on each date


def change(case: Case, draft: Draft) -> Draft:
    return hedged(case, draft, None)


def hedged(case: Case, draft: Draft, dates: int | None) -> Draft:
    """The draft with the gains of a hedge on so many of the contract's dates (None: as many as can be regressed),
    today the first."""
    market = Market(case.ready)
    if not market.days:
        raise Inapplicable("no level of a known law is read after today")
    market.builder = Builder.of(draft.tape)
    assets = sorted({asset for asset, _ in market.days})
    times = trading_times(market, dates)
    ended = _ended(market, case.ready.dated)
    found = {value: name for asset in assets for name, value in _gains(market, asset, times, ended)}
    outputs = (*draft.tape.outputs, *(Output.of("control", value, name) for value, name in found.items()))
    controls = tuple(Control(name, 0.0, must=True) for name in found.values())
    return replace(draft, tape=market.builder.tape(outputs), controls=(*draft.controls, *controls))


def trading_times(market: Market, dates: int | None) -> list[float]:
    """The times between which gains are made: today, evenly spread dates of the contract, and its last; the hedger
    trades on all but the last."""
    times = sorted({time for _, time in market.days})
    most = max(MOST_GAINS // (FEATURES * len({asset for asset, _ in market.days})), 1)
    return [0.0, *evenly(times, min(most, dates or most))]


def _ended(market: Market, dated: DatedContract) -> list[tuple[float, int]]:
    """When the contract may end early, with the flag."""
    times = {str(moment.day): moment.day.time for moment in dated.moments}
    outputs = (output for output in market.ready.unrolled.observed.outputs if output.kind == "end")
    return [(times[output.day], output.value) for output in outputs if output.day in times]


def _gains(market: Market, asset: int, times: list[float], ended: list[tuple[float, int]]) -> Iterator[tuple[str, int]]:
    """What a holding of one for each feature gains between two dates."""
    emit, constant = market.builder.emit, market.builder.constant
    name = market.names[asset]
    before, sum_so_far = constant(1.0), None
    log_forward = {}
    for number, (start, end) in enumerate(zip(times, times[1:])):
        key = (asset, end)
        forward = market.forward(key)
        log_forward[end] = math.log(forward)
        after = market.scaled(market.level(key), 1.0 / forward)
        gain = emit(Op.SUB, after, before)
        flags = [flag for time, flag in ended if time <= start]
        if flags:
            gain = emit(Op.MUL, gain, emit(Op.NOT, market.builder.fold(Op.OR, flags)))
        yield f"{name} held from {start:.4g}y", gain
        if number:
            for feature, value in _known(market, asset, start, log_forward[start], sum_so_far, number):
                yield f"{name} held from {start:.4g}y by {feature}", emit(Op.MUL, gain, value)
        log = emit(Op.SUB, market.log(key), constant(log_forward[end]))
        sum_so_far = log if sum_so_far is None else emit(Op.ADD, sum_so_far, log)
        before = after


def _known(market: Market, asset: int, time: float, log_forward: float, logs: int,
           count: int) -> Iterator[tuple[str, int]]:
    """What is known of an asset on a date, as numbers of about the size of 1."""
    emit, constant = market.builder.emit, market.builder.constant
    deviation = max(market.ready.market.vol_to(market.names[asset], time) * math.sqrt(time), 1e-6)
    log = emit(Op.SUB, market.log((asset, time)), constant(log_forward))
    u = market.scaled(log, 1.0 / deviation)
    square = emit(Op.MUL, u, u)
    yield "its level", u
    yield "the square of its level", square
    yield "the cube of its level", emit(Op.MUL, square, u)
    if count > 1:
        yield "its average", market.scaled(logs, 1.0 / (count * deviation))
    strikes = sorted({turn.strike for turn in market.turns if not turn.below and len(turn.above) == 1
                      and len(turn.above[0][0]) == 1 and turn.above[0][0][0][0][0] == asset
                      and turn.above[0][0][0][1] == 1.0})
    for strike in evenly(strikes, MOST_LEVELS) if strikes else ():
        yield f"its side of {strike:.6g}", market.above(market.level((asset, time)), strike)


HEDGE = Method("hedge", "gains of a delta hedge on the contract's dates", Stage.LEVELS, change)
