"""Payments that depend on one level of one date: what a price pays as a function of it, straight between its breaks."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np

from mcx.tape.ops import Op
from mcx.tape.program import Tape
from mcx.tape.rules import evaluate
from mcx.tape.smooth import payments
from mcx.tape.strikes import Numbers, Reads, Strike, levels_read

Read: TypeAlias = tuple[int, float, Op]  # asset, time, and which level

BESIDE = 1e-9  # relative, where a function is taken on one side of a break
STRAIGHT = 1e-7  # relative, of what lies between two ends
SHARES = np.array([[0.0], [0.29], [0.5], [1.0]])  # where it is looked at: no curve is met at its middle alone
TINY = 1e-300
FIRST, LAST = 1e-4, 1e2  # of the first and of the last break, where the outer stretches are taken
WIDE = (1e-3, 1e5)  # levels between which a function without a break is looked at


@dataclass(frozen=True, slots=True)
class Piece:
    """A discounted amount as a function of an asset's level at a time. `breaks` in rising order; `below` and `above`
    its values on both sides of each (they differ at a jump); `slopes` (breaks + 1,) between them."""

    asset: int
    time: float
    breaks: tuple[float, ...]
    below: tuple[float, ...]
    above: tuple[float, ...]
    slopes: tuple[float, ...]


def pieces(tape: Tape, known: Sequence[float | None], strikes: Sequence[Strike]) -> tuple[tuple[Piece, ...], bool]:
    """The payments of a price that each depend on one level alone, those of one level together, and whether these are
    all that differ from path to path. `tape` reads levels and has the price alone."""
    reads = levels_read(tape, known)
    parts = [value for value in payments(tape, tape.outputs[0].value) if known[value] is None]
    by_level: dict[Read, list[int]] = {}
    for value in parts:
        if len(reads[value]) == 1:
            (read,) = reads[value]
            if read[2] is Op.LEVEL:
                by_level.setdefault(read, []).append(value)
    whole = sum(map(len, by_level.values())) == len(parts)
    breaks = {read: sorted({strike.levels[0][1] for strike in strikes
                            if any(reads[turn.value] == {read} for turn in strike.turns)}) for read in by_level}
    every = _values(tape, known, reads, {read: _points(here) for read, here in breaks.items()})
    found = []
    for read, values in by_level.items():
        piece = _piece(read, breaks[read], np.sum([every[value] for value in values], axis=0))
        whole = whole and piece is not None
        if piece is not None and piece.breaks:
            found.append(piece)
    return tuple(found), whole and bool(found)


def _values(tape: Tape, known: Sequence[float | None], reads: Sequence[Reads], points: Mapping[Read, np.ndarray]
            ) -> list[Numbers | None]:
    """What hangs on one level each, at that level's own points, in one pass; None for all else."""
    values: list[Numbers | None] = []
    for number, step in enumerate(tape.instructions):
        read = next(iter(reads[number])) if len(reads[number]) == 1 else None
        if known[number] is not None:
            values.append(known[number])
        elif read not in points:
            values.append(None)
        elif step.op is Op.LEVEL:
            values.append(points[read])
        else:
            values.append(evaluate(step.op, *(values[k] for k in step.operands)))
    return values


def _ends(breaks: Sequence[float]) -> tuple[np.ndarray, np.ndarray]:
    """Between which levels a function is straight."""
    beside = [at * (1.0 + side * BESIDE) for at in breaks for side in (-1.0, 1.0)]
    ends = np.array([breaks[0] * FIRST, *beside, breaks[-1] * LAST] if breaks else WIDE)
    return ends[::2], ends[1::2]


def _points(breaks: Sequence[float]) -> np.ndarray:
    """Where it is looked at: both ends and some between them."""
    low, high = _ends(breaks)
    return (low + SHARES * (high - low)).ravel()


def _piece(read: Read, breaks: Sequence[float], values: np.ndarray) -> Piece | None:
    """A function by its values at the points; None where it is not straight between the breaks."""
    low, high = _ends(breaks)
    found = np.broadcast_to(values, SHARES.size * low.size).reshape(SHARES.size, -1)
    at_low, at_high = found[0], found[-1]
    size = np.max(np.abs([at_low, at_high]))
    if not np.all(np.abs(found - (at_low + SHARES * (at_high - at_low))) <= STRAIGHT * max(size, TINY)):
        return None
    slopes = (at_high - at_low) / (high - low)
    here = np.array(breaks)
    below = at_high[:-1] + slopes[:-1] * (here - high[:-1])
    above = at_low[1:] + slopes[1:] * (here - low[1:])
    return Piece(*read[:2], tuple(breaks), tuple(below.tolist()), tuple(above.tolist()), tuple(slopes.tolist()))
