"""Payments that depend on one level of one date: what a price pays as a function of it, straight between its breaks."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from mcx.tape.ops import Op
from mcx.tape.program import LevelKey, Tape
from mcx.tape.smooth import payments
from mcx.tape.strikes import Strike, levels_read, values_at

BESIDE = 1e-9  # relative, where a function is taken on one side of a break
STRAIGHT = 1e-7  # relative, of what lies between two ends
BETWEEN = (0.29, 0.5)  # where it is looked at: no curve is met at its middle alone
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
    by_level: dict[tuple[int, float], list[int]] = {}
    for value in parts:
        if len(reads[value]) == 1:
            ((asset, time, op),) = reads[value]
            if op is Op.LEVEL:
                by_level.setdefault((asset, time), []).append(value)
    found, whole = [], sum(map(len, by_level.values())) == len(parts)
    for (asset, time), values in by_level.items():
        only = frozenset({(asset, time, Op.LEVEL)})
        breaks = sorted({strike.levels[0][1] for strike in strikes
                         if any(reads[turn.value] == only for turn in strike.turns)})
        piece = _piece(tape, known, asset, time, values, breaks)
        whole = whole and piece is not None
        if piece is not None and breaks:
            found.append(piece)
    return tuple(found), whole and bool(found)


def _piece(tape: Tape, known: Sequence[float | None], asset: int, time: float, values: Sequence[int],
           breaks: Sequence[float]) -> Piece | None:
    """The sum of some payments; None where it is not straight between the breaks."""
    beside = [at * (1.0 + side * BESIDE) for at in breaks for side in (-1.0, 1.0)]
    ends = np.array([breaks[0] * FIRST, *beside, breaks[-1] * LAST] if breaks else WIDE)
    low, high = ends[::2], ends[1::2]
    shares = np.array([[0.0], *([share] for share in BETWEEN), [1.0]])
    points = (low + shares * (high - low)).ravel()

    def level(key: LevelKey) -> np.ndarray:
        return points if (key.asset, key.time) == (asset, time) else np.ones_like(points)

    every = values_at(tape, known, level)
    found = np.sum([every[value] for value in values], axis=0).reshape(len(shares), -1)
    at_low, at_high = found[0], found[-1]
    size = np.max(np.abs([at_low, at_high]))
    if not np.all(np.abs(found - (at_low + shares * (at_high - at_low))) <= STRAIGHT * max(size, TINY)):
        return None
    slopes = (at_high - at_low) / (high - low)
    here = np.array(breaks)
    below = at_high[:-1] + slopes[:-1] * (here - high[:-1])
    above = at_low[1:] + slopes[1:] * (here - low[1:])
    return Piece(asset, time, tuple(breaks), tuple(below.tolist()), tuple(above.tolist()), tuple(slopes.tolist()))
