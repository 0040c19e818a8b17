"""Sobol' points and their scrambling: against scipy's points, and the laws that a nested scrambling must keep."""

from __future__ import annotations

import numpy as np
import pytest
from made_programs import SEED, many, program
from scipy import stats
from scipy.stats import qmc

from mcx.machine.directions import directions, most_coordinates
from mcx.machine.draw_plan import DrawPlan, point_numbers
from mcx.machine.nets import scrambled, unscrambled
from mcx.machine.run import draws

SIGN = 1 << 31


def points(coordinates: int, count: int, scrambles: int = 1, seed: int = SEED) -> np.ndarray:
    """Scrambled points as the machine draws them, shape (scrambles, count, coordinates)."""
    made = program([], rows=coordinates, outputs=[0], uniforms=coordinates)
    numbers = np.concatenate([point_numbers(scramble, count) for scramble in range(scrambles)])
    found = draws(made, seed=seed, numbers=numbers, plan=DrawPlan(scrambles))
    return found.reshape(scrambles, count, coordinates)


def plainly_reversed(word: int) -> int:
    """A word of 32 bits read backwards."""
    return int(f"{int(word):032b}"[::-1], 2)


def test_points_are_scipys():
    """Unscrambled, point gray(n) is scipy's n-th point (which walks in Gray code), the last coordinates included."""
    rows = directions(most_coordinates())
    theirs = qmc.Sobol(most_coordinates(), scramble=False, bits=32).random(many(64 << 8) >> 8)
    asked = [*range(12), 100, 1111, most_coordinates() - 1]
    for n, point in enumerate(theirs):
        ours = [plainly_reversed(unscrambled(np.uint64(n ^ n >> 1), rows[c])) * 2.0**-32 for c in asked]
        assert ours == point[asked].tolist()


def test_high_bits_are_scipys():
    """The direction numbers of points from 2^6 to 2^17 on."""
    rows, sobol = directions(40), qmc.Sobol(40, scramble=False, bits=32)
    sobol.fast_forward((1 << 18) - 1)
    theirs = sobol.random(1)[0]  # point 2^18 - 1, of Gray code 2^17
    ours = [plainly_reversed(unscrambled(np.uint64(1 << 17), row)) * 2.0**-32 for row in rows]
    assert ours == theirs.tolist()


def test_too_many_coordinates_are_refused():
    """The table ends somewhere, and says where."""
    with pytest.raises(ValueError, match="at most 21201 coordinates, not 21202"):
        directions(21202)


@pytest.mark.parametrize(("x", "y"), [(0, 1), (6, 27), (0, 2), (9, 31), (4, 12), (3, 19)])
def test_pairs_have_the_law_of_owens_scrambling(x: int, y: int):
    """Over all keys of 5 bits, the first five digits of two points: where theirs agree, they agree; the next digits
    differ; and every pair of such numbers comes equally often, which is the whole law. Higher bits of keys and
    points cannot change these digits."""
    found = {}
    for add in range(32):
        for times in range(1, 32, 2):
            rest = np.uint32(0x5A5A5A40), np.uint32(0x13579BC0)
            words = [scrambled(np.uint32(z), rest[0] | np.uint32(add), rest[1] | np.uint32(times)) for z in (x, y)]
            pair = tuple((int(word) + SIGN) >> 27 for word in words)
            found[pair] = found.get(pair, 0) + 1
    agree = ((x ^ y) & -(x ^ y)).bit_length() - 1
    expected = {(a, b) for a in range(32) for b in range(32) if a != b and 5 - (a ^ b).bit_length() == agree}
    assert set(found) == expected
    assert set(found.values()) == {512 // len(expected)}


@pytest.mark.parametrize("split", [(0, 6), (2, 4), (3, 3), (6, 0)])
def test_scrambled_points_are_a_net(split: tuple[int, int]):
    """The first two coordinates of 64 points have one point in every box of volume 1/64 with binary sides."""
    cells = np.floor(points(2, 64, scrambles=3) * 2.0 ** np.array(split)).astype(int)
    for cell in cells:
        assert len({tuple(row) for row in cell.tolist()}) == 64


def test_every_coordinate_is_stratified():
    """Of 128 points each coordinate, however late, has one in every interval of 1/128."""
    found = np.floor(points(300, 128)[0] * 128).astype(int)
    assert np.array_equal(np.sort(found, axis=0), np.repeat(np.arange(128)[:, None], 300, axis=1))


def test_a_point_is_uniform():
    """Over scrambles the first point, 0 before, has the uniform law in each coordinate, and no coordinate knows of
    another or of the next scramble."""
    found = points(4, 1, scrambles=many(1 << 14))[:, 0]
    for coordinate in found.T:
        assert stats.kstest(coordinate, "uniform").pvalue > 1e-4
    both = np.hstack([found[:-1], found[1:]])
    correlation = np.corrcoef(both, rowvar=False)[np.triu_indices(8, 1)]
    assert np.max(np.abs(correlation)) < 4.5 / np.sqrt(len(both))


def test_discrepancy_is_scipys():
    """The centred discrepancy of scrambled points is that of scipy's within 4 standard errors, and far below that of
    random ones."""
    count, scrambles = 256, 24
    ours = [qmc.discrepancy(net) for net in points(6, count, scrambles)]
    rng = np.random.default_rng(SEED)
    theirs = [qmc.discrepancy(qmc.Sobol(6, bits=32, rng=rng).random(count)) for _ in range(scrambles)]
    error = np.sqrt((np.var(ours, ddof=1) + np.var(theirs, ddof=1)) / scrambles)
    assert abs(np.mean(ours) - np.mean(theirs)) < 4.0 * error
    assert np.mean(ours) < 0.1 * np.mean([qmc.discrepancy(rng.random((count, 6))) for _ in range(scrambles)])


def test_a_point_alone_is_the_point_of_its_net():
    """Path numbers in any order, or far apart, give what they give in a run."""
    made = program([], rows=3, outputs=[0], normals=2, uniforms=1)
    plan, rng = DrawPlan(3), np.random.default_rng(SEED)
    numbers = np.concatenate([point_numbers(scramble, 200, 64) for scramble in range(3)])
    whole = draws(made, seed=SEED, numbers=numbers, plan=plan)
    asked = rng.permutation(len(numbers))[:300]
    np.testing.assert_array_equal(draws(made, seed=SEED, numbers=numbers[asked], plan=plan), whole[asked])


def test_more_scrambles_leave_the_first_as_they_are():
    """A run can be continued with further scrambles."""
    np.testing.assert_array_equal(points(5, 64, scrambles=2), points(5, 64, scrambles=7)[:2])


def test_seeds_and_streams_scramble_anew():
    """Another seed (in either half) or stream gives other points throughout."""
    made = program([], rows=4, outputs=[0], normals=4)
    asked = [(SEED, 0), (SEED + 1, 0), (SEED ^ 1 << 63, 0), (SEED, 1)]
    found = [draws(made, seed=s, stream=k, numbers=range(64), plan=DrawPlan(1)) for s, k in asked]
    assert len(np.unique(found)) == 4 * 4 * 64
