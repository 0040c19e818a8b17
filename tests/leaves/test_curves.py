"""Curves of rates, spreads, yields and forwards."""

from __future__ import annotations

import math
from dataclasses import replace
from datetime import date

import pytest

from mcx.checked.market import Curve, Node, Quoted, RateConvention
from mcx.faults import Place
from mcx.leaves.curves import log_curve

HERE = Place("market.yaml", 1, 1)


def curve(form: str, points: dict[float, float]) -> Curve:
    """A curve by time; a single point at time 0 is a flat number."""
    nodes = (Node(time, f"{time}y" if time else "", Quoted(value, HERE)) for time, value in points.items())
    return Curve(form, tuple(nodes), HERE)


def test_a_flat_rate_discounts_continuously():
    """A flat zero rate r gives exp(-r t)."""
    assert log_curve(curve("zero", {0.0: 0.03})).factor(2.5) == pytest.approx(math.exp(-0.075), rel=1e-15)


def test_nothing_stated_is_no_growth():
    """Without a curve (no yield, no funding) the factor is 1."""
    assert log_curve(None).factor(7.0) == 1.0


@pytest.mark.parametrize(
    ("time", "log"),
    [
        (0.0, 0.0),
        (0.5, -0.02 * 0.5),  # flat zero rate up to the first point
        (1.0, -0.02),
        (2.0, -(0.02 + 0.09) / 2),  # linear in the log of the discount factor
        (3.0, -0.09),
        (5.0, -(0.09 + 2 * 0.035)),  # the last forward rate, (0.09 - 0.02) / 2, goes on
    ],
)
def test_zero_rates_are_linear_in_the_log(time: float, log: float):
    """Between points the log of the discount factor is linear, before them the zero rate and after the forward flat."""
    assert log_curve(curve("zero", {1.0: 0.02, 3.0: 0.03})).log(time) == pytest.approx(log, abs=1e-15)


def test_discount_factors_say_the_same_as_their_zero_rates():
    """One curve written as zero rates or as discount factors is one curve."""
    zero = log_curve(curve("zero", {0.5: 0.02, 2.0: 0.025}))
    factors = log_curve(curve("discount", {0.5: math.exp(-0.01), 2.0: math.exp(-0.05)}))
    for time in (0.1, 0.5, 1.7, 2.0, 9.0):
        assert zero.log(time) == pytest.approx(factors.log(time), abs=1e-15)


def test_a_single_dated_rate_is_a_flat_curve():
    """One point fixes the rate before and after it."""
    line = log_curve(curve("zero", {2.0: 0.03}))
    assert line.log(0.7) == pytest.approx(-0.021) and line.log(10.0) == pytest.approx(-0.3)


def test_forwards_start_at_the_spot_and_keep_their_last_growth():
    """Forwards are log-linear from the spot, and beyond the last one grow as between the last two."""
    line = log_curve(curve("forward", {1.0: 102.0, 2.0: 103.0}), spot=100.0)
    assert 100.0 * line.factor(0.5) == pytest.approx(math.sqrt(100.0 * 102.0))
    assert 100.0 * line.factor(2.0) == pytest.approx(103.0)
    assert 100.0 * line.factor(3.0) == pytest.approx(103.0 * 103.0 / 102.0)


@pytest.mark.parametrize(("compounding", "day_count", "time", "rate", "factor"), [
    ("annual", "Actual/365 (Fixed)", 2.0, 0.05, 1.05**-2),
    ("annual", "Actual/360", 2.0, 0.05, 1.05 ** (-730 / 360)),
    ("simple", "Actual/360", 91 / 365, 0.05, 1 / (1 + 0.05 * 91 / 360)),
    ("simple", "30/360", 90 / 365, 0.05, 1 / (1 + 0.05 * 90 / 360)),  # 2026-12-01 to 2027-03-01
    ("continuous", "Actual/Actual (ISDA)", 761 / 365, 0.05, math.exp(-0.05 * (31 / 365 + 1 + 365 / 366))),
    ("continuous", "Actual/365 (Fixed)", 2.0, 0.05, math.exp(-0.1)),
])
def test_compounding_and_day_count_of_rates(compounding: str, day_count: str, time: float, rate: float, factor: float):
    """A zero rate is turned into its discount factor by the convention that it is quoted by; seen from 1 December 2026,
    761 days later is 31 December 2028."""
    quoted = replace(curve("zero", {time: rate}), convention=RateConvention(compounding, day_count, date(2026, 12, 1)))
    assert log_curve(quoted).factor(time) == pytest.approx(factor, rel=1e-14)


def test_a_flat_annual_rate():
    """A flat rate compounds over any time, whole years or not."""
    flat = replace(curve("zero", {0.0: 0.05}), convention=RateConvention("annual", "Actual/360"))
    assert log_curve(flat).factor(0.7) == pytest.approx(1.05 ** (-0.7 * 365 / 360), rel=1e-15)
