"""Which levels a price refers to: strikes, barriers, call levels, caps, found on the contract's tape.

A price turns where two values of the tape are compared, or the smaller or larger of them is taken. All levels that such
a place reads are moved together from their references, and where the two values cross, the price refers to these
levels: 60 % of each initial level for `worst(spot / initial) < 60%`, for a basket that share of each of its assets. A
place that compares levels of one date with those of another, or their return with a number, does not turn so; there the
earlier levels stay at the spot and the later move, and what is found is a share of a spot to come, in terms of today's.

Crossings are found by number, not by form, so that whatever a formula does to levels is followed.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np

from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Instruction, LevelKey, Tape
from mcx.tape.rules import evaluate

Numbers: TypeAlias = np.ndarray | float
Levels: TypeAlias = Callable[[LevelKey], Numbers]  # what levels are
Reads: TypeAlias = frozenset[tuple[int, float, Op]]  # assets, times, and which level

COMPARED = (Op.LT, Op.LE, Op.MIN, Op.MAX, Op.ABS)
READ = (Op.LEVEL, Op.LOW, Op.HIGH)
WIDEST = 50.0  # crossings are looked for from the reference over this to the reference times this
SCALES = np.exp(np.linspace(-np.log(WIDEST), np.log(WIDEST), 320) + 1.2345e-3)  # beside every round number
AT_ONCE = 256  # crossings that are narrowed together
MOST_HALVINGS = 60
CLOSE = 1e-12  # relative: between which a crossing is known
ROUNDING, NOISE = 1e-13, 1e-11  # relative, of a difference that is none: at a crossing, and in search of one
DIGITS = 11  # of a level: what differs by less is one
ASIDE = 1.07


@dataclass(frozen=True, slots=True)
class Turn:
    """A value of the tape that compares; `time` is the last of the levels that it reads, `alone` whether it reads
    levels of no other time."""

    value: int
    time: float
    alone: bool


@dataclass(frozen=True, slots=True)
class Strike:
    """A level of each of some assets, (number, level in the unit that the contract reads), that the price refers to.
    `forward_start`: a share of the spot of a later date, here of today's."""

    levels: tuple[tuple[int, float], ...]
    forward_start: bool
    turns: tuple[Turn, ...]


def price_alone(tape: Tape) -> Tape:
    """A contract's tape with the price, its first output, as the only one; moments of hits are put half-way, since no
    level that a price refers to hangs on them."""
    half = Instruction(Op.CONSTANT, payload=0.5)
    steps = tuple(half if step.op is Op.MOMENT else step for step in tape.instructions)
    return drop_dead_code(Tape(steps, tape.outputs[:1]))


def strikes(tape: Tape, known: Sequence[float | None], spots: Sequence[float]) -> tuple[Strike, ...]:
    """The levels that a price refers to, each once, in rising order. `tape` reads levels; `known`: by value, what is
    the same on every path; `spots` (assets,): today's levels in the unit that the contract reads."""
    references = _references(tape, known, spots)
    reads, returns = levels_read(tape, known), _returns(tape, known)
    found: dict[tuple, list[Turn]] = {}

    def note(number: int, scale: float, at: Sequence[float], forward_start: bool) -> None:
        assets = sorted({asset for asset, *_ in reads[number]})
        levels = tuple((k, float(f"{scale * at[k]:.{DIGITS}g}")) for k in assets)
        turn = Turn(number, _last(reads[number]), len(_times(reads[number])) == 1)
        found.setdefault((forward_start, levels), []).append(turn)

    places = [number for number, step in enumerate(tape.instructions) if step.op in COMPARED and reads[number]]
    turned = set()
    plain = [number for number in places if not returns[number] or len(_times(reads[number])) == 1]
    for number, scale in _crossings(tape, known, plain, lambda key, scales: references[key.asset] * scales):
        turned.add(number)
        note(number, scale, references, False)
    left = [number for number in places if number not in turned and _by_date(tape, known, number, reads[number], spots)]
    for time in sorted({_last(reads[number]) for number in left}):
        here = [number for number in left if _last(reads[number]) == time]
        for number, scale in _crossings(tape, known, here, _later(time, spots)):
            note(number, scale, spots, True)
    made = (Strike(levels, start, tuple(sorted(turns, key=lambda turn: turn.value)))
            for (start, levels), turns in found.items())
    return tuple(sorted(made, key=lambda one: (one.forward_start, [level for _, level in one.levels])))


def values_at(tape: Tape, known: Sequence[float | None], level: Levels) -> list[Numbers]:
    """Every value of a tape that reads levels."""
    values: list[Numbers] = []
    for number, step in enumerate(tape.instructions):
        if known[number] is not None:
            values.append(known[number])
        elif step.op in READ:
            values.append(level(step.payload))
        else:
            values.append(evaluate(step.op, *(values[k] for k in step.operands)))
    return values


def difference(tape: Tape, number: int, values: Sequence[Numbers]) -> Numbers:
    """The first less the second of what a value compares, 0 where that is rounding."""
    first, *rest = (values[k] for k in tape.instructions[number].operands)
    second = rest[0] if rest else 0.0
    gap = np.subtract(first, second)
    return np.where(np.abs(gap) <= ROUNDING * np.maximum(np.abs(first), np.abs(second)), 0.0, gap)


def _sizes(tape: Tape, values: Sequence[Numbers]) -> list[Numbers]:
    """What went into each value: of sums the largest part, so that a difference which is rounding is known as such."""
    sizes: list[Numbers] = []
    with np.errstate(all="ignore"):
        for step, value in zip(tape.instructions, values, strict=True):
            parts = [sizes[k] for k in step.operands]
            match step.op:
                case Op.ADD | Op.SUB | Op.MIN | Op.MAX | Op.NEG | Op.ABS | Op.SELECT:
                    parts = parts[1:] if step.op is Op.SELECT else parts
                    sizes.append(parts[0] if len(parts) == 1 else np.maximum(*parts))
                case Op.MUL:
                    sizes.append(parts[0] * parts[1])
                case Op.DIV:
                    sizes.append(parts[0] / np.abs(values[step.operands[1]]))
                case _:
                    sizes.append(np.abs(value))
    return sizes


def _references(tape: Tape, known: Sequence[float | None], spots: Sequence[float]) -> list[float]:
    """What each asset's level is divided by where it is divided by a number: its initial level; else the spot."""
    found: dict[int, float] = {}
    for step in tape.instructions:
        if step.op is Op.DIV and tape.instructions[step.operands[0]].op in READ:
            by = known[step.operands[1]]
            if by is not None and by > 0.0:
                found.setdefault(tape.instructions[step.operands[0]].payload.asset, by)
    return [found.get(asset, spot) for asset, spot in enumerate(spots)]


def levels_read(tape: Tape, known: Sequence[float | None]) -> list[Reads]:
    """The levels that each value hangs on."""
    nothing: Reads = frozenset()
    found: list[Reads] = []
    joined: dict[tuple[Reads, ...], Reads] = {}  # equal sets are held once
    for number, step in enumerate(tape.instructions):
        if known[number] is not None:
            found.append(nothing)
        elif step.op in READ:
            found.append(frozenset({(step.payload.asset, step.payload.time, step.op)}))
        else:
            parts = tuple(dict.fromkeys(found[k] for k in step.operands if found[k]))
            if parts not in joined:
                joined[parts] = nothing.union(*parts) if len(parts) != 1 else parts[0]
            found.append(joined[parts])
    return found


def _returns(tape: Tape, known: Sequence[float | None]) -> list[bool]:
    """Whether a value hangs on the ratio of what differs from path to path: on returns from date to date."""
    found: list[bool] = []
    for number, step in enumerate(tape.instructions):
        ratio = step.op is Op.DIV and all(known[k] is None for k in step.operands)
        found.append(known[number] is None and (ratio or any(found[k] for k in step.operands)))
    return found


def _times(reads: Reads) -> set[float]:
    return {time for _, time, _ in reads}


def _last(reads: Reads) -> float:
    return max(_times(reads))


def _later(time: float, spots: Sequence[float]) -> Callable[[LevelKey, np.ndarray], np.ndarray]:
    """Levels of a time moved from the spot, all before it at the spot."""
    return lambda key, scales: spots[key.asset] * (scales if key.time == time else np.ones_like(scales))


def _by_date(tape: Tape, known: Sequence[float | None], number: int, reads: Reads, spots: Sequence[float]) -> bool:
    """Whether a place compares what levels of several dates say about one another: two dates, or level with level; not
    the extremes of two stretches that are watched."""
    times = _times(reads)
    if any(op is not Op.LEVEL for _, _, op in reads):
        return False
    if len(times) < 3:
        return len(times) == 2
    one, two = (float(difference(tape, number, values_at(tape, known, lambda key: scale * spots[key.asset] * (
        ASIDE if key.time == max(times) else 1.0)))) for scale in (1.0, 2.0))
    return one != 0.0 and abs(two - 2.0 * one) <= 1e-9 * abs(two)


def _crossings(tape: Tape, known: Sequence[float | None], places: Sequence[int],
               moved: Callable[[LevelKey, np.ndarray], np.ndarray]) -> Iterator[tuple[int, float]]:
    """Where the difference of each place changes its sign, leaves 0 or comes to it, as scales."""
    if not places:
        return
    values = values_at(tape, known, lambda key: moved(key, SCALES))
    sizes = _sizes(tape, values)
    found = []
    for number in places:
        gap = np.broadcast_to(difference(tape, number, values), SCALES.shape)
        size = np.max([np.broadcast_to(sizes[k], SCALES.shape) for k in tape.instructions[number].operands], axis=0)
        sign = np.where(np.abs(gap) <= NOISE * size, 0.0, np.sign(gap))
        for k in np.flatnonzero((sign[:-1] != sign[1:]) & np.isfinite(gap[:-1]) & np.isfinite(gap[1:])):
            found.append((number, SCALES[k], SCALES[k + 1], gap[k], gap[k + 1]))
    for first in range(0, len(found), AT_ONCE):
        yield from _narrowed(tape, known, found[first:first + AT_ONCE], moved)


def _narrowed(tape: Tape, known: Sequence[float | None], found: Sequence[tuple[int, float, float, float, float]],
              moved: Callable[[LevelKey, np.ndarray], np.ndarray]) -> Iterator[tuple[int, float]]:
    """Crossings between two scales each: a straight line is met at once, all else by halving."""
    numbers = [each[0] for each in found]
    low, high, at_low, at_high = (np.array([each[k] for each in found]) for k in range(1, 5))
    side = np.sign(at_low)

    def narrow(at: np.ndarray) -> None:
        values = values_at(tape, known, lambda key: moved(key, at))
        gap = np.array([np.broadcast_to(difference(tape, number, values), at.shape)[k]
                        for k, number in enumerate(numbers)])
        same = np.sign(gap) == side
        low[same & (at > low)] = at[same & (at > low)]
        high[~same & (at < high)] = at[~same & (at < high)]

    straight = low - at_low * (high - low) / (at_high - at_low)
    for beside in (1.0 - 0.5 * CLOSE, 1.0 + 0.5 * CLOSE):
        narrow(np.clip(straight * beside, low, high))
    for _ in range(MOST_HALVINGS):
        if np.all(high - low <= 2.0 * CLOSE * high):
            break
        narrow(0.5 * (low + high))
    yield from zip(numbers, (0.5 * (low + high)).tolist(), strict=True)
