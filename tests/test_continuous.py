"""Continuous watching where rate, yield and vol change in time, against laws worked out by quadrature or closed form.

The barrier is flat while the forward moves, so in the clock of variance the barrier's distance drifts at a rate that
jumps at every node: a step that spans a node uses the wrong law for its extreme, however exact its ends are.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import exp, inf, sqrt

import pytest
from absorbed import Piece, extreme_beyond, pieces_between, unsplit, untouched
from closed_forms import barrier_option, lookback_fixed, lookback_floating, touch_at_expiry
from helpers import check, price_of

PATHS = 2**21


@dataclass(frozen=True)
class Shape:
    """Forward rates, yields and vols on stretches that end at `ends`, and the market document that says the same."""

    ends: tuple[float, ...]
    rates: tuple[float, ...]
    yields: tuple[float, ...]
    vols: tuple[float, ...]

    @property
    def pieces(self) -> list[Piece]:
        return pieces_between(self.rates, self.yields, self.vols, self.lengths)

    @property
    def lengths(self) -> list[float]:
        return [end - start for start, end in zip((0.0, *self.ends), self.ends, strict=False)]

    @property
    def discount(self) -> float:
        return exp(-sum(rate * length for rate, length in zip(self.rates, self.lengths, strict=True)))

    def curve(self, forwards: tuple[float, ...], vol: bool = False) -> str:
        """Zero rates or Black vols to each end, as a curve of the market document."""
        total, nodes = 0.0, []
        for forward, length, end in zip(forwards, self.lengths, self.ends, strict=True):
            total += (forward**2 if vol else forward) * length
            level = sqrt(total / end) if vol else total / end
            nodes.append(f"{end!r}y: {100 * level:.17g}%")
        return f"{{{', '.join(nodes)}}}"

    def market(self, spot: float = 100.0) -> str:
        return (f"market: 0y\nrates: {{EUR: {self.curve(self.rates)}}}\nassets:\n"
                f"  harbour: {{spot: {spot}, currency: EUR, yield: {self.curve(self.yields)}, "
                f"vol: {self.curve(self.vols, vol=True)}}}\n")


HUMPED = Shape((0.25, 0.6, 1.0), (0.01, 0.09, 0.03), (0.04, 0.0, 0.02), (0.30, 0.12, 0.22))
FALLING = Shape((0.5, 1.0), (0.06, -0.01), (0.0, 0.05), (0.25, 0.15))
RISING_VOL = Shape((0.5, 1.0), (0.05, 0.05), (0.0, 0.0), (0.17, sqrt(2 * 0.19**2 - 0.17**2)))


def contract(payoff: str, watched: str = "{continuous: [0y, 1y]}", expiry: str = "1y", **terms: object) -> str:
    lines = ["contract: watched to the end", "currency: EUR", "units: 1", "assets: [harbour]",
             f"payoff: {payoff}", "terms:", f"  watched: {watched}", f"  expiry: {expiry}"]
    return "\n".join([*lines, *(f"  {name}: {value}" for name, value in terms.items())]) + "\n---\n"


def no_touch(direction: str, barrier: float, **other: str) -> str:
    return contract("touch", kind="no touch", direction=direction, barrier=barrier, cash=1, **other)


def test_no_touch_with_rising_vol_is_split_at_the_node():
    """A one-year no-touch at 90 %, rate 5 %, vol 17 % to six months and 19 % to a year, is worth the split law's
    value; taking the year as one step would be 84 bp off, some thirty standard errors."""
    truth = RISING_VOL.discount * untouched("down", 90.0, 100.0, RISING_VOL.pieces)
    mistaken = RISING_VOL.discount * untouched("down", 90.0, 100.0, unsplit(RISING_VOL.pieces))
    assert truth - mistaken == pytest.approx(84e-4, abs=0.5e-4)
    estimate = price_of(no_touch("down", 90.0) + RISING_VOL.market(), PATHS, 0x3C6EF372FE94F82B)
    check(estimate, truth)
    assert abs(estimate.mean - mistaken) > 20 * estimate.error


@pytest.mark.parametrize("shape", [HUMPED, FALLING], ids=["humped", "falling"])
@pytest.mark.parametrize(("direction", "barrier"), [("down", 88.0), ("up", 112.0)])
def test_no_touch_under_term_structures(shape: Shape, direction: str, barrier: float):
    """The law of one side's extreme is exact under any term structures of rate, yield and vol."""
    truth = shape.discount * untouched(direction, barrier, 100.0, shape.pieces)
    check(price_of(no_touch(direction, barrier) + shape.market(), PATHS, 0xBB67AE8584CAA73B), truth)


@pytest.mark.parametrize(("side", "direction", "barrier", "strike"),
                         [("call", "down", 90.0, 95.0), ("put", "up", 115.0, 105.0), ("call", "up", 130.0, 95.0)])
def test_barrier_options_under_term_structures(side: str, direction: str, barrier: float, strike: float):
    """The joint law of the extreme and the last level is exact as well: knock-out calls and puts."""
    share, bounds = (1.0, (strike, inf)) if side == "call" else (-1.0, (0.0, strike))
    truth = HUMPED.discount * untouched(direction, barrier, 100.0, HUMPED.pieces, share, -share * strike, *bounds)
    text = contract("barrier", side=side, direction=direction, knock="out", strike=strike, barrier=barrier)
    check(price_of(text + HUMPED.market(), PATHS, 0xA54FF53A5F1D36F1), truth)


def test_window_that_begins_later():
    """A barrier watched from 0.4 to 0.8 years only: the level may be beyond it before and after."""
    ends, shape = (0.25, 0.4, 0.6, 0.8, 1.0), HUMPED
    at = [next(k for k, end in enumerate(shape.ends) if end >= stop) for stop in ends]
    lengths = [end - start for start, end in zip((0.0, *ends), ends, strict=False)]
    plain = pieces_between([shape.rates[k] for k in at], [shape.yields[k] for k in at], [shape.vols[k] for k in at],
                           lengths)
    pieces = [Piece(p.growth, p.variance, 0.4 < end < 0.9) for p, end in zip(plain, ends, strict=True)]
    joined = [Piece(sum(p.growth for p in pieces[:2]), sum(p.variance for p in pieces[:2]), False), *pieces[2:]]
    truth = shape.discount * untouched("up", 104.0, 100.0, joined)
    check(price_of(no_touch("up", 104.0, watched="{continuous: [0.4y, 0.8y]}") + shape.market(), PATHS,
                   0x510E527FADE682D1), truth)


def test_drift_in_step_with_variance_is_a_closed_form():
    """Where the carry is in proportion to the variance the barrier stands still in the clock of variance, and the
    closed form for flat numbers holds with the same integrals (Merton 1973), whatever the term structure."""
    vols, lengths = (0.14, 0.31, 0.2), (0.2, 0.3, 0.5)
    rates = tuple(0.02 + 1.1 * vol**2 for vol in vols)
    shape = Shape((0.2, 0.5, 1.0), rates, (0.02, 0.02, 0.02), vols)
    variance = sum(vol**2 * length for vol, length in zip(vols, lengths, strict=True))
    flat = {"spot": 100.0, "maturity": 1.0, "rate": 0.02 + 1.1 * variance, "dividend_yield": 0.02,
            "vol": sqrt(variance)}
    truth = barrier_option("call", "down", "in", 100.0, 92.0, **flat)
    text = contract("barrier", side="call", direction="down", knock="in", strike=100.0, barrier=92.0)
    check(price_of(text + shape.market(), PATHS, 0x9B05688C2B3E6C1F), truth)


@pytest.mark.parametrize(("direction", "barrier"), [("down", 80.0), ("down", 99.0), ("up", 101.0), ("up", 140.0)])
def test_one_touch_law(direction: str, barrier: float):
    """The chance of a touch, near and far, is the closed form's (Reiner & Rubinstein 1991)."""
    flat = {"spot": 100.0, "maturity": 1.0, "rate": 0.03, "dividend_yield": 0.01, "vol": 0.2}
    truth = touch_at_expiry(direction, "in", "cash", barrier, 1.0, **flat)
    market = "market: 0y\nrates: {EUR: 3%}\nassets:\n  harbour: {spot: 100, currency: EUR, yield: 1%, vol: 20%}\n"
    text = contract("touch", kind="one touch", direction=direction, barrier=barrier, cash=1)
    check(price_of(text + market, PATHS, 0x1F83D9ABFB41BD6B), truth, sharp=4e-3)


@pytest.mark.parametrize(("side", "strike"), [("call", 105.0), ("put", 98.0), ("call", 90.0)])
def test_fixed_strike_lookback_under_term_structures(side: str, strike: float):
    """The drawn extreme itself, not only its side of a barrier, has the right law in every split step."""
    truth = HUMPED.discount * extreme_beyond(side, strike, 100.0, HUMPED.pieces)
    text = contract("lookback", side=side, strike_type="fixed", strike=strike)
    check(price_of(text + HUMPED.market(), PATHS, 0x5BE0CD19137E2179), truth)


@pytest.mark.parametrize("side", ["call", "put"])
def test_lookback_watched_in_several_steps(side: str):
    """Cutting a flat year into steps at nodes that change nothing leaves the extreme's law as it was: the closed
    form of the floating strike (Goldman, Sosin & Gatto 1979)."""
    flat = {"spot": 100.0, "maturity": 1.0, "rate": 0.04, "dividend_yield": 0.01, "vol": 0.25}
    shape = Shape((0.1, 0.35, 0.7, 1.0), (0.04,) * 4, (0.01,) * 4, (0.25,) * 4)
    text = contract("lookback", side=side, strike_type="floating")
    check(price_of(text + shape.market(), PATHS, 0xCBBB9D5DC1059ED8), lookback_floating(side, **flat))


def test_quadrature_agrees_with_the_closed_form_where_both_hold():
    """The tests' own quadrature is right where coefficients are flat: no touch, option, extreme."""
    flat = {"spot": 100.0, "maturity": 1.0, "rate": 0.04, "dividend_yield": 0.01, "vol": 0.25}
    pieces = [Piece(0.03 * part, 0.0625 * part) for part in (0.3, 0.2, 0.5)]
    discount = exp(-0.04)
    call = discount * untouched("down", 85.0, 100.0, pieces, 1.0, -100.0, 100.0, inf)
    assert call == pytest.approx(barrier_option("call", "down", "out", 100.0, 85.0, **flat), rel=1e-10)
    beyond = discount * extreme_beyond("call", 110.0, 100.0, pieces)
    assert beyond == pytest.approx(lookback_fixed("call", strike=110.0, **flat), rel=1e-7)
