"""Running totals against exact sums."""

from __future__ import annotations

from math import fsum

import numpy as np
import pytest

from mcx.machine.sums import GROUP, Totals


def groups_of(values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Means and sums of squares of each group of 64, (groups, 1)."""
    parts = [values[k : k + GROUP] for k in range(0, len(values), GROUP)]
    means = np.array([[fsum(part) / len(part)] for part in parts])
    return means, np.array([[fsum((part - mean) ** 2)] for part, (mean,) in zip(parts, means, strict=True)])


@pytest.mark.parametrize("offset", [0.0, 1e8])
def test_merged_groups_are_the_whole(offset: float):
    """Mean and spread are those of all values at once to 1e-13, also where the spread is small beside the mean."""
    values = offset + np.random.default_rng(118830275).normal(size=20_000)
    totals = Totals(1, len(values), ())
    totals.add(len(values), *groups_of(values))
    mean = fsum(values) / len(values)
    assert totals.mean[0] == pytest.approx(mean, rel=1e-15)
    assert totals.squares[0] == pytest.approx(fsum((values - mean) ** 2), rel=1e-13 + 1e-15 * offset)


def test_equal_values_have_no_spread():
    """A constant comes back to the last bit, with no spread, over whole groups and a part of one."""
    values = np.full(1000, 0.1)
    totals = Totals(1, 1000, ())
    totals.add(960, *groups_of(values[:960]))
    assert totals.mean[0] == 0.1 and totals.squares[0] == 0.0
    totals.add(40, *groups_of(values[960:]))
    assert totals.mean[0] == pytest.approx(0.1, rel=1e-16) and totals.squares[0] < 1e-28


def test_snapshots_round_up_to_whole_groups():
    """What was reached at a number of paths is noted once that many are in, by whole groups, the last excepted."""
    values = np.random.default_rng(99013).normal(size=1000)
    totals = Totals(1, 1000, (1000, 1, 64, 500, 400))
    totals.add(448, *groups_of(values[:448]))
    assert [paths for paths, _, _ in totals.noted] == [64, 64, 448]
    totals.add(552, *groups_of(values[448:]))
    assert [paths for paths, _, _ in totals.noted] == [64, 64, 448, 512, 1000]
    for paths, mean, squares in totals.noted:
        assert mean[0] == pytest.approx(values[:paths].mean(), rel=1e-14)
        assert squares[0] == pytest.approx(values[:paths].var() * paths, rel=1e-12)
