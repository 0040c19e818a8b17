"""Batch means: errors of linear combinations without covariances."""

from __future__ import annotations

from math import sqrt

import numpy as np
import pytest

from helpers import document, prepare
from mcx.estimators.batches import FEWEST_PATHS, Batches, Sampling, check_paths
from mcx.faults import RequestError
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Sum
from mcx.tape.registers import lower
from mcx.leaves.market_map import MarketMap

TEXT = document("european", side="call", strike=100, expiry="1y") + """---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
"""


def drawn(parts: int = 64) -> Batches:
    """Two quantities that move against each other, over parts of different sizes."""
    generator = np.random.default_rng(0x9B05688C2B3E6C1F)
    paths = generator.integers(50, 150, parts)
    common = generator.standard_normal(parts) / np.sqrt(paths)
    own = generator.standard_normal(parts) / np.sqrt(paths)
    return Batches(paths, np.stack([1.0 + common, 2.0 - common + 0.1 * own], axis=1))


def test_a_sum_has_the_error_of_its_parts_together():
    """What two quantities share with opposite signs drops out of the error of their sum."""
    batches = drawn()
    one, other = batches.estimates()
    total = batches.estimate(np.array([1.0, 1.0]))
    assert total.value == pytest.approx(one.value + other.value, rel=1e-14)
    assert total.standard_error < 0.2 * min(one.standard_error, other.standard_error)


def test_the_mean_weighs_parts_by_their_paths():
    """The mean over all paths, and the error of equal parts is their deviation over the root of their number."""
    batches = drawn()
    expected = np.average(batches.means[:, 0], weights=batches.paths)
    assert batches.estimates()[0].value == pytest.approx(expected, rel=1e-14)
    equal = Batches(np.full(64, 10), batches.means)
    deviation = batches.means[:, 0].std(ddof=1)
    assert equal.estimates()[0].standard_error == pytest.approx(deviation / sqrt(64), rel=1e-12)


def test_sums_of_a_program_are_those_of_its_price():
    """A sum of the price alone is the price, whatever the threads; the error by parts is that by paths, nearly."""
    ready = prepare(TEXT)
    tape = ready.unrolled.tape
    price = tape.outputs[0]
    alone = drop_dead_code(type(tape)(tape.instructions, (price,), tape.normals, tape.uniforms, (Sum(price.value),)))
    program = lower(alone, MarketMap(ready.market, ready.dated.contract).values(alone.leaves))
    runs = [Sampling(0x1F83D9ABFB41BD6B, 1 << 16, threads=threads).sums(program) for threads in (1, 2)]
    np.testing.assert_array_equal(runs[0][0].means, runs[1][0].means)
    batches, by_path = runs[0]
    by_parts = batches.estimates()[0]
    assert by_parts.value == pytest.approx(by_path.value, rel=1e-12)
    assert 0.7 < by_parts.standard_error / by_path.standard_error < 1.3


def test_too_few_paths_are_refused():
    """Every part needs a group of paths."""
    check_paths(None)
    check_paths(FEWEST_PATHS)
    with pytest.raises(RequestError, match="at least 4,096 paths"):
        check_paths(FEWEST_PATHS - 1)
