"""Normals put in the order of paths: the map of a `PathOrder` on the rows of the register file, in place.

It goes through 64 lanes at a time, whose normals stay in the first-level cache for up to some 90 of them.
"""

from __future__ import annotations

from mcx.machine.jit import jit
from mcx.machine.sizes import GROUP
from mcx.machine.vectors import turn


@jit
def mix(registers, room, left, right, pairs, turns, lanes):
    """Rows of normals, mixed as `PathOrder` says; room (LEADING, 64) float64 to work in."""
    for start in range(0, lanes, GROUP):
        for asset in range(left.shape[0]):
            _project(registers, room, right[asset], asset, left.shape[0], start)
            _subtract(registers, room, left[asset], asset, left.shape[0], start)
        for k in range(pairs.shape[0]):
            turn(registers, pairs[k, 0], pairs[k, 1], start, turns[k, 0], turns[k, 1])


@jit
def _project(registers, room, right, asset, assets, start):
    """room = right' z, of the normals z of one asset. Four steps at a time: else the stores would be the cost."""
    p, q, r, t = room[0], room[1], room[2], room[3]
    for i in range(GROUP):
        p[i] = q[i] = r[i] = t[i] = 0.0
    steps, here = right.shape[0], slice(start, start + GROUP)
    fours = steps - steps % 4
    for k in range(0, fours, 4):
        z0, z1 = registers[k * assets + asset, here], registers[(k + 1) * assets + asset, here]
        z2, z3 = registers[(k + 2) * assets + asset, here], registers[(k + 3) * assets + asset, here]
        a0, a1, a2, a3 = right[k, 0], right[k + 1, 0], right[k + 2, 0], right[k + 3, 0]
        b0, b1, b2, b3 = right[k, 1], right[k + 1, 1], right[k + 2, 1], right[k + 3, 1]
        c0, c1, c2, c3 = right[k, 2], right[k + 1, 2], right[k + 2, 2], right[k + 3, 2]
        d0, d1, d2, d3 = right[k, 3], right[k + 1, 3], right[k + 2, 3], right[k + 3, 3]
        for i in range(GROUP):
            x0, x1, x2, x3 = z0[i], z1[i], z2[i], z3[i]
            p[i] = (((p[i] + a0 * x0) + a1 * x1) + a2 * x2) + a3 * x3
            q[i] = (((q[i] + b0 * x0) + b1 * x1) + b2 * x2) + b3 * x3
            r[i] = (((r[i] + c0 * x0) + c1 * x1) + c2 * x2) + c3 * x3
            t[i] = (((t[i] + d0 * x0) + d1 * x1) + d2 * x2) + d3 * x3
    for k in range(fours, steps):
        z = registers[k * assets + asset, here]
        a, b, c, d = right[k, 0], right[k, 1], right[k, 2], right[k, 3]
        for i in range(GROUP):
            x = z[i]
            p[i] += a * x
            q[i] += b * x
            r[i] += c * x
            t[i] += d * x


@jit
def _subtract(registers, room, left, asset, assets, start):
    """z - left room, of the normals z of one asset."""
    p, q, r, t = room[0], room[1], room[2], room[3]
    here = slice(start, start + GROUP)
    for k in range(left.shape[0]):
        z = registers[k * assets + asset, here]
        a, b, c, d = left[k, 0], left[k, 1], left[k, 2], left[k, 3]
        for i in range(GROUP):
            z[i] = (((z[i] - a * p[i]) - b * q[i]) - c * r[i]) - d * t[i]
