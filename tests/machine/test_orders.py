"""Path orders: orthogonal, the same in the kernel as in numpy, and the first coordinates decide what they should."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from made_programs import SEED, program

from mcx.machine.draw_plan import LEADING, DrawPlan, PathOrder
from mcx.machine.orders import COMPONENT_STEPS, bridge, components, early_bridge
from mcx.machine.run import draws

RNG = np.random.default_rng(SEED)
CLOCKS = {
    "one step": np.array([[0.04]]),
    "two steps": np.array([[0.04], [0.01]]),
    "even": np.full((12, 1), 0.04 / 12),
    "uneven, three assets": RNG.exponential(size=(7, 3)),
    "a still step": np.array([[0.01, 0.0], [0.0, 0.0], [0.02, 0.0], [0.01, 0.0], [0.03, 0.0]]),
    "many": RNG.exponential(size=(67, 2)),
}


def by_components(clock: np.ndarray) -> PathOrder:
    """That of principal components, of assets that know nothing of one another."""
    return components(np.sqrt(clock)[:, :, None] * np.eye(clock.shape[1]))


def matrix(order: PathOrder, normals: int) -> np.ndarray:
    """The order as the matrix that takes the coordinates' normals to the tape's, by what its fields say."""
    z = np.eye(normals)[order.coordinates]
    for asset, (left, right) in enumerate(zip(order.left, order.right)):
        own = slice(asset, None, len(order.left))
        z[own] = z[own] - left @ (right.T @ z[own])
    for (i, j), (c, s) in zip(order.pairs, order.turns, strict=True):
        z[[i, j]] = np.array([[c, s], [s, -c]]) @ z[[i, j]]
    return z


@pytest.mark.parametrize("order", [bridge, early_bridge, by_components])
@pytest.mark.parametrize("name", CLOCKS)
def test_an_order_is_orthogonal(name: str, order: Callable):
    """Independent standard normals stay so, whatever the clock, also where an asset stands still."""
    clock = CLOCKS[name]
    found = matrix(order(clock), clock.size)
    np.testing.assert_allclose(found @ found.T, np.eye(clock.size), atol=1e-14)


@pytest.mark.parametrize("order", [bridge, early_bridge, by_components])
@pytest.mark.parametrize("name", CLOCKS)
def test_the_kernel_mixes_as_the_matrix_says(name: str, order: Callable):
    """Normals in an order are the matrix times those of the same points without one, in every lane of several groups."""
    clock = CLOCKS[name]
    made = program([], rows=clock.size + 1, outputs=[0], normals=clock.size, uniforms=1)
    plain = draws(made, seed=SEED, numbers=range(150), plan=DrawPlan(1))
    mixed = draws(made, seed=SEED, numbers=range(150), plan=DrawPlan(1, order(clock)))
    expected = plain[:, :-1] @ matrix(order(clock), clock.size).T
    np.testing.assert_allclose(mixed[:, :-1], expected, rtol=0.0, atol=1e-13)
    np.testing.assert_array_equal(mixed[:, -1], plain[:, -1])


def test_random_numbers_can_have_an_order():
    """They are all alike, so that each normal keeps its number before the mixing."""
    clock = CLOCKS["even"]
    made = program([], rows=12, outputs=[0], normals=12)
    order = bridge(clock)
    plain, mixed = (draws(made, seed=SEED, numbers=range(70), plan=DrawPlan(0, each)) for each in (None, order))
    np.testing.assert_allclose(mixed, plain @ matrix(order, 12)[:, order.coordinates].T, rtol=0.0, atol=1e-13)


@pytest.mark.parametrize("name", ["even", "uneven, three assets", "many"])
def test_the_bridge_decides_the_end_first(name: str):
    """The first coordinates are the ends of the assets' paths; then each the middle of the widest open stretch: what is
    still open after each coordinate falls as fast as halving allows."""
    clock = CLOCKS[name]
    steps, assets = clock.shape
    found = matrix(bridge(clock), clock.size)
    for asset in range(assets):
        path = np.cumsum(np.sqrt(clock[:, [asset]]) * found[asset::assets, asset::assets], axis=0)
        np.testing.assert_allclose(path[-1], [np.sqrt(clock[:, asset].sum()), *np.zeros(steps - 1)], atol=1e-12)
        reached = [np.flatnonzero(np.abs(path[:, k]) > 1e-12) for k in range(1, steps)]
        spread = [np.max(np.abs(path[:, k])) for k in range(1, steps)]
        assert np.all(np.diff(spread) < 1e-12)
        assert all(np.array_equal(rows, np.arange(rows[0], rows[-1] + 1)) for rows in reached)


def test_an_early_bridge_decides_early_dates_early():
    """Of 12 even dates the end, then those nearest to halves in the cube root of time: 12 (1/2)^3 is 2 by its root, then
    between 2 and 12 the 6th, and the 1st."""
    found = matrix(early_bridge(CLOCKS["even"]), 12)
    path = np.cumsum(found, axis=0)  # (dates, coordinates)
    decided = []
    for k in range(1, 13):  # a date is decided when no later coordinate moves it
        decided += [date for date in range(1, 13) if date not in decided and np.allclose(path[date - 1, k:], 0.0)]
    assert decided[:2] == [12, 2] and set(decided[2:4]) == {6, 1}


@pytest.mark.parametrize("name", ["two steps", "even", "uneven, three assets", "many"])
def test_components_are_the_principal_ones(name: str):
    """The first coordinates move the path along the leading eigenvectors of its covariance, as far as these say."""
    clock = CLOCKS[name]
    steps, assets = clock.shape
    found = matrix(by_components(clock), clock.size)
    for asset in range(assets):
        times = np.cumsum(clock[:, asset])
        values, vectors = np.linalg.eigh(np.minimum.outer(times, times))
        own = found[asset::assets]
        path = np.cumsum(np.sqrt(clock[:, [asset]]) * own[:, np.any(own != 0.0, axis=0)], axis=0)
        for k in range(min(LEADING, steps)):
            expected = np.sqrt(values[-1 - k]) * vectors[:, -1 - k]
            sign = np.sign(path[-1, k] * expected[-1])
            np.testing.assert_allclose(path[:, k], sign * expected, atol=1e-8 * np.sqrt(times[-1]))


def test_four_components_are_most_of_a_path():
    """On even dates the leading components carry 95 % of a path's variance, as the module says."""
    times = np.arange(1.0, 53.0)
    values = np.linalg.eigvalsh(np.minimum.outer(times, times))
    assert values[-LEADING:].sum() > 0.949 * values.sum()


def test_very_long_paths_take_the_bridge():
    """Beyond the limit both orders are the same."""
    clock = np.full((COMPONENT_STEPS + 1, 1), 1e-4)
    assert not by_components(clock).left.size
    np.testing.assert_array_equal(by_components(clock).coordinates, bridge(clock).coordinates)


def moves_of(correlation: np.ndarray, vols: np.ndarray, steps: int) -> np.ndarray:
    """What the normals of even steps do, (steps, assets, assets)."""
    spread = np.zeros((len(vols), len(vols)))
    values, vectors = np.linalg.eigh(correlation)
    root = np.linalg.qr((vectors * np.sqrt(np.maximum(values, 0.0))).T)[1].T  # lower triangular, also where singular
    spread[:] = vols[:, None] * root
    return np.repeat(spread[None], steps, axis=0) / np.sqrt(steps)


ALIKE = np.full((5, 5), 0.6) + 0.4 * np.eye(5)
LINKED = {
    "alike": moves_of(ALIKE, np.full(5, 0.2), 12),
    "unlike": moves_of(np.corrcoef(RNG.normal(size=(4, 8))), np.array([0.1, 0.2, 0.3, 0.4]), 9),
    "seven, of which four lead": moves_of(np.corrcoef(RNG.normal(size=(7, 9))), RNG.uniform(0.1, 0.4, 7), 3),
    "as one": moves_of(np.ones((3, 3)), np.array([0.2, 0.3, 0.1]), 4),
    "one stands still": moves_of(ALIKE[:3, :3], np.array([0.2, 0.0, 0.1]), 4),
    "over curves": np.linalg.cholesky(np.stack([np.cov(RNG.normal(size=(3, 6))) for _ in range(6)])),
    "one date": moves_of(ALIKE, np.full(5, 0.2), 1),
}


@pytest.mark.parametrize("name", LINKED)
def test_components_of_several_assets_are_orthogonal(name: str):
    moves = LINKED[name]
    found = matrix(components(moves), len(moves) * moves.shape[1])
    np.testing.assert_allclose(found @ found.T, np.eye(len(found)), atol=1e-14)


@pytest.mark.parametrize("name", ["alike", "unlike", "seven, of which four lead", "as one", "one date"])
def test_the_first_components_of_several_assets_are_those_of_all_paths_together(name: str):
    """Where all steps are alike: the leading eigenvectors of the covariance of all assets at all dates, by numpy; each
    coordinate moves the paths along one, and the first adds the largest eigenvalue."""
    moves = LINKED[name]
    steps, assets = moves.shape[:2]
    found = matrix(components(moves), steps * assets).reshape(steps, assets, -1)
    paths = np.cumsum(np.einsum("tij,tjk->tik", moves, found), axis=0).reshape(steps * assets, -1)
    covariance = np.kron(np.minimum.outer(np.arange(steps) + 1.0, np.arange(steps) + 1.0), moves[0] @ moves[0].T)
    values = np.linalg.eigvalsh(covariance)[::-1]
    sizes = (paths**2).sum(axis=0)
    np.testing.assert_allclose(covariance @ paths[:, 0], values[0] * paths[:, 0], atol=1e-8 * values[0])
    assert sizes[0] == pytest.approx(values[0], rel=1e-8)
    leading = min(LEADING, steps) if assets > LEADING else min(LEADING, steps * assets)
    assert np.sort(sizes)[::-1][: min(leading, 2)] == pytest.approx(values[: min(leading, 2)], rel=1e-6, abs=1e-12)


@pytest.mark.parametrize("name", LINKED)
def test_the_kernel_mixes_several_assets_as_the_matrix_says(name: str):
    moves = LINKED[name]
    normals = len(moves) * moves.shape[1]
    made = program([], rows=normals, outputs=[0], normals=normals)
    plain, mixed = (draws(made, seed=SEED, numbers=range(70), plan=DrawPlan(1, order))
                    for order in (None, components(moves)))
    np.testing.assert_allclose(mixed, plain @ matrix(components(moves), normals).T, rtol=0.0, atol=1e-13)


def test_directions_that_assets_share_hang_on_no_library():
    """Assets that are all alike: every way to part what the average leaves is as good, and the turns are the same in
    every step, one less for each direction that has its place."""
    order = components(LINKED["alike"])
    across = order.pairs[len(order.pairs) - 12 * (4 + 3 + 2 + 1):].reshape(12, -1, 2)
    np.testing.assert_array_equal(across - 5 * np.arange(12)[:, None, None], np.repeat(across[:1], 12, axis=0))
    assert len(order.pairs) == 5 * 11 + 12 * 10
    as_one = np.outer([0.2, 0.3, 0.1], [1.0, 1e-11, 1e-11])  # what rounding leaves of other directions takes no turn
    assert len(components(np.repeat(as_one[None], 4, axis=0)).pairs) == 3 * 3 + 4 * 2
