"""Sensitivities under cash dividends, quanto, composite and funding: closed forms, and what is refused."""

from __future__ import annotations

from math import exp, log, sqrt
from pathlib import Path

import closed_forms as forms
import pytest
from greek_tools import bend, slope
from scipy.special import ndtr

import mcx

SEED = 0x428A2F98D728AE22
HEAD = "contract: c\ncurrency: EUR\nunits: 1\nassets: [harbour]\n"
CALL = "payoff: european\nterms: {side: call, strike: 100, expiry: 1y}\n"
EARLY = """payoff: early
about: A digital while a dividend is to come, and the level after it.
terms: {first: {type: date}, last: {type: date}}
events:
  - at: first
    if: spot >= 98
    then:
      - {pay: 100, as: early}
  - {at: last, pay: spot, as: late}
---
"""


def market(asset: str, more: str = "") -> str:
    return f"---\nmarket: 0y\nrates: {{EUR: 4%, USD: 2%}}\nassets:\n  harbour: {{spot: 100, {asset}}}\n{more}"


def greeks(tmp_path: Path, text: str, paths: int = 2**18, **wish: str):
    """Every sensitivity by name, asset or currency, and the result."""
    file = tmp_path / "case.yaml"
    file.write_text(text)
    result = mcx.greeks(file, paths=paths, seed=SEED, **wish)
    return {(each.name, each.asset): each for each in result.greeks}, result


def black(forward: float, vol: float, time: float = 1.0, strike: float = 100.0) -> tuple[float, float, float]:
    """Undiscounted call, its derivative by the forward and by the vol."""
    d1 = log(forward / strike) / (vol * sqrt(time)) + vol * sqrt(time) / 2
    value = forward * ndtr(d1) - strike * ndtr(d1 - vol * sqrt(time))
    return value, float(ndtr(d1)), forward * sqrt(time) * exp(-d1 * d1 / 2) / sqrt(2 * 3.141592653589793)


def near(found, truth: float) -> None:
    assert abs(found.value - truth) < 4 * found.standard_error and found.standard_error < 0.01 * abs(truth)


def test_call_with_cash_dividends_and_funding(tmp_path: Path):
    """The spot less today's value of the dividend, which the rate moves too; funding discounts alone."""
    found, _ = greeks(tmp_path, HEAD + CALL + market("currency: EUR, dividends: [{ex: 0.5y, cash: 8}], vol: 20%",
                                                     "funding: {EUR: 1%}\n"))
    left, df = 100 - 8 * exp(-0.02), exp(-0.05)
    value, by_forward, by_vol = black(left * exp(0.04), 0.2)
    near(found["delta", "harbour"], df * by_forward * exp(0.04))
    near(found["vega", "harbour"], 0.01 * df * by_vol)
    by_rate = by_forward * (left * exp(0.04) + 8 * 0.5 * exp(-0.02) * exp(0.04))
    near(found["rho", "EUR"], 1e-4 * df * (by_rate - value))
    near(found["funding", "EUR"], -1e-4 * df * value)


@pytest.mark.parametrize("estimator", ["pathwise", "likelihood"])
def test_gamma_under_cash_dividends(tmp_path: Path, estimator: str):
    """The part of the spot that the dividend is worth does not move: what is left takes the whole move of the spot."""
    found, _ = greeks(tmp_path, HEAD + CALL + market("currency: EUR, dividends: [{ex: 0.5y, cash: 20}], vol: 20%"),
                      estimator=estimator)
    left = 100 - 20 * exp(-0.02)
    _, _, by_vol = black(left * exp(0.04), 0.2)
    near(found["gamma", "harbour"], 0.01 * 100 * exp(-0.04) * by_vol / (left * left * 0.2))


def test_theta_under_cash_dividends(tmp_path: Path):
    """A day on the ex date is a day nearer, as expiry is: the dividend is worth more today, the call less."""
    found, _ = greeks(tmp_path, HEAD + CALL + market("currency: EUR, dividends: [{ex: 0.5y, cash: 20}], vol: 20%"))

    def value(passed: float) -> float:
        left, time = 100 - 20 * exp(-0.04 * (0.5 - passed)), 1.0 - passed
        return exp(-0.04 * time) * black(left * exp(0.04 * time), 0.2, time)[0]

    near(found["theta", ""], value(1 / 365) - value(0.0))


def test_no_gamma_where_dividends_are_blended(tmp_path: Path):
    """A share made of cash hangs on the forward, so on the spot."""
    blend = "currency: EUR, dividends: [{ex: 0.5y, cash: 20}], dividend_blend: {cash_until: 0.1y, share_from: 0.8y}"
    found, result = greeks(tmp_path, HEAD + CALL + market(f"{blend}, vol: 20%"))
    assert ("gamma", "harbour") not in found and ("delta", "harbour") in found
    assert "blended" in next(each.reason for each in result.refused if each.name == "gamma")


@pytest.mark.parametrize("direction", ["down", "up"])
def test_a_composite_asset_watched_continuously(tmp_path: Path, direction: str):
    """The bridge begins at the log spot of the asset and that of the rate of exchange: delta and gamma know it. The
    asset in the contract's currency has one vol, and the contract's rate."""
    strike, barrier = {"down": (90.0, 85.0), "up": (80.0, 120.0)}[direction]
    terms = (f"payoff: barrier\nterms: {{side: call, direction: {direction}, knock: out, strike: {strike}, "
             f"barrier: {barrier}, watched: {{continuous: [0y, 1y]}}, expiry: 1y}}\n")
    rate = "fx: {EUR per USD: {spot: 0.9, vol: 12%}}\ncorrelation: {harbour/EUR per USD: 40%}\n"
    found, _ = greeks(tmp_path, HEAD + "conversion: {harbour: composite}\n" + terms
                      + market("currency: USD, yield: 1%, vol: 20%", rate))
    at = {"spot": 90.0, "maturity": 1.0, "rate": 0.04, "dividend_yield": 0.01,
          "vol": sqrt(0.04 + 0.0144 + 2 * 0.4 * 0.2 * 0.12)}

    def value(**at: float) -> float:
        return forms.barrier_option("call", direction, "out", strike, barrier, **at)

    for name, truth in (("delta", 0.9 * slope(value, at, "spot", step=1e-3)),
                        ("gamma", 0.81 * bend(value, at, "spot", step=1e-3))):
        assert abs(found[name, "harbour"].value - truth) < 4 * found[name, "harbour"].standard_error, name
        assert found[name, "harbour"].standard_error < 0.15 * abs(truth), name


def test_quanto_and_composite(tmp_path: Path):
    """Delta, and vega with the vol in drift (quanto) and in the joint variance and forward (composite)."""
    quanto = "currency: USD, yield: 1%, vol: 20%, quanto: {fx_vol: 10%, fx_correlation: 50%, fx: EUR per USD}"
    found, _ = greeks(tmp_path, HEAD + "conversion: {harbour: quanto}\n" + CALL + market(quanto))
    forward, df = 100 * exp(0.02 - 0.01 - 0.5 * 0.2 * 0.1), exp(-0.04)
    value, by_forward, by_vol = black(forward, 0.2)
    near(found["delta", "harbour"], df * by_forward * forward / 100)
    near(found["vega", "harbour"], 0.01 * df * (by_vol - by_forward * forward * 0.05))
    near(found["rho", "USD"], 1e-4 * df * by_forward * forward)
    near(found["rho", "EUR"], -1e-4 * df * value)
    rate = "fx: {EUR per USD: {spot: 0.9, vol: 12%}}\ncorrelation: {harbour/EUR per USD: 40%}\n"
    found, _ = greeks(tmp_path, HEAD + "conversion: {harbour: composite}\n" + CALL.replace("100", "90")
                      + market("currency: USD, yield: 1%, vol: 20%", rate))
    vol = sqrt(0.04 + 0.0144 + 2 * 0.4 * 0.2 * 0.12)
    value, by_forward, by_vol = black(90 * exp(0.03), vol, strike=90.0)
    near(found["delta", "harbour"], df * by_forward * 0.9 * exp(0.03))
    near(found["vega", "harbour"], 0.01 * df * by_vol * (0.2 + 0.4 * 0.12) / vol)
    near(found["rho", "EUR"], 1e-4 * df * (by_forward * 90 * exp(0.03) - value))


def test_a_jump_that_looks_at_dividends_to_come(tmp_path: Path):
    """Delta, and rho, which moves the dividends' value under the level that is compared: against the closed form."""
    text = EARLY + HEAD + "payoff: early\nterms: {first: 0.5y, last: 1y}\n" + market(
        "currency: EUR, dividends: [{ex: 0.75y, cash: 20}], vol: 20%")
    found, result = greeks(tmp_path, text)
    left, strike, deviation = 100 - 20 * exp(-0.03), 98 - 20 * exp(-0.01), 0.2 * sqrt(0.5)
    d2 = (log(left / strike) + 0.02) / deviation - deviation / 2
    density = exp(-d2 * d2 / 2) / sqrt(2 * 3.141592653589793)
    near(found["delta", "harbour"], 100 * exp(-0.02) * density / (left * deviation) + 1)
    moved = (15 * exp(-0.03) / left - 5 * exp(-0.01) / strike + 0.5) / deviation
    rho = 1e-4 * (100 * exp(-0.02) * (density * moved - 0.5 * ndtr(d2)) + 15 * exp(-0.03))
    near(found["rho", "EUR"], rho)
    assert [each.name for each in result.refused] == []
    scored = greeks(tmp_path, text, estimator="likelihood")[0]["rho", "EUR"]
    assert scored.estimator == "likelihood ratio", "of the level after the dividend too: both steps about the escrow"
    assert abs(scored.value - rho) < 4 * scored.standard_error < 0.1 * rho


def test_an_extreme_that_looks_at_dividends_to_come(tmp_path: Path):
    """Watched continuously, the law of the extreme given levels moves with the dividends' value: refused, with the
    line."""
    terms = ("payoff: barrier\nterms: {side: call, direction: down, knock: out, strike: 95, barrier: 70, "
             "watched: {continuous: [0y, 1y]}, expiry: 1y}\n")
    found, result = greeks(tmp_path, HEAD + terms + market("currency: EUR, dividends: [{ex: 0.6y, cash: 8}], vol: 20%"))
    assert ("rho", "EUR") not in found and ("vega", "harbour") in found
    refused = {(each.name, each.asset): each.reason for each in result.refused}
    assert "cash dividends still to come are part of a level that is compared at" in refused["rho", "EUR"]


@pytest.mark.parametrize("size", ["1y", "0.75y"])
def test_a_jump_after_the_last_dividend_has_its_rho(tmp_path: Path, size: str):
    """On or after the ex date nothing is to come, and nothing is refused."""
    digital = f"payoff: digital\nterms: {{side: call, pays: cash, amount: 100, strike: 95, expiry: {size}}}\n"
    asset = "currency: EUR, dividends: [{ex: 0.75y, cash: 8}], vol: 20%"
    found, result = greeks(tmp_path, HEAD + digital + market(asset), paths=2**19)
    assert result.refused == ()
    time = float(size[:-1])
    left, deviation = 100 - 8 * exp(-0.03), 0.2 * sqrt(time)
    d2 = (log(left / 95) + 0.04 * time) / deviation - deviation / 2
    density = exp(-d2 * d2 / 2) / sqrt(2 * 3.141592653589793)
    by_rate = density / deviation * (time + 8 * 0.75 * exp(-0.03) / left) - time * ndtr(d2)
    near(found["rho", "EUR"], 1e-4 * 100 * exp(-0.04 * time) * by_rate)


def test_dividends_decrement_and_rates_of_exchange(tmp_path: Path):
    """By the escrowed cash, by a decrement, by the fixed rate's vol and correlation, by the rate of the day."""
    df = exp(-0.04)
    found, _ = greeks(tmp_path, HEAD + CALL + market("currency: EUR, dividends: [{ex: 0.5y, cash: 8}], vol: 20%"))
    left = 100 - 8 * exp(-0.02)
    near(found["dividend", "harbour"], -exp(-0.02) * black(left * exp(0.04), 0.2)[1])
    found, _ = greeks(tmp_path, HEAD + CALL + market(
        "currency: EUR, underlying: total return, decrement: 5%, vol: 20%"))
    near(found["decrement", "harbour"], -1e-4 * df * black(100 * exp(-0.01), 0.2)[1] * 100 * exp(-0.01))
    quanto = "currency: USD, yield: 1%, vol: 20%, quanto: {fx_vol: 10%, fx_correlation: 50%, fx: EUR per USD}"
    found, _ = greeks(tmp_path, HEAD + "conversion: {harbour: quanto}\n" + CALL + market(quanto))
    forward = 100 * exp(0.01 - 0.5 * 0.2 * 0.1)
    slope = df * black(forward, 0.2)[1] * forward
    near(found["fx vega", "harbour"], -0.01 * slope * 0.5 * 0.2)
    near(found["fx correlation", "harbour"], -0.01 * slope * 0.2 * 0.1)
    rate = "fx: {EUR per USD: {spot: 0.9, vol: 12%}}\ncorrelation: {harbour/EUR per USD: 40%}\n"
    found, _ = greeks(tmp_path, HEAD + "conversion: {harbour: composite}\n" + CALL.replace("100", "90")
                      + market("currency: USD, yield: 1%, vol: 20%", rate))
    vol = sqrt(0.04 + 0.0144 + 2 * 0.4 * 0.2 * 0.12)
    _, by_forward, by_vol = black(90 * exp(0.03), vol, strike=90.0)
    near(found["fx delta", "EUR per USD"], df * by_forward * 100 * exp(0.03))
    near(found["fx vega", "EUR per USD"], 0.01 * df * by_vol * (0.12 + 0.4 * 0.2) / vol)
    near(found["correlation", "harbour/EUR per USD"], 0.01 * df * by_vol * 0.2 * 0.12 / vol)
