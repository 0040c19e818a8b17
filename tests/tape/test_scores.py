"""Scores of steps, crossings and extremes."""

from __future__ import annotations

import numpy as np
import pytest

from helpers import document, prepare
from mcx.estimators.derivative_tape import without_first_levels
from mcx.leaves.market_map import MarketMap
from mcx.tape.builder import Builder
from mcx.tape.interpret import interpret
from mcx.tape.program import LeafKind
from mcx.tape.registers import uniform_values
from mcx.tape.scores import Scores, latest_steps, scores

MARKET = """---
market: 0y
rates: {EUR: {6m: 3%, 2y: 4%}}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: {6m: 22%, 2y: 25%}}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
  orchard: {spot: 90, currency: EUR, yield: 0%, vol: 28%}
  quarry:  {spot: 90, currency: EUR, dividends: [{ex: 0.8y, cash: 9}], vol: 28%}
correlation: {harbour/lantern: 40%, harbour/orchard: 20%, lantern/orchard: -30%}
"""
BARRIER = document("barrier", side="put", direction="down", knock="in", strike=100, barrier=90,
                   watched="{continuous: [0y, 1y]}", expiry="1y")
LOOKBACK = document("lookback", side="call", strike_type="floating", watched="{continuous: [0y, 1y]}", expiry="1y")
RAINBOW = document("rainbow_option", "[harbour, lantern, orchard]", side="put", strike="100%", which="worst",
                   expiry="1y", initial="{harbour: 100, lantern: 95, orchard: 90}")
ESCROWED = document("barrier", "[quarry]", side="put", direction="down", knock="in", strike=100, barrier=90,
                    watched="[0.3y, 0.7y]", expiry="1y")
PATHS, SEED = 1 << 17, 0x8F1BBCDC68C4C8A1


def drawn(text: str) -> tuple[Scores, list, dict]:
    """The scores of a contract, every value of the tape on the same paths, and leaves by key."""
    ready = prepare(text + MARKET)
    tape = without_first_levels(ready.unrolled.tape)
    leaves = MarketMap(ready.market, ready.dated.contract)
    known = uniform_values(tape, leaves.values(tape.leaves))
    builder = Builder.of(tape)
    found = scores(builder, tape, ready.unrolled.grid, known, len(ready.unrolled.grid.times) - 1, levels=True)
    made = builder.tape(tape.outputs, tape.normals, tape.uniforms)
    generator = np.random.default_rng(SEED)
    values = interpret(made, leaves.values(made.leaves), generator.standard_normal((made.normals, PATHS)),
                       generator.uniform(1e-12, 1.0, (made.uniforms, PATHS)))
    return found, values, dict(zip(made.leaves, leaves.values(made.leaves), strict=True))


def z(values: np.ndarray) -> float:
    return abs(values.mean()) * np.sqrt(PATHS) / values.std()


@pytest.mark.parametrize("text", [BARRIER, LOOKBACK, RAINBOW, ESCROWED],
                         ids=["crossing", "extreme", "three assets", "escrowed dividends"])
def test_scores_have_mean_zero(text: str):
    """A density integrates to 1 whatever the leaf. By a log spot the edge of an extreme's law belongs to it."""
    found, values, _ = drawn(text)
    for score in found.first:
        on_path = values[score.value]
        if score.leaf.kind is LeafKind.LOG_SPOT:
            on_path = on_path + sum(values[edge.weight] for edge in found.edges if edge.asset == score.leaf.asset)
        assert z(on_path) < 4.5, str(score.leaf)
    if not found.edges:
        for pair, value in found.second.items():
            assert z(values[value]) < 4.5, pair


def test_the_score_of_a_step_has_the_inverse_covariance():
    """The covariance of the scores by the drifts of a step is the inverse of the covariance of the step."""
    found, values, leaves = drawn(RAINBOW)
    drifts = [values[score.value] for score in found.first if score.leaf.kind is LeafKind.DRIFT]
    lower = np.zeros((3, 3))
    for leaf, value in leaves.items():
        if leaf.kind is LeafKind.FACTOR:
            lower[leaf.asset, leaf.other] = value
    precision = np.linalg.inv(lower @ lower.T)
    np.testing.assert_allclose(np.cov(drifts), precision, atol=0.02 * np.abs(precision).max())


def test_what_is_read_decides_the_law():
    """A barrier's bridges are crossings and have no edge; a lookback's first extreme has one."""
    assert not drawn(BARRIER)[0].edges
    assert [edge.asset for edge in drawn(LOOKBACK)[0].edges] == [0]


def test_latest_steps():
    """The price depends on the last step, what is the same on every path on none."""
    ready = prepare(BARRIER + MARKET)
    latest = latest_steps(ready.unrolled.tape, ready.unrolled.grid)
    assert latest[ready.unrolled.tape.outputs[0].value] == len(ready.unrolled.grid.times) - 1
    known = uniform_values(ready.unrolled.tape, MarketMap(ready.market, ready.dated.contract).values(
        ready.unrolled.tape.leaves))
    assert all(last == 0 for last, value in zip(latest, known, strict=True) if value is not None)
