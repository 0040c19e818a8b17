"""Sensitivities as linear combinations of derivatives, in the units of the trade."""

from __future__ import annotations

import numpy as np
import pytest

from greek_tools import ready
from helpers import document
from mcx.estimators.sensitivities import first_order, second_order
from mcx.leaves.jacobian import inputs

MARKET = """---
market: 0y
rates: {EUR: {1y: 3%, 2y: 4%}}
funding: {EUR: 50 bp}
assets:
  harbour: {spot: 200, currency: EUR, yield: 1.5%, vol: {6m: 22%, 1y: 25%}}
  lantern: {spot: 95, currency: EUR, forwards: {1y: 96, 2y: 97}, vol: 30%}
correlation: {harbour/lantern: 40%}
"""
TERMS = {"initial": "{harbour: 200, lantern: 95}", "which": "worst", "side": "put", "strike": "100%", "expiry": "1y"}


def lines(size: str):
    made, market = ready(document("rainbow_option", "[harbour, lantern]", size=size, **TERMS) + MARKET)
    numbers = inputs(market, made.dated.contract)
    return numbers, list(first_order(numbers, made.dated.contract)), list(second_order(numbers, made.dated.contract))


def test_every_number_has_its_line_and_every_curve_a_whole():
    """Nodes of vols and rates and their sum; forwards by node only, since they have no common unit."""
    _, first, second = lines("units: 10")
    assert [(line.name, line.subject, line.tenor) for line in first] == [
        ("delta", "harbour", ""), ("delta for 1 %", "harbour", ""), ("vega", "harbour", "6m"),
        ("vega", "harbour", "1y"), ("vega", "harbour", "all"), ("yield", "harbour", ""), ("delta", "lantern", ""),
        ("delta for 1 %", "lantern", ""),
        ("vega", "lantern", ""), ("forward", "lantern", "1y"), ("forward", "lantern", "2y"), ("rho", "EUR", "1y"),
        ("rho", "EUR", "2y"), ("rho", "EUR", "all"), ("funding", "EUR", ""), ("correlation", "harbour/lantern", "")]
    assert [(line.name, line.subject) for line in second] == [
        ("gamma", "harbour"), ("gamma", "lantern"), ("cross gamma", "harbour/lantern")]


@pytest.mark.parametrize(("size", "expected"), [
    ("units: 10", {"delta": 10.0, "delta for 1 %": 20.0, "vega": 0.1, "rho": 1e-3, "yield": 1e-3}),
    ("notional: 10", {"delta": 10.0, "delta for 1 %": 200.0, "vega": 0.1, "rho": 1e-3, "yield": 1e-3})])
def test_units(size: str, expected: dict[str, float]):
    """What a derivative of 1 by a number is in the unit of its line: per 1 of spot, for 1 %, per point, per bp."""
    numbers, first, second = lines(size)
    for line in first:
        if line.subject in ("harbour", "EUR") and line.name in expected:
            assert np.unique(line.weights(len(numbers)))[-1] == pytest.approx(expected[line.name])
    assert second[0].factor == pytest.approx(0.01 * 200 * 10)
    assert second[2].factor == pytest.approx(0.01 * 95 * 10), "the first one's delta as the second's spot moves by 1 %"


def test_a_whole_is_the_sum_of_its_nodes():
    """By its weights, so whatever the derivatives are."""
    numbers, first, _ = lines("units: 1")
    for whole in (line for line in first if line.tenor == "all"):
        nodes = [line.weights(len(numbers)) for line in first
                 if (line.name, line.subject) == (whole.name, whole.subject) and line.tenor != "all"]
        np.testing.assert_array_equal(whole.weights(len(numbers)), np.sum(nodes, axis=0))
