"""A smooth stand-in for payments that jump."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from front_door import EXAMPLES
from greek_tools import ready
from mcx.estimators.batches import Sampling
from mcx.estimators.methods import methods
from mcx.estimators.proxy import last_logs, with_proxy
from mcx.leaves.market_map import MarketMap
from mcx.machine.run import Stream, values_by_path
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import LeafKind, Tape
from mcx.tape.registers import lower
from mcx.tape.smooth import jumps, payments

SEED = 0xD192E819D6EF5218
NOTE = (EXAMPLES / "barrier_reverse_convertible.yaml").read_text(encoding="utf-8")


def case(text: str, number: int = 0):
    """A price's tape, its payments, the logs of the spots, and how its outputs are found by path."""
    made, market = ready(text, number)
    tape = made.unrolled.tape
    tape = drop_dead_code(replace(tape, outputs=tape.outputs[:1]))
    values = MarketMap(market, made.dated.contract).values(tape.leaves)
    spots = {leaf.asset: value for leaf, value in zip(tape.leaves, values, strict=True)
             if leaf.kind is LeafKind.LOG_SPOT}

    def by_path(part: Tape) -> np.ndarray:
        return values_by_path(lower(part, values), seed=SEED, paths=1 << 14, stream=Stream.PILOT)

    return tape, payments(tape, tape.outputs[0].value), spots, by_path, values


@pytest.mark.parametrize("number", [0, 1, 3])
def test_it_explains_and_does_not_jump(number: int):
    """Most of a note's variance lies in the last levels; the stand-in has no jump and is of the price's tape."""
    tape, paid, spots, by_path, values = case(NOTE, number)
    longer, proxy = with_proxy(tape, paid, spots, by_path)
    assert longer.instructions[: len(tape.instructions)] == tape.instructions and longer.leaves == tape.leaves
    assert jumps(longer, values, [proxy]) == ((),)
    price, stand_in = by_path(replace(longer, outputs=(tape.outputs[0], replace(tape.outputs[0], value=proxy))))
    assert np.var(price - stand_in) < 0.5 * np.var(price)


def test_nothing_stands_for_what_does_not_move():
    """Payments that are the same on every path have no stand-in."""
    tape, paid, spots, by_path, values = case(NOTE)
    fixed = [payment for payment in paid if np.ptp(by_path(replace(tape, outputs=(replace(
        tape.outputs[0], value=payment),)))) == 0.0]
    assert fixed and with_proxy(tape, fixed, spots, by_path) == (tape, None)


def test_last_logs():
    """One for each asset, on the last date."""
    tape, _, spots, _, _ = case(NOTE, 3)
    logs = last_logs(tape)
    assert logs.keys() == spots.keys() == {0, 1, 2}
    assert {tape.instructions[tape.instructions[number].operands[1]].payload.end for number in logs.values()} == {
        max(leaf.end for leaf in tape.leaves if leaf.kind is LeafKind.FACTOR)}


def test_a_daily_watched_note_gains():
    """The error of its delta and vega falls to less than six tenths, for the same mean."""
    made, market = ready(NOTE, 1)
    pilot = Sampling(SEED, 1 << 14, Stream.PILOT)
    found = []
    for given in (None, pilot):
        bound = methods(made, market, "likelihood", given).valid[0].on(market)
        first, _ = bound.derivatives(Sampling(SEED, 1 << 16)).with_controls(bound.derivatives(pilot).fitted())
        found.append(first.estimates())
    for plain, proxied in zip(*found, strict=True):
        assert abs(plain.value - proxied.value) < 4 * plain.standard_error + 1e-12
    assert found[1][0].standard_error < 0.6 * found[0][0].standard_error
