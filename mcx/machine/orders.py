"""Path orders: which features of an asset's path the first coordinates of a point decide.

Both work in the variance clock: an asset's normals times the roots of its steps' variances are the increments of a
Brownian path. An order is an orthogonal map from the coordinates' normals to those normals.

*Bridge*: the first coordinate is the end of the path, each later one the point that halves the variance of a stretch
whose ends are known, the most uncertain first. In terms of the normals of stretches such a step turns two of
them by an angle, so that a path of n steps takes n - 1 turns.

*Early bridge*: the same, halved in the cube root of the variance. Where a contract may end on each of its dates most
paths end on the first few, and what they decide should not be left to late coordinates. On autocalls of 8 to 24 dates
that lowers the variance of scrambled points by 1.1 to 2 times against halving the variance; the square root does less,
the fourth root about the same.

*Components*: the first coordinates are the leading principal components of the path at the dates (P. Acworth, M.
Broadie, P. Glasserman, "A comparison of some Monte Carlo and quasi-Monte Carlo techniques for option pricing", 1998).
LEADING of them carry 95 % of the variance; what is left is taken in the order of a bridge, bent so that it is
orthogonal to them. That is a bridge after a map of rank LEADING: its cost does not grow with the square of the number
of steps, as that of all components would, and more of them reduce no error: on an Asian call of 52 dates and 2^16
points the variance ratio is 91,000, 89,000, 71,000 and 75,000 with 4, 8, 16 and all components, each +- 18 %; with 1
and 2 it is 68,000 and 99,000. All of 52 components would take some 2,700 multiplications a path, which is more than the
rest of that path.

Of several assets the components are those of all paths together. In every step the leading principal directions of
what the assets do in all become normals of their own, by turns of the step's normals; along each the path has
components in time as one asset's has. Where the steps' covariances are multiples of one another these are
the principal components of the whole. On an average of five assets over 52 dates and 2^16 points the variance ratio is
98,000 +- 17,000, against 1,900 +- 330 with components of each asset alone; what hangs on the worst of a few is about as
well off with either.
"""

from __future__ import annotations

import math
from dataclasses import replace
from heapq import heappop, heappush
from itertools import combinations

import numpy as np

from mcx.machine.draw_plan import LEADING, PathOrder

EARLY = 3.0  # the root of the variance that an early bridge halves
STRAIGHT = 1e-12  # a share of a move's size that needs no turn
STILL = 1e-9  # of the widest direction's variance: a direction narrower than that is left as it is
SWEEPS = 30  # over all pairs of axes; some 6 are needed
COMPONENT_STEPS = 512  # beyond, the eigenvectors take longer to find than many a run


def bridge(clock: np.ndarray) -> PathOrder:
    """The order of a Brownian bridge; clock (steps, assets): the variance of each asset's log over each step."""
    return _order(clock, components=False)


def early_bridge(clock: np.ndarray) -> PathOrder:
    """The order of a bridge that has the early dates early, after the end. See `bridge`."""
    return _order(clock, components=False, root=EARLY)


def components(moves: np.ndarray) -> PathOrder:
    """The order of principal components, of at most COMPONENT_STEPS steps, of bridges along the principal directions
    beyond; moves (steps, assets, assets): of each step the matrix that takes its normals to the moves of the logs."""
    pairs, turns, clock = _along_directions(moves)
    found = _order(clock, components=1 < len(clock) <= COMPONENT_STEPS)
    steps, assets = clock.shape
    shares = clock.sum(axis=0) / (2.0 * np.arange(steps)[:, None] + 1.0) ** 2  # by component in time, for even steps
    ranks = np.empty(steps * assets, dtype=np.int32)
    ranks[sorted(range(steps * assets), key=lambda k: -float(f"{shares.flat[k]:.9e}"))] = np.arange(steps * assets)
    return replace(found, coordinates=ranks[found.coordinates], pairs=np.concatenate([found.pairs, pairs]),
                   turns=np.concatenate([found.turns, turns]))


def _along_directions(moves: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """The turns (pairs, and their roots) after which the first normals along the principal directions of all moves
    together stand in the places of assets, and the variance that each place then adds in each step, (steps, assets).

    Only LEADING directions are followed, so that the turns grow with the assets and not with their square.
    """
    steps, assets = len(moves), moves.shape[1]
    sizes, directions = _principal(np.einsum("tik,tjk->ij", moves, moves))
    leading = sorted(range(assets), key=lambda k: -float(f"{sizes[k]:.9e}"))[:LEADING]
    leading = [place for place in leading if sizes[place] > STILL * sizes[leading[0]]]
    pairs, turns, clock = [], [], np.empty((steps, assets))
    for step in range(steps):
        left = directions.T @ moves[step]  # (directions, normals)
        made, open_places = [], list(range(assets))
        for place in leading:
            open_places.remove(place)
            for other in open_places:
                across = float(left[place, other])
                size = math.hypot(float(left[place, place]), across)
                if abs(across) > STRAIGHT * size:
                    c, s = float(left[place, place]) / size, across / size
                    one, two = left[:, place].copy(), left[:, other].copy()
                    left[:, place], left[:, other] = c * one + s * two, s * one - c * two
                    made.append(((step * assets + place, step * assets + other), (c, s)))
        clock[step] = (left**2).sum(axis=0)
        pairs += [pair for pair, _ in reversed(made)]  # the last made is what the normals along directions meet first
        turns += [turn for _, turn in reversed(made)]
    return np.array(pairs, dtype=np.int32).reshape(-1, 2), np.array(turns).reshape(-1, 2), clock


def _principal(covariance: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Eigenvalues and eigenvectors (columns), by turns of two axes at a time (C. Jacobi, 1846), each vector next to the
    axis it came from: where values are equal, as of assets that are all alike, a library may take any axes."""
    rest, vectors = covariance.copy(), np.eye(len(covariance))
    scale = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    for _ in range(SWEEPS):
        off = [(i, j) for i, j in combinations(range(len(rest)), 2) if abs(rest[i, j]) > STRAIGHT * scale[i] * scale[j]]
        for i, j in off:
            angle = 0.5 * math.atan2(2.0 * rest[i, j], rest[i, i] - rest[j, j])
            angle -= math.copysign(0.5 * math.pi, angle) if abs(angle) > 0.25 * math.pi else 0.0
            c, s = math.cos(angle), math.sin(angle)
            for each in (rest.T, rest, vectors.T):
                each[i], each[j] = c * each[i] + s * each[j], c * each[j] - s * each[i]
        if not off:
            break
    return np.diag(rest).copy(), np.round(vectors, 10)  # as in `_leading`: turns are made orthogonal all the same


def _order(clock: np.ndarray, components: bool, root: float = 1.0) -> PathOrder:
    steps, assets = clock.shape
    coordinates = np.empty((steps, assets), dtype=np.int32)
    bent = np.zeros((2, assets, steps, LEADING)) if components else np.empty((2, 0, 0, LEADING))
    pairs, turns = [], []
    for asset in range(assets):
        variances = _positive(clock[:, asset])
        turned, angles = _halve(variances, root)
        first = np.concatenate([[0], turned[:, 1]])  # by rank: the normal that the coordinate begins as
        coordinates[first, asset] = np.arange(steps) * assets + asset
        pairs.append(turned * assets + asset)
        turns.append(angles)
        if components:
            wanted = _turned_back(_leading(variances), turned, angles)[first]
            bent[:, asset, first] = _reflections(wanted)
    return PathOrder(coordinates.ravel(), *bent, np.concatenate(pairs).astype(np.int32), np.concatenate(turns))


def _positive(variances: np.ndarray) -> np.ndarray:
    """The variances, small where they are zero: any clock gives standard normals, and those are multiplied by 0."""
    smallest = 1e-9 * variances.mean()
    return np.maximum(variances, smallest if smallest > 0.0 else 1.0)


def _halve(variances: np.ndarray, root: float) -> tuple[np.ndarray, np.ndarray]:
    """Stretches halved in this root of the variance, those first where most is open then: of each the first step and that
    of its second half, (steps - 1, 2); and the roots of the shares of variance of both halves, (steps - 1, 2)."""
    known = np.concatenate([[0.0], np.cumsum(variances)])
    clock = known ** (1.0 / root)
    pairs, turns = [], []
    waiting: list[tuple[float, int, int, int]] = []

    def wait(start: int, end: int) -> None:
        if end - start > 1:
            off = np.abs(clock[start + 1 : end] - 0.5 * (clock[start] + clock[end]))
            middle = start + 1 + int(np.argmin(np.round(off / clock[-1], 12)))  # of two as near the first
            share = (clock[middle] - clock[start]) * (clock[end] - clock[middle]) / (clock[end] - clock[start])
            heappush(waiting, (-float(f"{share:.12e}"), start, middle, end))  # equal steps come in order of time

    wait(0, len(variances))
    while waiting:
        _, start, middle, end = heappop(waiting)
        first = (known[middle] - known[start]) / (known[end] - known[start])
        pairs.append((start, middle))
        turns.append((np.sqrt(first), np.sqrt(1.0 - first)))
        wait(start, middle)
        wait(middle, end)
    return np.array(pairs, dtype=np.int64).reshape(-1, 2), np.array(turns).reshape(-1, 2)


def _leading(variances: np.ndarray) -> np.ndarray:
    """The normals of the leading principal components of the path, shape (steps, at most LEADING); to 10 digits, so
    that nothing hangs on the order in which a library adds: whatever they are, the map is made orthogonal."""
    times = np.cumsum(variances)
    values, vectors = np.linalg.eigh(np.minimum.outer(times, times))
    values, vectors = values[::-1][:LEADING], vectors[:, ::-1][:, :LEADING]
    return np.round(np.diff(vectors, axis=0, prepend=0.0) * np.sqrt(values) / np.sqrt(variances)[:, None], 10)


def _turned_back(normals: np.ndarray, pairs: np.ndarray, turns: np.ndarray) -> np.ndarray:
    """What a bridge makes these normals of; a turn is its own inverse."""
    normals = normals.copy()
    for (i, j), (c, s) in zip(pairs[::-1], turns[::-1], strict=True):
        normals[i], normals[j] = c * normals[i] + s * normals[j], s * normals[i] - c * normals[j]
    return normals


def _reflections(wanted: np.ndarray) -> np.ndarray:
    """left and right, each (steps, LEADING): 1 - left right' is orthogonal and takes the first unit vectors to the
    columns of `wanted`, but for their signs, which a normal law does not see.

    A product of reflections (A. Householder, 1958), multiplied out.
    """
    rest = wanted.copy()
    left, right = np.zeros((2, len(wanted), LEADING))
    for k in range(wanted.shape[1]):
        mirror = np.zeros(len(wanted))
        mirror[k:] = rest[k:, k]
        mirror[k] += np.copysign(np.linalg.norm(mirror), mirror[k])
        mirror /= np.linalg.norm(mirror)
        rest -= 2.0 * np.outer(mirror, mirror @ rest)
        left[:, k] = 2.0 * (mirror - left @ (right.T @ mirror))
        right[:, k] = mirror
    return np.stack([left, right])
