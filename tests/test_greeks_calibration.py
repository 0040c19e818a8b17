"""Do the errors of sensitivities mean what they say? 95 % intervals over many seeds, for each estimator."""

from __future__ import annotations

from functools import cache
from math import sqrt

import closed_forms as forms
import numpy as np
import pytest

from greek_tools import bend, ready, slope
from mcx.estimators.batches import FEWEST_PATHS, Sampling
from mcx.estimators.methods import methods
from mcx.leaves.jacobian import inputs
from mcx.machine.run import Stream

RUNS, PILOT = 400, 1 << 14
AT = {"spot": 100.0, "maturity": 1.0, "rate": 0.04, "dividend_yield": 0.015, "vol": 0.22}
TEXT = """payoff: call_and_bonus
about: A call, and cash above a level.
assets: 1
terms:
  strike: {type: level}
  level:  {type: level}
  expiry: {type: date}
events:
  - at: expiry
    pay: max(spot - strike, 0)
  - at: expiry
    if: spot >= level
    then:
      - pay: 15
---
contract: both
currency: EUR
units: 1
assets: [harbour]
payoff: call_and_bonus
terms: {strike: 95, level: 115, expiry: 1y}
---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
"""
CALL = TEXT.replace("pay: 15", "pay: 0")


def call(**at: float) -> float:
    return forms.european("call", strike=95.0, **at)


def both(**at: float) -> float:
    return call(**at) + forms.cash_or_nothing("call", 115.0, 15.0, **at)


CASES = {"pathwise": (CALL, call), "likelihood": (TEXT, both), "mixed": (TEXT, both)}


@cache
def runs(estimator: str, proxy: bool = False) -> tuple[np.ndarray, np.ndarray]:
    """Delta, vega, rho and gamma by an estimator: values and errors of all runs, (runs, 4), fewest paths each; with a
    smooth proxy for what jumps, or without."""
    made, market = ready(CASES[estimator][0])
    pilot = Sampling(SEEDS[0], PILOT, Stream.PILOT) if proxy else None
    bound = methods(made, market, estimator, pilot).valid[0].on(market)
    kinds = [number.kind for number in inputs(market, made.dated.contract)]
    columns = [kinds.index(kind) for kind in ("spot", "vol", "rate")]
    coefficients = bound.derivatives(Sampling(SEEDS[0], PILOT, Stream.PILOT, threads=1)).fitted()
    values, errors = [], []
    for seed in SEEDS:
        first, second = bound.derivatives(Sampling(seed, FEWEST_PATHS, threads=1)).with_controls(coefficients)
        found = [first.estimates()[column] for column in columns] + [second.estimates()[0]]
        values.append([each.value for each in found])
        errors.append([each.standard_error for each in found])
    return np.array(values), np.array(errors)


SEEDS = [int(seed) for seed in np.random.default_rng(0x3C6EF372FE94F82B).integers(1, 2**63, RUNS)]


@pytest.mark.parametrize(("estimator", "proxy"), [
    ("pathwise", False), ("likelihood", False), ("mixed", False), ("likelihood", True), ("mixed", True)])
def test_intervals_cover(estimator: str, proxy: bool):
    """95 % intervals cover in 92 % to 98 % of the runs, though they have only 4,096 paths, and all runs together are
    unbiased."""
    value = CASES[estimator][1]
    truth = np.array([*(slope(value, AT, by) for by in ("spot", "vol", "rate")), bend(value, AT, "spot")])
    values, errors = runs(estimator, proxy)
    covered = np.mean(np.abs(values - truth) < 1.96 * errors, axis=0)
    assert np.all((0.92 <= covered) & (covered <= 0.98)), covered
    pooled = sqrt(RUNS) * np.abs(values.mean(axis=0) - truth) / values.std(axis=0)
    assert np.all(pooled < 4), pooled


def test_the_check_would_see_a_wrong_error():
    """Errors a fifth too small fall out of the range."""
    truth = slope(call, AT, "spot")
    values, errors = runs("pathwise")
    assert np.mean(np.abs(values[:, 0] - truth) < 1.96 * 0.8 * errors[:, 0]) < 0.92


@pytest.mark.parametrize("estimator", ["likelihood", "mixed"])
def test_a_proxy_takes_variance_away(estimator: str):
    """What is smooth of a jumping payoff is known pathwise, and a control."""
    assert np.all(runs(estimator, True)[0].std(axis=0) < runs(estimator)[0].std(axis=0))


def test_mixed_is_better_than_likelihood_ratio_alone():
    """Taking the smooth payment pathwise leaves less variance."""
    assert np.all(runs("mixed")[0].std(axis=0) < runs("likelihood")[0].std(axis=0))
