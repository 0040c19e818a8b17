"""How far today's levels are from those that matter: where the comparisons of the next dates turn.

A comparison over several assets (`worst(spot / initial) >= 70%`) is looked at for each asset by itself. Its sides must
be straight lines in the level, as they are in nearly every definition; others are left out.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace

from mcx.checked.formula import Binary, Call, Formula, IfElse, Name, OfAsset, Unary, walk
from mcx.dates.dated_contract import DatedContract, Occasion
from mcx.faults import Place
from mcx.leaves.market_map import MarketMap
from mcx.report.events import event_label
from mcx.report.settled import Settled
from mcx.report.state_results import Distance
from mcx.report.wording import COMPARED
from mcx.tape.builder import Builder
from mcx.tape.formulas import Formulas, Scene, Unreadable
from mcx.tape.state import State

OVER_ASSETS = ("worst", "best", "mean", "any", "all", "ranked")
STRAIGHT = 1e-9  # relative
TURNED = {"ever": (1.0,), "always": (0.0,)}  # and so for good


def distances(dated: DatedContract, state: State, market: MarketMap) -> Iterator[Distance]:
    """One line for each comparison to come and each asset, in order of the definition."""
    if state.ended is not None:
        return
    settled = Settled(dated.contract)
    scale = dated.history.scale or (1.0,) * len(dated.contract.assets)
    today = [market.forward(asset, 0.0) * each for asset, each in zip(dated.contract.assets, scale, strict=True)]
    seen: set[tuple] = set()
    for what, date, formula, occasion in _conditions(dated, settled, state):
        for comparison in _comparisons(formula, settled.lets):
            for asset, level in _turns(comparison, dated, state, occasion, today):
                name = dated.contract.assets[asset]
                if (what, name, level) not in seen:
                    seen.add((what, name, level))
                    yield Distance(what, date, name, level, today[asset], level / today[asset] - 1.0)


def _conditions(
    dated: DatedContract, settled: Settled, state: State
) -> Iterator[tuple[str, str, Formula, Occasion | None]]:
    """What is decided next: of every running flag that has not turned for good, and of every event, the first
    time after the valuation date."""
    wanted = {running.name: running for running in settled.running}
    later = [moment for moment in dated.moments if moment.day.time > 0.0]
    told: set[object] = set()
    turned = {name for name, running in wanted.items() if state.running.get(name) == TURNED.get(running.how, ())}
    for watch in dated.watches:
        if watch.end.time > 0.0 and watch.running.name in wanted and watch.running.name not in turned:
            yield watch.running.name, f"until {watch.end}", settled.formula(watch.running.formula), None
    for moment in later:
        for update in moment.updates:
            if update.running.name in wanted and update.running.name not in told | turned:
                told.add(update.running.name)
                yield update.running.name, str(moment.day), settled.formula(update.running.formula), update.occasion
        for each in moment.events:
            if each.event.condition is not None and each.event.place not in told:
                told.add(each.event.place)
                label = event_label(each.event)
                yield label, str(moment.day), settled.formula(each.event.condition), each.occasion


def _comparisons(formula: Formula, lets: dict[str, Formula]) -> Iterator[Binary]:
    """The comparisons in a formula, `let` names written out."""
    for part in walk(_plain(formula, lets)):
        if isinstance(part, Binary) and part.symbol in COMPARED and part.symbol not in ("==", "!="):
            yield part


def _plain(formula: Formula, lets: dict[str, Formula]) -> Formula:
    """A formula with `let` names written out and without what brings assets together."""
    match formula:
        case Name(name=name) if name in lets:
            return _plain(lets[name], lets)
        case Unary():
            return replace(formula, operand=_plain(formula.operand, lets))
        case Binary():
            return replace(formula, left=_plain(formula.left, lets), right=_plain(formula.right, lets))
        case IfElse(condition=condition, yes=yes, no=no):
            return replace(formula, condition=_plain(condition, lets), yes=_plain(yes, lets), no=_plain(no, lets))
        case Call(function=function) if function in OVER_ASSETS:
            return _plain(formula.arguments[0], lets)
        case Call():
            return replace(formula, arguments=tuple(_plain(part, lets) for part in formula.arguments))
        case OfAsset():
            return replace(formula, operand=_plain(formula.operand, lets))
    return formula


def _turns(
    comparison: Binary, dated: DatedContract, state: State, occasion: Occasion | None, today: list[float]
) -> Iterator[tuple[int, float]]:
    """For each asset the level at which both sides are equal."""
    gaps = [_gaps(comparison, dated, state, occasion, [level * factor for level in today])
            for factor in (1.0, 2.0, 3.0)]
    if None in gaps or len(gaps[0]) != len(today):
        return
    for asset, (first, second, third) in enumerate(zip(*gaps, strict=True)):
        slope = second - first
        bend = abs(third - second - slope)
        if slope and bend <= STRAIGHT * max(abs(slope), abs(first)) and (factor := 1.0 - first / slope) > 0.0:
            yield asset, today[asset] * factor


def _gaps(
    comparison: Binary, dated: DatedContract, state: State, occasion: Occasion | None, levels: list[float]
) -> list[float] | None:
    """Left side less right side for each asset; None where that is not known."""
    builder = Builder()

    def observed(name: str, place: Place, _: Occasion | None) -> tuple[int, ...]:
        if name not in state.terms:
            raise Unreadable(place, "not fixed yet")
        return tuple(builder.constant(value) for value in state.terms[name])

    formulas = Formulas(dated.contract, builder, observed)

    def running(name: Name) -> tuple[int, ...]:
        if name.name not in state.running:
            raise Unreadable(name.place, "not known")
        return tuple(builder.constant(value) for value in state.running[name.name])

    scene = Scene(lambda _: tuple(builder.constant(level) for level in levels), running, occasion)
    try:
        sides = [[formulas.fixed(value) for value in formulas.read(side, scene)]
                 for side in (comparison.left, comparison.right)]
    except Unreadable:
        return None
    if any(value is None or not math.isfinite(value) for side in sides for value in side):
        return None
    size = max(map(len, sides))
    left, right = (side if len(side) == size else side * size for side in sides)
    return [one - other for one, other in zip(left, right, strict=True)]
