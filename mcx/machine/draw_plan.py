"""What the draw stage is told: where a run's normals and uniforms come from, as frozen records.

A plan is read by `draws.py` as flags and arrays while the machine runs, so that no plan needs a compilation of
its own, and the tape never knows of it. The draw stage applies them in this order:

    words (random, or a net's)  ->  strata of the first coordinate  ->  normals  ->  path order

What chooses words (strata of the first coordinate) comes before `order`, whose first coordinate is a path's end. What
mirrors or shifts finished normals (antithetic partners, a change of drift with its weight) is written into the tape,
where a mirror shares the draws and a shift joins the drift.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

SCRAMBLE_BITS = 32  # of a path's number, above those of the point
MOST_POINTS = 1 << 32  # in a scramble: the points have 32 binary digits
LEADING = 4  # columns of the rank by which a path order differs from a bridge


@dataclass(frozen=True, slots=True, eq=False)
class PathOrder:
    """Which coordinate of a point each normal begins as, and how an asset's normals are then mixed over its steps.

    The mixing is an orthogonal map: the normals stay independent and standard, whatever the order. It takes the
    normals z of each asset a, numbers a, a + assets, ..., to z - left (right' z), and then turns pairs of them.

    coordinates  (normals,) int32: a permutation; normal k of the tape begins as this coordinate of a net's point
                 (pseudo-random numbers are all alike and stay as they are)
    left, right  (assets, steps, LEADING) float64; or (0, 0, LEADING): this step is left out
    pairs        (rotations, 2) int32: normals (i, j) that become (c zi + s zj, s zi - c zj), one after the other
    turns        (rotations, 2) float64: c and s
    """

    coordinates: np.ndarray
    left: np.ndarray
    right: np.ndarray
    pairs: np.ndarray
    turns: np.ndarray


@dataclass(frozen=True, slots=True, eq=False)
class DrawPlan:
    """How the draws of a run are made; as it stands, from pseudo-random numbers in the order of the tape.

    scrambles  0, or how many independent scramblings of Sobol' points the path numbers range over: path
               scramble * 2^32 + point draws that point
    order      None: each coordinate is the normal of its own number
    strata     0, or 64: the 64 paths of a group share out the range of the order's first coordinate (of the first normal,
               without an order), one to each part of equal probability, so that only groups are independent
    """

    scrambles: int = 0
    order: PathOrder | None = None
    strata: int = 0


PLAIN = DrawPlan()


def point_numbers(scramble: int, points: int, first: int = 0) -> np.ndarray:
    """The path numbers of `points` points of a scramble from the `first` on, shape (points,) uint64."""
    assert first + points <= MOST_POINTS
    return np.arange(first, first + points, dtype=np.uint64) + np.uint64(scramble << SCRAMBLE_BITS)
