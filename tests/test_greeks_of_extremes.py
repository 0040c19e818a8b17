"""Sensitivities where an asset's lowest and highest level are drawn together: pathwise where the payment is smooth; else
each greek says why there is none, and a revaluation that is asked for gives it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from front_door import mcx, written

import mcx as package

CASE = """payoff: both_extremes
about: What the range between the lowest and the highest level is.
terms:
  watched: {type: watch}
  expiry: {type: date}
running:
  low: {lowest: worst(spot), at: watched}
  high: {highest: worst(spot), at: watched}
events:
  - at: expiry
    pay: "PAID"
---
contract: range
currency: EUR
units: 1
assets: [harbour]
payoff: both_extremes
terms: {watched: {continuous: [0y, 1y]}, expiry: 1y}
---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
"""
KINDS = {"delta", "delta for 1 %", "vega", "yield", "rho", "gamma"}


def case(tmp_path: Path, paid: str) -> Path:
    return written(tmp_path, CASE.replace("PAID", paid))


def test_a_smooth_payment_has_pathwise_greeks(tmp_path: Path):
    """All of first order, and they agree with a revaluation; for a payment in proportion to the level delta times spot
    is the price. Gamma is told why not."""
    found = package.greeks(case(tmp_path, "high - low"), paths=2**14, bump="1%")
    greeks = {line.name: line for line in found.greeks}
    revalued = {line.name: line for line in found.comparison}
    assert set(greeks) == KINDS - {"gamma"} | {"theta"} and {line.name for line in found.refused} == {"gamma"}
    for name in KINDS - {"gamma"}:
        assert greeks[name].estimator == "pathwise"
        error = np.hypot(greeks[name].standard_error, revalued[name].standard_error)
        assert abs(greeks[name].value - revalued[name].value) < 4 * error, name
    assert greeks["delta"].value * 100 == pytest.approx(found.price, rel=1e-9)


def test_a_payment_that_jumps_says_of_each_greek_why_not(tmp_path: Path):
    """The reason names the line of the extremes and how a value can be had; asked for, a revaluation gives every one of
    them, labelled as such: by a move of 1 % the delta of a digital on the range, which hangs on threshold over spot
    alone, is that of the threshold by the same draws."""
    file = case(tmp_path, "1 if high - low > 30 else 0")
    without, found = (package.greeks(file, paths=2**14, bump=bump) for bump in (None, "1%"))
    assert [line.name for line in without.greeks] == ["theta"] and not without.comparison
    assert {line.name for line in without.refused} == KINDS
    for line in without.refused:
        assert "the lowest and the highest level of one asset are drawn together at " in line.reason
        assert "case.yaml:8:3" in line.reason and "--bump 1%" in line.reason
    assert {line.name for line in found.comparison} == KINDS
    assert {line.estimator for line in found.comparison} == {"revaluation"}
    delta = next(line for line in found.comparison if line.name == "delta")
    up, down = (package.price(case(tmp_path, f"1 if high - low > 30 / {1 + move} else 0"), paths=2**14).price
                for move in (0.01, -0.01))
    assert delta.value == pytest.approx((up - down) / 2.0, abs=1e-12) and delta.value > 4 * delta.standard_error > 0.0
    assert "--bump 1%" in " ".join(mcx("greeks", file, "--paths", "4096").out.split())
