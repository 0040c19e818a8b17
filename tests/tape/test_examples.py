"""Every example of the library becomes a whole tape."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from mcx.checked.load import load
from mcx.dates.dating import date_on
from mcx.leaves.market_map import MarketMap
from mcx.tape.interpret import interpret, outputs
from mcx.tape.registers import lower
from mcx.tape.unroll import unroll
from mcx.tape.verify import problems

EXAMPLES = sorted((Path(__file__).parents[2] / "payoffs" / "examples").glob("*.yaml"))
PATHS = 50


@pytest.mark.parametrize("file", EXAMPLES, ids=lambda file: file.stem)
def test_an_example_becomes_a_tape(file: Path):
    """It unrolls without faults into tapes that keep the rules; its legs add up to its price, and on each path it ends
    at most once."""
    request = load([file])
    for contract in request.contracts:
        dated, faults = date_on(contract, request.market)
        market = MarketMap.of(request.market, dated)
        unrolled = unroll(dated, nodes=market.nodes(), makeup=market.makeup())
        assert not faults and not unrolled.faults
        assert problems(unrolled.observed) == [] and problems(unrolled.tape) == []
        leaves = market.values(unrolled.tape.leaves)
        assert np.all(np.isfinite(leaves))
        program = lower(unrolled.tape, leaves)
        assert (program.normals, program.uniforms) == (unrolled.tape.normals, unrolled.tape.uniforms)
        draws = np.random.default_rng(557012288190043)
        normals = draws.standard_normal((program.normals, PATHS))
        uniforms = draws.uniform(size=(program.uniforms, PATHS))
        found = outputs(unrolled.tape, interpret(unrolled.tape, leaves, normals, uniforms))
        legs = sum(found[output.name] for output in unrolled.tape.outputs if output.kind == "leg")
        ends = sum(found[output.name] for output in unrolled.tape.outputs if output.kind == "end")
        np.testing.assert_allclose(found["price"], legs, rtol=1e-12, atol=1e-12)
        assert np.all(np.isfinite(found["price"])) and np.all(np.asarray(ends) <= 1.0)
        assert np.all(np.asarray(found["life"]) > 0.0)
