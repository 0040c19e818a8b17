"""Market documents: what is read, and what is refused at which place with which words."""

from __future__ import annotations

from datetime import date

import pytest

from mcx.checked.market import Market, RateConvention
from mcx.checked.read_market import read_market
from mcx.leaves.curves import log_curve
from mcx.text.documents import parse_documents

WHOLE = """\
market: 2026-12-01
source: closing prices
rates:
  EUR: {1m: 2.0%, 1y: 2.1%, 2029-12-01: 2.35%}
  USD: {discount_factors: {1y: 0.965, 2y: 0.93}}
funding: {EUR: {value: 80 bp, uncertain: 25 bp, source: bond desk, as_of: 2026-12-01 16:00}}
assets:
  harbour: {spot: 4180.2, currency: EUR, yield: 2.4%, vol: {3m: 17%, 1y: 18%, 3y: 19%}}
  lantern: {spot: {value: 801.1, uncertain: 2}, currency: EUR, forwards: {1y: 805, 2028-12-01: 810}, vol: 22%}
correlation: {harbour/lantern: 65%}
uncertainty: {vol: 1.5%, rates: 10 bp}
"""


def parsed(text: str) -> tuple[Market | None, list[str]]:
    (document,), faults = parse_documents(text.encode(), "m.yaml")
    assert faults == []
    market, faults = read_market(document)
    return market, [str(fault) for fault in sorted(faults)]


def faults_of(old: str, new: str) -> list[str]:
    """The faults of the whole market with one text put in place of another."""
    assert WHOLE.count(old) == 1
    market, faults = parsed(WHOLE.replace(old, new))
    return faults


def test_a_whole_market():
    """Every number is read in natural units with its place and what is said about it."""
    market, faults = parsed(WHOLE)
    assert faults == []
    assert market.valuation == date(2026, 12, 1)
    assert market.source == "closing prices"
    assert [node.label for node in market.rates["EUR"].nodes] == ["1m", "1y", "2029-12-01"]
    assert [node.time for node in market.rates["EUR"].nodes] == [31 / 365, 1.0, 1096 / 365]
    assert [node.quoted.value for node in market.rates["EUR"].nodes] == [0.02, 0.021, 0.0235]
    assert market.rates["USD"].form == "discount"
    funding = market.funding["EUR"]
    assert funding.flat
    assert (funding.nodes[0].quoted.value, funding.nodes[0].quoted.uncertain) == (0.008, 0.0025)
    assert (funding.nodes[0].quoted.source, funding.nodes[0].quoted.as_of) == ("bond desk",
                                                                               "2026-12-01 16:00")
    lantern = market.assets["lantern"]
    assert (lantern.spot.value, lantern.spot.uncertain, str(lantern.spot.place)) == (801.1, 2,
                                                                                     "m.yaml:9:27")
    assert lantern.dividend_yield is None
    assert [(node.label, node.quoted.value) for node in lantern.forwards.nodes] == [("1y", 805),
                                                                                    ("2028-12-01", 810)]
    assert market.correlation["harbour", "lantern"].value == 0.65
    assert market.uncertainty["vol"].value == 0.015


def test_a_textbook_market():
    """`market: 0y` has no valuation date, takes tenors as times, and need not state an asset's currency."""
    market, faults = parsed("market: 0y\nrates: {EUR: {6m: 5%, 2y: 6%}}\nassets: {orchard: {spot: 100, "
                            "yield: 0%, vol: 25%}}\n")
    assert faults == []
    assert market.valuation is None
    assert [node.time for node in market.rates["EUR"].nodes] == [0.5, 2.0]
    assert market.assets["orchard"].currency == ""


@pytest.mark.parametrize("label", ["2027-12-01", "1w", "30d"])
def test_no_dates_in_textbook_markets(label: str):
    """A textbook market knows years and months only."""
    _, faults = parsed(f"market: 0y\nrates: {{EUR: {{{label}: 5%}}}}\n"
                       "assets: {orchard: {spot: 100, yield: 0%, vol: 25%}}\n")
    assert faults == [f"m.yaml:2:15: expected a tenor in years or months, found '{label}'; a textbook market "
                      "has no dates"]


def test_the_convention_of_rates():
    """Zero rates may be quoted with annual or simple compounding and another day count; without a word they are
    continuous and Actual/365 (Fixed)."""
    market, faults = parsed(WHOLE.replace("{1m: 2.0%, 1y: 2.1%, 2029-12-01: 2.35%}",
                                          "{zero_rates: {1m: 2.0%}, compounding: simple, day_count: Act/360}"))
    assert faults == []
    assert market.rates["EUR"].convention == RateConvention("simple", "Actual/360", date(2026, 12, 1))
    assert parsed(WHOLE)[0].rates["EUR"].convention == RateConvention()
    market, faults = parsed(WHOLE.replace("{1m: 2.0%, 1y: 2.1%, 2029-12-01: 2.35%}",
                                          "{zero_rates: {1m: 2.0%, 2y: 2.2%}, compounding: annual}"))
    assert faults == []  # no day count stated
    assert market.rates["EUR"].convention == RateConvention("annual", "Actual/365 (Fixed)", date(2026, 12, 1))
    assert log_curve(market.rates["EUR"]).factor(731 / 365) == pytest.approx(1.022 ** (-731 / 365), rel=1e-14)


@pytest.mark.parametrize(("day_count", "found"), [
    ("Actual/365 (Fixed)", []),
    ("30/360", ["m.yaml:2:69: expected Actual/365 (Fixed), found '30/360'; a textbook market has no dates"])])
def test_the_day_count_of_a_textbook_curve(day_count: str, found: list[str]):
    """Years are years there."""
    _, faults = parsed("market: 0y\nrates: {EUR: {zero_rates: {1y: 5%}, compounding: annual, "
                       f"day_count: {day_count}}}}}\n"
                       "assets: {orchard: {spot: 100, yield: 0%, vol: 25%}}\n")
    assert faults == found


@pytest.mark.parametrize(("written", "fault"), [
    ("{zero_rates: 2%, compounding: simple}",
     "4:21: expected simple rates by tenor or date, as '{3m: 2.0%}', found '2%'; a simple rate belongs to one tenor"),
    ("{zero_rates: 2%, compounding: annual, day_count: 30/360}",
     "4:21: expected rates by tenor or date with 30/360, found '2%'"),
    ("{zero_rates: 2%}", "4:8: 'compounding' is missing in the curve"),
    ("{zero_rates: 2%, compounding: monthly}",
     "4:38: expected a compounding: 'continuous', 'annual' or 'simple', found 'monthly'"),
    ("{zero_rates: {1y: 2%}, compounding: annual, day_count: Act/Act (ICMA)}",
     "4:63: expected a day count of curves, found 'Act/Act (ICMA)'; Actual/Actual (ICMA) needs coupon periods"),
    ("{1y: 2%, compounding: annual}",
     "4:17: 'compounding' stands beside the rates, not among them: '{zero_rates: {1y: 2.1%}, compounding: annual}'"),
    ("{zero_rates: {3y: -40%}, compounding: simple}",
     "4:26: a simple rate as low as this to '3y' leaves no discount factor above 0"),
])
def test_conventions_that_do_not_fit(written: str, fault: str):
    """Each has its fault at its place."""
    assert faults_of("{1m: 2.0%, 1y: 2.1%, 2029-12-01: 2.35%}", written) == [f"m.yaml:{fault}"]


SLIPS = [
    # a rate, vol or correlation without its unit
    ("2.1%", "2.1", "4:23: expected a percentage with its unit, found '2.1'; write '2.1%'"),
    ("vol: 22%", "vol: 0.22",
     "9:107: expected a percentage with its unit, found '0.22'; write '22%' or '0.22%'"),
    ("vol: 22%", "vol: 22", "9:107: expected a percentage with its unit, found '22'; write '22%'"),
    ("vol: 22%", "vol: 1800%",
     "9:107: expected a vol above 0% and up to 300%, found '1800%'; is the unit right?"),
    ("vol: 22%", "vol: 0%", "9:107: expected a vol above 0% and up to 300%, found '0%'"),
    ("vol: 22%", "vol: -5%", "9:107: expected a vol above 0% and up to 300%, found '-5%'"),
    ("{1m: 2.0%,", "{1m: 250%,", "4:13: expected a rate from -50% to 100%, found '250%'; is the unit right?"),
    ("yield: 2.4%", "yield: -90%",
     "8:49: expected a rate from -50% to 100%, found '-90%'; is the unit right?"),
    ("65%", "165%", "10:32: expected a correlation from -100% to 100%, found '165%'"),
    ("65%", "0.65", "10:32: expected a percentage with its unit, found '0.65'; write '65%' or '0.65%'"),
    ("10 bp", "-10 bp", "11:33: expected a half-width of 0 or more, found '-10 bp'"),
    ("uncertain: 2}", "uncertain: 2%}",
     "9:45: expected a half-width in the unit of the value, found '2%'"),
    ("uncertain: 25 bp", "uncertain: 25",
     "6:42: expected a percentage with its unit, found '25'; write '25%'"),
    # levels
    ("4180.2", "0", "8:19: expected an amount above 0, found '0'"),
    ("4180.2", "100%", "8:19: expected an amount of money, found '100%'; write it without a unit"),
    ("4180.2", "4_180.2", "8:19: expected a number, found '4_180.2'; write '4180.2'"),
    ("4180.2", ".inf", "8:19: expected a finite number, found '.inf'"),
    ("{1y: 805, 2028-12-01: 810}", "805",
     "9:74: expected forwards by tenor or date, as '{1y: 4260.5}', found '805'"),
    ("0.965", "-0.965", "5:32: expected a discount factor above 0 and up to 1.5, found '-0.965'"),
    ("0.965", "96.5", "5:32: expected a discount factor above 0 and up to 1.5, found '96.5'"),
    # curves
    ("1y: 2.1%", "1w: 2.1%", "4:19: '1w' is not later than '1m'; a curve goes forward in time"),
    ("1y: 2.1%", "1.3m: 2.1%", "4:19: expected a whole number of months or days, found '1.3m'"),
    ("1y: 2.1%", "1yr: 2.1%", "4:19: expected a tenor such as '2w', '3m' or '1y', found '1yr'"),
    ("1y: 2.1%", "9999y: 2.1%", "4:19: expected a tenor within the calendar's years, found '9999y'"),
    ("1m: 2.0%", "2026-12-01: 2.0%",
     "4:9: expected a date after the valuation date 2026-12-01, found '2026-12-01'"),
    ("1m: 2.0%", "2026-02-30: 2.0%", "4:9: expected a day of the calendar, found '2026-02-30'"),
    ("{3m: 17%, 1y: 18%, 3y: 19%}", "{1y: 18%, 3y: 10%}",
     "8:74: total variance falls from 0.0324 at '1y' to 0.0300274 at '3y'; a vol of 10.3876% is the least "
     "that '3y' can have"),
    ("{3m: 17%, 1y: 18%, 3y: 19%}", "{}",
     "8:60: expected a number, or numbers by tenor or date, found a mapping; the curve is empty"),
    ("{3m: 17%, 1y: 18%, 3y: 19%}", "{1y: {90%: 20%, 100%: 18%}}",
     "8:65: expected a vol, found a mapping; vols by strike go under '{strikes: {80%: {1y: 21%}, 100%: {1y: 18%}}, "
     "priced_at: 100%}'"),
    ("{value: 80 bp, uncertain: 25 bp, source: bond desk, as_of: 2026-12-01 16:00}",
     "{discount_factors: {1y: 0.9}}",
     "6:17: discount factors stand for rates only"),
    # names and keys
    ("2026-12-01\nsource", "1 December 2026\nsource",
     "1:9: expected the valuation date, or '0y' for textbook contracts, found '1 December 2026'"),
    ("  USD", "  usd", "5:3: expected a currency code of three capital letters, as 'EUR', found 'usd'"),
    ("correlation:", "corelation:",
     "10:1: 'corelation' is not a key of the market; did you mean 'correlation'?"),
    ("harbour/lantern", "harbour/latern",
     "10:15: 'latern' is no asset of the market; did you mean 'harbour/lantern'?"),
    ("harbour/lantern", "harbour/harbor", "10:15: 'harbor' is no asset of the market"),
    ("harbour/lantern", "harbour", "10:15: expected a pair of assets, as 'harbour/lantern', found 'harbour'"),
    ("harbour/lantern", "harbour/harbour", "10:15: expected two different assets, found 'harbour/harbour'"),
    ("65%}", "65%, lantern/harbour: 65%}",
     "10:37: the correlation of 'lantern' and 'harbour' is given twice"),
    ("yield: 2.4%, ", "",
     "8:12: 'yield', 'dividends' or 'forwards' is missing in the asset 'harbour'; write 'yield: 0%' for none"),
    ("yield: 2.4%, ", "yield: 2.4%, forwards: {1y: 4200}, ",
     "8:55: the asset 'harbour' has both 'yield' and 'forwards'; keep one"),
    ("4180.2, currency: EUR", "4180.2", "8:12: 'currency' is missing in the asset 'harbour'"),
    ("{vol: 1.5%", "{vols: 1.5%", "11:15: 'vols' is not a key of the uncertainty; did you mean 'vol'?"),
    # later versions
    ("source: closing prices", "borrow: {}",
     "2:1: 'borrow' is a key of a later version and is refused rather than ignored"),
    # what the level gives up
    ("yield: 2.4%, ", "dividends: [], ", "8:53: expected dividends by ex date, as '[{ex: 2027-05-03, cash: 4.0}, {ex: "
                                         "2028-05-02, share: 1.5%}]', found a list; there is none; write 'yield: 0%'"),
    ("yield: 2.4%, ", "dividends: [{ex: 2027-05-03}], ", "8:54: the dividend has neither 'cash' nor 'share'"),
    ("yield: 2.4%, ", "dividends: [{ex: 2027-05-03, cash: 4%}], ",
     "8:77: expected an amount of money, found '4%'; write it without a unit"),
    ("yield: 2.4%, ", "dividends: [{ex: 2027-05-03, share: 100%}], ",
     "8:78: expected a share above 0% and below 100%, found '100%'"),
    ("yield: 2.4%, ", "dividends: [{ex: 2027-05-03, cash: 4}, {ex: 2027-05-03, share: 1%}], ",
     "8:86: a second dividend on 2027-05-03; one may have both cash and share"),
    ("forwards: {", "dividends: [{ex: 2027-05-03, cash: 4}], forwards: {",
     "9:104: the asset 'lantern' has both 'dividends' and 'forwards'; keep one"),
    ("yield: 2.4%, ", "underlying: total return, yield: 2.4%, ",
     "8:68: 'yield' counts twice: the asset 'harbour' is a total-return index, whose level keeps its dividends"),
    ("yield: 2.4%, ", "decrement: 5%, ",
     "8:42: a decrement is taken from a total-return index; write 'underlying: total return' as well"),
    ("yield: 2.4%, ", "underlying: total return, decrement: 50, ",
     "8:79: expected a decrement a year, as '5%' or '50 points', found '50'"),
    ("yield: 2.4%, ", "yield: 2.4%, dividend_blend: {cash_until: 1y, share_from: 3y}, ",
     "8:55: a blend is for cash dividends, and the asset 'harbour' has none"),
    ("yield: 2.4%, ", "dividends: [{ex: 2027-05-03, cash: 4}], dividend_blend: {cash_until: 3y, share_from: 3y}, ",
     "8:127: expected a date or tenor after 'cash_until', found '3y'"),
    # rates of exchange
    ("yield: 2.4%, ", "yield: 2.4%, quanto: {fx_vol: 9%, fx_correlation: -20%}, ",
     "8:63: 'fx' is missing in the quanto"),
    ("yield: 2.4%, ", "yield: 2.4%, quanto: {fx_vol: 9%, fx_correlation: -20%, fx: GBP per USD}, ",
     "8:102: expected a rate of exchange with EUR, the asset's currency, found 'GBP per USD'"),
    ("source: closing prices", "fx: {EUR per USD: {spot: 0.9, vol: 8%}, USD per EUR: {spot: 1.1, vol: 8%}}",
     "2:41: 'USD per EUR' is 'EUR per USD' the other way round, which stands at m.yaml:2:6; keep one"),
    ("source: closing prices", "fx: {EUR/USD: {spot: 1.1, vol: 8%}}",
     "2:6: expected a rate of exchange as 'EUR per USD': units of the first for one of the second, found 'EUR/USD'"),
]


def test_what_a_level_gives_up():
    """Dividends stand in order of time with those of the past; a decrement is a share or points a year; a rate of
    exchange keeps its direction."""
    market, faults = parsed(WHOLE.replace("yield: 2.4%, ", "dividends: [{ex: 2028-05-02, share: 1.5%}, {ex: "
                                          "2026-12-01, cash: 4, share: 1%}], dividend_blend: {cash_until: 2026-06-01, "
                                          "share_from: 3y}, ")
                            .replace("forwards: {1y: 805, 2028-12-01: 810}",
                                     "underlying: total return, decrement: 50 points")
                            + "fx: {EUR per USD: {spot: 0.9, vol: 8%}}\n")
    assert faults == []
    harbour, lantern = market.assets["harbour"], market.assets["lantern"]
    assert [(one.time, one.label) for one in harbour.dividends] == [(0.0, "2026-12-01"), (518 / 365, "2028-05-02")]
    assert (harbour.dividends[0].cash.value, harbour.dividends[0].share.value) == (4, 0.01)
    assert harbour.dividends[1].cash is None
    assert (harbour.blend.cash_until, harbour.blend.share_from) == (-183 / 365, 1096 / 365)
    assert (lantern.total_return, lantern.decrement.points, lantern.decrement.quoted.value) == (True, True, 50)
    assert market.fx_between("USD", "EUR").per == ("EUR", "USD")
    assert market.fx_between("GBP", "EUR") is None


@pytest.mark.parametrize(("old", "new", "expected"), SLIPS, ids=[f"{new}" for _, new, _ in SLIPS])
def test_slips(old: str, new: str, expected: str):
    """One slip gives one fault, at its place, in words that say what was expected."""
    assert faults_of(old, new) == [f"m.yaml:{expected}"]


def test_all_faults_at_once():
    """Faults in several parts of a market are reported together."""
    _, faults = parsed(WHOLE.replace("2.1%", "2.1").replace("4180.2", "-1").replace("65%", "165%"))
    assert [fault.split(": ")[0] for fault in faults] == ["m.yaml:4:23", "m.yaml:8:19", "m.yaml:10:32"]


def test_the_least_vol_that_is_named_is_accepted():
    """The vol that the message offers makes total variance rise."""
    assert faults_of("{3m: 17%, 1y: 18%, 3y: 19%}", "{1y: 18%, 3y: 10.3876%}") == []
