"""The price and its deltas at other spots, and the price at other spots and vols, on the same paths.

One number misleads near a barrier or just before a date. Between two rungs a condition on today's levels may turn; the
price jumps there, and the place of the condition is told.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass

from mcx.checked.contract import Contract
from mcx.checked.market import Market
from mcx.estimators.batches import Batches, Sampling
from mcx.estimators.estimate import Estimate
from mcx.estimators.revalue import Revaluer, impossible
from mcx.leaves.grouped import grouped
from mcx.leaves.jacobian import Input, moved
from mcx.leaves.market_map import MarketMap
from mcx.tape.ops import OPS
from mcx.tape.program import Tape
from mcx.tape.registers import uniform_values

Flags = Mapping[str, tuple[float, ...]]  # by the place of a condition on today's levels, as `today` finds them
Deltas = Callable[[Market], Batches | None]  # derivatives by every spot that is moved, in order, (64, spots)


@dataclass(frozen=True, slots=True)
class Step:
    """One rung: the price with its own error, the difference from the price as it stands with the error of that
    difference, and the derivatives by the spots, all in the unit of the price. `turning` are the places of conditions
    on today's levels that turn before the next rung."""

    spot_move: float
    price: Estimate
    change: Estimate
    deltas: tuple[Estimate, ...]
    turning: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Point:
    """One entry of a grid; price and change are None where `refused` says why there is no such market."""

    spot_move: float
    vol_move: float
    price: Estimate | None
    change: Estimate | None
    refused: str = ""


def spot_shifts(numbers: Iterable[Input], move: float) -> dict[Input, float]:
    """All spots moved by a share of themselves."""
    return {number: move * number.value for number in numbers if number.kind == "spot"}


def ladder(
    revaluer: Revaluer, market: Market, numbers: Sequence[Input], moves: Sequence[float], sampling: Sampling,
    base: Batches, deltas: Deltas,
) -> tuple[Step, ...]:
    """The price at each of the moves of the spots among `numbers`, and what `deltas` gives there, if anything. `base`
    is the price as it stands."""
    markets = [moved(market, spot_shifts(numbers, move)) for move in moves]
    flags = [today(revaluer.tape, there, revaluer.contract) for there in markets]
    found = []
    for number, (move, there) in enumerate(zip(moves, markets, strict=True)):
        parts, price = revaluer.price(there, sampling)
        change = parts.less(base).estimates()[0]
        places = turning(flags[number], flags[number + 1]) if number + 1 < len(flags) else ()
        slopes = deltas(there)
        found.append(Step(move, price, change, slopes.estimates() if slopes else (), places))
    return tuple(found)


def grid(
    revaluer: Revaluer, market: Market, numbers: Sequence[Input], spot_moves: Sequence[float],
    vol_moves: Sequence[float], sampling: Sampling, base: Batches, refused: Callable[[Market], str],
) -> tuple[Point, ...]:
    """The price at every pair of moves: spots by a share of themselves, every vol by a sum. `base` is the price as it
    stands; `refused` says why the tape does not hold on a market, '' where it does."""
    found = []
    for vol_move in vol_moves:
        vols = {number: vol_move for number in numbers if number.kind == "vol"}
        for move in spot_moves:
            shifts = {**spot_shifts(numbers, move), **vols}
            reason = impossible(market, revaluer.contract, shifts) or refused(moved(market, shifts))
            if reason:
                found.append(Point(move, vol_move, None, None, reason))
                continue
            parts, price = revaluer.price(moved(market, shifts), sampling)
            change = parts.less(base).estimates()[0]
            found.append(Point(move, vol_move, price, change))
    return tuple(found)


def today(tape: Tape, market: Market, contract: Contract) -> dict[str, tuple[float, ...]]:
    """The flags of the tape that are the same on every path, by the place of their condition."""
    values = uniform_values(tape, MarketMap(market, contract).values(grouped(tape.leaves)))
    found: dict[str, list[float]] = {}
    for step, value in zip(tape.instructions, values, strict=True):
        if OPS[step.op].flag and value is not None and step.place is not None:
            found.setdefault(str(step.place), []).append(value)
    return {place: tuple(flags) for place, flags in found.items()}


def turning(here: Flags, *others: Flags) -> tuple[str, ...]:
    """The places whose flags are not the same everywhere."""
    places = {place for flags in (here, *others) for place in flags}
    return tuple(sorted(place for place in places if any(here.get(place) != other.get(place) for other in others)))
