"""Closed forms that the proof tests compare the machine with, each with its published source.

They are written from the formulas, share nothing with `mcx`, and are themselves proved against published values in
`test_closed_forms.py`. Arguments are named as in `published/*.yaml`: rates, yields and vols per year, continuously
compounded, maturity in years. Where rates and vols vary in time only their integrals matter for laws at one date,
so a caller passes the average rate and the root mean square vol; barriers and extremes need more, see `absorbed.py`.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import exp, inf, log, sqrt

import numpy as np
from scipy.integrate import quad
from scipy.special import ndtr


def exchange_of_forwards(receive: float, give: float, deviation: float) -> float:
    """E max(A - B, 0) of two lognormals with means `receive` and `give`, `deviation` that of log(A / B).

    Margrabe (1978), The value of an option to exchange one asset for another, J. Finance 33; with `give` fixed it is
    Black (1976), The pricing of commodity contracts.
    """
    d1 = log(receive / give) / deviation + deviation / 2
    return receive * ndtr(d1) - give * ndtr(d1 - deviation)


def european(kind: str, spot: float, strike: float, maturity: float, rate: float, dividend_yield: float,
             vol: float) -> float:
    """European call or put. Black & Scholes (1973); Merton (1973) for the yield."""
    forward, deviation = spot * exp((rate - dividend_yield) * maturity), vol * sqrt(maturity)
    pair = (forward, strike) if kind == "call" else (strike, forward)
    return exp(-rate * maturity) * exchange_of_forwards(*pair, deviation)


def slice_of_payoff(share: float, cash: float, lower: float, upper: float, spot: float | np.ndarray,
                    maturity: float, rate: float, dividend_yield: float, vol: float) -> float | np.ndarray:
    """Value of `share * S + cash` paid at maturity if lower < S < upper: the brick of digitals and barriers.

    Reiner & Rubinstein (1991), Unscrambling the binary code, Risk 4. `spot` may be an array.
    """
    deviation = vol * sqrt(maturity)
    drift = (rate - dividend_yield) * maturity - deviation**2 / 2

    def below(level: float, shift: float) -> float | np.ndarray:
        return ndtr((np.log(level / spot) - drift) / deviation - shift) if 0 < level < inf else float(level > 0)

    shares = below(upper, deviation) - below(lower, deviation)
    chance = below(upper, 0.0) - below(lower, 0.0)
    return share * spot * exp(-dividend_yield * maturity) * shares + cash * exp(-rate * maturity) * chance


def gap_option(kind: str, trigger: float, strike: float, **market: float) -> float:
    """S - strike if S > trigger (call), strike - S if S < trigger (put). Reiner & Rubinstein (1991)."""
    if kind == "call":
        return slice_of_payoff(1.0, -strike, trigger, inf, **market)
    return slice_of_payoff(-1.0, strike, 0.0, trigger, **market)


def cash_or_nothing(kind: str, strike: float, cash: float, **market: float) -> float:
    """Cash if S ends above (call) or below (put) the strike. Reiner & Rubinstein (1991)."""
    return slice_of_payoff(0.0, cash, *((strike, inf) if kind == "call" else (0.0, strike)), **market)


def asset_or_nothing(kind: str, strike: float, **market: float) -> float:
    """One share if S ends above (call) or below (put) the strike. Reiner & Rubinstein (1991)."""
    return slice_of_payoff(1.0, 0.0, *((strike, inf) if kind == "call" else (0.0, strike)), **market)


def supershare(lower: float, upper: float, **market: float) -> float:
    """S / lower if S ends between the two levels. Hakansson (1976), The purchasing power fund, FAJ 32."""
    return slice_of_payoff(1.0 / lower, 0.0, lower, upper, **market)


def untouched_slice(direction: str, barrier: float, share: float, cash: float, lower: float, upper: float,
                    spot: float | np.ndarray, maturity: float, rate: float, dividend_yield: float,
                    vol: float) -> float | np.ndarray:
    """`share * S + cash` if lower < S < upper and the barrier was never touched, watched continuously.

    The image of the slice, taken at barrier**2 / spot, is subtracted: Merton (1973), Theory of rational option
    pricing; Reiner & Rubinstein (1991), Breaking down the barriers, Risk 4.
    """
    lower, upper = (max(lower, barrier), upper) if direction == "down" else (lower, min(upper, barrier))
    if lower >= upper:
        return 0.0 * spot
    power = 2 * (rate - dividend_yield) / vol**2 - 1
    rest = (maturity, rate, dividend_yield, vol)
    image = slice_of_payoff(share, cash, lower, upper, barrier**2 / spot, *rest)
    value = slice_of_payoff(share, cash, lower, upper, spot, *rest) - (barrier / spot) ** power * image
    return value * ((spot > barrier) if direction == "down" else (spot < barrier))


def barrier_option(kind: str, direction: str, knock: str, strike: float, barrier: float, rebate: float = 0.0,
                   **market: float) -> float:
    """One-sided barrier call or put, watched continuously; the rebate is paid at expiry on the other outcome.

    Merton (1973); Reiner & Rubinstein (1991). Rebates paid at the hit are another formula.
    """
    share, cash, lower, upper = (1.0, -strike, strike, inf) if kind == "call" else (-1.0, strike, 0.0, strike)
    alive = untouched_slice(direction, barrier, share, cash, lower, upper, **market)
    untouched = untouched_slice(direction, barrier, 0.0, 1.0, 0.0, inf, **market)
    if knock == "out":
        return alive + rebate * (exp(-market["rate"] * market["maturity"]) - untouched)
    return slice_of_payoff(share, cash, lower, upper, **market) - alive + rebate * untouched


def touch_at_expiry(direction: str, touch: str, pays: str, barrier: float, cash: float = 0.0,
                    **market: float) -> float:
    """Cash or one share at expiry if the barrier was (in) or was not (out) touched. Reiner & Rubinstein (1991)."""
    share, cash = (1.0, 0.0) if pays == "asset" else (0.0, cash)
    alive = untouched_slice(direction, barrier, share, cash, 0.0, inf, **market)
    return alive if touch == "out" else slice_of_payoff(share, cash, 0.0, inf, **market) - alive


def lookback_fixed(kind: str, spot: float, strike: float, maturity: float, rate: float, dividend_yield: float,
                   vol: float) -> float:
    """max(highest - strike, 0) or max(strike - lowest, 0), newly issued, watched continuously, carry not zero.

    Conze & Viswanathan (1991), Path dependent options: the case of lookback options, J. Finance 46.
    """
    sign = 1 if kind == "call" else -1
    discount, carry, deviation = exp(-rate * maturity), rate - dividend_yield, vol * sqrt(maturity)
    certain = max(sign * (spot - strike), 0.0)
    strike = max(spot, strike) if kind == "call" else min(spot, strike)
    d1 = log(spot / strike) / deviation + carry * maturity / deviation + deviation / 2
    forward = spot * exp(carry * maturity)
    vanilla = sign * (forward * ndtr(sign * d1) - strike * ndtr(sign * (d1 - deviation)))
    image = (spot / strike) ** (-2 * carry / vol**2) * ndtr(sign * (d1 - 2 * carry * sqrt(maturity) / vol))
    extra = sign * vol**2 / (2 * carry) * (forward * ndtr(sign * d1) - spot * image)
    return discount * (certain + vanilla + extra)


def lookback_floating(kind: str, spot: float, maturity: float, rate: float, dividend_yield: float, vol: float,
                      extreme_so_far: float | None = None) -> float:
    """S - lowest (call) or highest - S (put), watched continuously, from the fixed-strike one by S - m + (m - low)+.

    Goldman, Sosin & Gatto (1979), Path dependent options: buy at the low, sell at the high, J. Finance 34.
    """
    so_far = spot if extreme_so_far is None else extreme_so_far
    other = lookback_fixed("put" if kind == "call" else "call", spot, so_far, maturity, rate, dividend_yield, vol)
    sign = 1 if kind == "call" else -1
    return other + sign * (spot * exp(-dividend_yield * maturity) - so_far * exp(-rate * maturity))


def geometric_law(spot: float, times: Sequence[float], rate: float, dividend_yield: float,
                  vol: float) -> tuple[float, float, float]:
    """Mean and deviation of the log of the geometric average over `times`, and its mean covariance with log S(end).

    Kemna & Vorst (1990), A pricing method for options based on average asset values, J. Banking & Finance 14.
    """
    grid = np.asarray(times, dtype=float)
    mean = log(spot) + (rate - dividend_yield - vol**2 / 2) * grid.mean()
    variance = vol**2 * np.minimum.outer(grid, grid).mean()
    return mean, sqrt(variance), vol**2 * grid.mean()


def asian_geometric(kind: str, spot: float, strike: float, times: Sequence[float], maturity: float, rate: float,
                    dividend_yield: float, vol: float) -> float:
    """Call or put on the geometric average over `times`, paid at maturity. Kemna & Vorst (1990)."""
    mean, deviation, _ = geometric_law(spot, times, rate, dividend_yield, vol)
    forward = exp(mean + deviation**2 / 2)
    pair = (forward, strike) if kind == "call" else (strike, forward)
    return exp(-rate * maturity) * exchange_of_forwards(*pair, deviation)


def asian_geometric_strike(kind: str, spot: float, times: Sequence[float], maturity: float, rate: float,
                           dividend_yield: float, vol: float) -> float:
    """S(T) against the geometric average over `times`: an exchange of two lognormals. Margrabe (1978)."""
    mean, deviation, covariance = geometric_law(spot, times, rate, dividend_yield, vol)
    average, forward = exp(mean + deviation**2 / 2), spot * exp((rate - dividend_yield) * maturity)
    spread = sqrt(deviation**2 + vol**2 * maturity - 2 * covariance)
    pair = (forward, average) if kind == "call" else (average, forward)
    return exp(-rate * maturity) * exchange_of_forwards(*pair, spread)


def exchange(spot_1: float, spot_2: float, yield_1: float, yield_2: float, vol_1: float, vol_2: float,
             correlation: float, maturity: float, quantity_2: float = 1.0) -> float:
    """Receive asset 1 for `quantity_2` of asset 2. Margrabe (1978)."""
    deviation = sqrt((vol_1**2 + vol_2**2 - 2 * correlation * vol_1 * vol_2) * maturity)
    return exchange_of_forwards(spot_1 * exp(-yield_1 * maturity), quantity_2 * spot_2 * exp(-yield_2 * maturity),
                                deviation)


def both_below(a: float, b: float, correlation: float) -> float:
    """P(X < a, Y < b) of two standard normals, by quadrature over X."""
    rest = sqrt(1 - correlation**2)
    density = lambda x: exp(-x * x / 2) / sqrt(2 * np.pi) * ndtr((b - correlation * x) / rest)  # noqa: E731
    return quad(density, -12.0, min(a, 12.0), epsabs=1e-13, epsrel=1e-12, limit=200)[0] if a > -12 else 0.0


def option_on_extreme_of_two(kind: str, extreme: str, spot_1: float, spot_2: float, strike: float, yield_1: float,
                             yield_2: float, vol_1: float, vol_2: float, correlation: float, maturity: float,
                             rate: float) -> float:
    """Call or put on the larger or smaller of two assets.

    Stulz (1982), Options on the minimum or the maximum of two risky assets, J. Financial Economics 10.
    """
    root = sqrt(maturity)
    value_1, value_2 = spot_1 * exp(-yield_1 * maturity), spot_2 * exp(-yield_2 * maturity)
    bond, spread = strike * exp(-rate * maturity), sqrt(vol_1**2 + vol_2**2 - 2 * correlation * vol_1 * vol_2)
    d, d_1, d_2 = (log(x / y) / (v * root) + v * root / 2
                   for x, y, v in ((value_1, value_2, spread), (value_1, bond, vol_1), (value_2, bond, vol_2)))
    tilt_1, tilt_2 = (vol_1 - correlation * vol_2) / spread, (vol_2 - correlation * vol_1) / spread
    on_least = (value_1 * both_below(d_1, -d, -tilt_1) + value_2 * both_below(d_2, d - spread * root, -tilt_2)
                - bond * both_below(d_1 - vol_1 * root, d_2 - vol_2 * root, correlation))
    larger = value_2 + exchange_of_forwards(value_1, value_2, spread * root)
    mean = larger if extreme == "max" else value_1 + value_2 - larger
    call = on_least
    if extreme == "max":
        singles = (exchange_of_forwards(value_1, bond, vol_1 * root), exchange_of_forwards(value_2, bond, vol_2 * root))
        call = sum(singles) - on_least
    return call if kind == "call" else call - mean + bond


def two_asset_correlation_call(spot_1: float, spot_2: float, strike_1: float, strike_2: float, yield_1: float,
                               yield_2: float, vol_1: float, vol_2: float, correlation: float, maturity: float,
                               rate: float) -> float:
    """S2 - strike_2 if S1 > strike_1 and S2 > strike_2. Zhang (1995), Correlation digital options, J. Fin. Eng. 4."""
    root = sqrt(maturity)
    e_1, e_2 = (log(s / k) / (v * root) + (rate - q - v**2 / 2) * root / v
                for s, k, q, v in ((spot_1, strike_1, yield_1, vol_1), (spot_2, strike_2, yield_2, vol_2)))
    shares = both_below(e_1 + correlation * vol_2 * root, e_2 + vol_2 * root, correlation)
    cash = both_below(e_1, e_2, correlation)
    return spot_2 * exp(-yield_2 * maturity) * shares - strike_2 * exp(-rate * maturity) * cash


def two_asset_digital(cash: float, spot_1: float, spot_2: float, strike_1: float, strike_2: float, yield_1: float,
                      yield_2: float, vol_1: float, vol_2: float, correlation: float, maturity: float, rate: float,
                      kind_1: str = "above", kind_2: str = "above") -> float:
    """Cash if both assets end above their strikes. Heynen & Kat (1996), Brick by brick, Risk 9."""
    if (kind_1, kind_2) != ("above", "above"):
        raise NotImplementedError("only both above")
    root = sqrt(maturity)
    e_1, e_2 = (log(s / k) / (v * root) + (rate - q - v**2 / 2) * root / v
                for s, k, q, v in ((spot_1, strike_1, yield_1, vol_1), (spot_2, strike_2, yield_2, vol_2)))
    return cash * exp(-rate * maturity) * both_below(e_1, e_2, correlation)


def forward_start(kind: str, spot: float, strike_ratio: float, start: float, maturity: float, rate: float,
                  dividend_yield: float, vol: float) -> float:
    """Option whose strike is set at `start` to a multiple of the spot then (Rubinstein 1990, Pay now, choose later)."""
    later = european(kind, 1.0, strike_ratio, maturity - start, rate, dividend_yield, vol)
    return spot * exp(-dividend_yield * start) * later
