"""Normals put in the order of paths: the map of a `PathOrder` on the rows of the register file, in place.

It goes through 64 lanes at a time, whose normals stay in the first-level cache for up to some 90 of them.
"""

from __future__ import annotations

from mcx.machine.jit import jit
from mcx.machine.vectors import BENT, TURNED, bend, turn


@jit
def mix(registers, left, right, pairs, turns, lanes):
    """Rows of normals, mixed as `PathOrder` says; lanes: a multiple of 64."""
    assets = left.shape[0]
    for start in range(0, lanes, TURNED):
        for asset in range(assets):
            for lane in range(start, start + TURNED, BENT):
                bend(registers, asset, assets, lane, left[asset], right[asset])
        for k in range(pairs.shape[0]):
            turn(registers, pairs[k, 0], pairs[k, 1], start, turns[k, 0], turns[k, 1])
