"""The draw stage: which dimension is which number, and the law of what it gives."""

from __future__ import annotations

import numpy as np
from made_programs import SEED, many, program
from plain_philox import block_of
from scipy import stats
from scipy.special import ndtri

from mcx.machine.run import Stream, draws
from mcx.tape.program import Program


def drawing(normals: int, uniforms: int) -> Program:
    """A program that draws and does nothing."""
    return program([], rows=normals + uniforms, outputs=[0], normals=normals, uniforms=uniforms)


def test_dimension_d_is_word_d_mod_4_of_block_d_div_4():
    """Normals and uniforms are the plain generator's words, uniforms in blocks with the highest bit set."""
    numbers = [0, 1, 77, 2**32 - 1, 2**32, 2**63 + 5]
    drawn = draws(drawing(6, 5), seed=SEED, stream=Stream.PILOT, numbers=numbers)
    for row, number in zip(drawn, numbers, strict=True):
        normal_words = [block_of(SEED, number, d // 4, 1)[d % 4] for d in range(6)]
        uniform_words = [block_of(SEED, number, 2**31 + d // 4, 1)[d % 4] for d in range(5)]
        np.testing.assert_allclose(row[:6], ndtri((np.array(normal_words) + 0.5) / 2**32), rtol=1e-9)
        assert row[6:].tolist() == [(word + 0.5) / 2**32 for word in uniform_words]


def test_a_normal_more_moves_no_other_draw():
    """Neither the earlier normals nor the uniforms of a path depend on how many normals there are."""
    few = draws(drawing(3, 2), seed=SEED, numbers=range(10))
    more = draws(drawing(9, 2), seed=SEED, numbers=range(10))
    np.testing.assert_array_equal(few[:, :3], more[:, :3])
    np.testing.assert_array_equal(few[:, 3:], more[:, 9:])


def test_seeds_streams_and_paths_share_no_number():
    """Another seed (in either half), stream or path gives other draws throughout."""
    asked = [(SEED, 0), (SEED + 1, 0), (SEED ^ 1 << 63, 0), (SEED, 1), (SEED, Stream.REPLICATE)]
    found = np.concatenate([draws(drawing(8, 4), seed=s, stream=k, numbers=range(20)) for s, k in asked])
    assert len(np.unique(found)) == found.size


def test_normals_have_the_normal_law():
    """Kolmogorov and Smirnov's distance and the first four moments, each within its law at 4 standard errors."""
    z = draws(drawing(4, 0), seed=SEED, numbers=range(many(1 << 16))).ravel()
    assert stats.kstest(z, "norm").pvalue > 1e-4
    for power, mean, variance in ((1, 0.0, 1.0), (2, 1.0, 2.0), (3, 0.0, 15.0), (4, 3.0, 96.0)):
        assert abs(np.mean(z**power) - mean) < 4.0 * np.sqrt(variance / len(z))


def test_normals_of_different_dimensions_are_uncorrelated():
    """Every correlation between dimensions, and between a path and the next, is within 4.5 standard errors of 0."""
    z = draws(drawing(12, 0), seed=SEED, numbers=range(many(1 << 16)))
    both = np.hstack([z[:-1], z[1:]])
    correlation = np.corrcoef(both, rowvar=False)[np.triu_indices(24, 1)]
    assert np.max(np.abs(correlation)) < 4.5 / np.sqrt(len(both))


def test_uniforms_have_the_uniform_law():
    """Uniforms are spread evenly over (0, 1) and never reach its ends."""
    u = draws(drawing(0, 4), seed=SEED, numbers=range(many(1 << 16))).ravel()
    assert 0.0 < u.min() and u.max() < 1.0
    assert stats.kstest(u, "uniform").pvalue > 1e-4
