"""The day-one margin: each of its units by hand, and errors that cover."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from mcx.estimators.estimate import Estimate
from mcx.estimators.margin import day_one_margin

PRICE, LIFE = Estimate(0.975, 0.0004, 4096), Estimate(2.5, 0.01, 4096)


def test_each_unit():
    margin = day_one_margin(1.005, PRICE, LIFE, 200_000.0)
    assert margin.amount == Estimate(pytest.approx(0.03), 0.0004, 4096)
    assert margin.share == Estimate(pytest.approx(0.03 / 1.005), pytest.approx(0.0004 / 1.005), 4096)
    assert margin.currency.value == pytest.approx(6000.0) and margin.currency.standard_error == pytest.approx(80.0)
    assert margin.per_year.value == pytest.approx(0.012)


def test_a_price_above_issue_is_a_negative_margin():
    margin = day_one_margin(0.97, PRICE, LIFE, 100.0)
    assert margin.per_year.value == pytest.approx(-0.002) and margin.per_year.standard_error > 0.0


def test_the_error_for_a_year_holds_for_a_life_without_error():
    sure = replace(LIFE, standard_error=0.0)
    assert day_one_margin(1.0, PRICE, sure, 1.0).per_year.standard_error == pytest.approx(0.0004 / 2.5)


@pytest.mark.parametrize("correlation", [-1.0, -0.5, 0.0, 0.5, 1.0])
def test_intervals_for_a_year_cover_whatever_the_correlation(correlation: float):
    """Prices and lives drawn together around a margin of 3 % over 2.5 years: 95 % intervals cover it at least so often
    (2,000 draws, so 94 % is two deviations below)."""
    draws = np.random.default_rng(0x3956C25BF348B538).standard_normal((2000, 2))
    along = correlation * draws[:, 0] + np.sqrt(1.0 - correlation**2) * draws[:, 1]
    covered = 0
    for x, y in zip(draws[:, 0], along, strict=True):
        price = replace(PRICE, value=0.97 + 0.004 * x, standard_error=0.004)
        life = replace(LIFE, value=2.5 + 0.1 * y, standard_error=0.1)
        low, high = day_one_margin(1.0, price, life, 1.0).per_year.interval95
        covered += low <= 0.03 / 2.5 <= high
    assert covered >= 0.94 * 2000
