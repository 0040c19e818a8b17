"""What is owed, accrues and is delivered: interest by every rule, clean and dirty, shares and their fractions."""

from __future__ import annotations

from math import exp, floor, log, sqrt
from pathlib import Path

import pytest
from front_door import mcx, written
from helpers import check, prepare
from scipy.special import ndtr
from seasoned import LEVELS, SEED, WORST_OF, faults, fixings, market

import mcx as package

COUPONS = """contract: rc
currency: EUR
notional: 500000
DENOMassets: [harbour]
start: 2026-12-01
day_count: 30/360
settlement: 5 business days
calendar: {holidays: none, roll: following}
payoff: NAME
terms: {initial: 100, strike: 100%, coupon: 12%, coupon_dates: {from: 2027-03-01, until: 2027-12-01, every: 3 months},
        final: 2027-11-24, maturity: coupon_dates.last}
---
market: TODAY
rates: {EUR: 2%}
funding: {EUR: 1%}
assets: {harbour: {spot: 92, currency: EUR, yield: 1%, vol: 20%}}
"""


def test_clean_and_dirty(tmp_path: Path):
    """14 days of a period of 90, by 30/360; on a coupon date it is owed, and nothing accrues."""
    text = COUPONS.replace("NAME", "reverse_convertible").replace("DENOM", "")
    result = package.price(written(tmp_path, text.replace("TODAY", "2027-06-15")), paths=256)
    assert result.accrued == pytest.approx(0.12 * 14 / 360, rel=1e-14)
    assert result.clean == result.price - result.accrued
    assert "accrued; the value above is dirty" in mcx("price", tmp_path / "case.yaml", "--paths", 256).out
    today = package.price(written(tmp_path, text.replace("TODAY", "2027-06-01")), paths=256)
    assert (today.accrued, [(each.leg, each.amount) for each in today.owed]) == (0.0, [("coupon", 0.03)])


def accrued(folder: Path, today: str, start: str, rule: str, count: str, roll: str = "following") -> float:
    """Interest of a rate of 12 % that has accrued in a contract from `start` with coupons by a rule."""
    text = COUPONS.replace("NAME", "reverse_convertible").replace("DENOM", "").replace("TODAY", today)
    text = text.replace("30/360", count).replace("start: 2026-12-01", f"start: {start}").replace(
        "roll: following", f"roll: {roll}")
    text = text.replace("{from: 2027-03-01, until: 2027-12-01, every: 3 months}", rule)
    text = text.replace("final: 2027-11-24", "final: coupon_dates.last")
    return package.price(written(folder, text), paths=64).accrued


@pytest.mark.parametrize(("today", "start", "rule", "part"), [
    # 2003-11-01 to 2004-05-01 are 182 days whatever rolls: 2003-11-01 is a Saturday, 2004-05-01 too
    ("2004-02-10", "2003-05-01", "{from: 2003-11-01, until: 2004-11-01, every: 6 months}", 0.5 * 101 / 182),
    ("2003-11-03", "2003-05-01", "{from: 2003-11-01, until: 2004-11-01, every: 6 months}", 0.5 * 2 / 182),
    ("2004-05-02", "2003-05-01", "{from: 2003-11-01, until: 2004-11-01, every: 6 months}", 0.5),
    # a short first period of an annual coupon, and a long first one of a coupon every six months
    ("1999-05-01", "1999-02-01", "{from: 1999-07-01, until: 2000-07-01, every: 1 year}", 89 / 365),
    ("2003-03-01", "2002-08-15", "{from: 2003-07-15, until: 2004-01-15, every: 6 months}",
     0.5 * (153 / 184 + 45 / 181)),
])
def test_interest_accrues_by_regular_periods(tmp_path: Path, today: str, start: str, rule: str, part: float):
    """Actual/Actual (ICMA), Rule 251: days over those of the regular period. The periods are those of the examples of
    ISDA (1998), EMU and Market Conventions: Recent Developments (from memory), the days counted by hand."""
    assert accrued(tmp_path, today, start, rule, "Actual/Actual (ICMA)") == pytest.approx(0.12 * part, rel=1e-14)


def test_no_interest_before_the_first_day_of_a_period(tmp_path: Path):
    """2003-11-01 is a Saturday and rolls back to the Friday: on that day the new period has not begun, by the rule."""
    rule = "{from: 2003-11-01, until: 2004-11-01, every: 6 months}"
    assert accrued(tmp_path, "2003-10-31", "2003-05-01", rule, "Actual/Actual (ICMA)", roll="preceding") == 0.0


def test_interest_on_a_part_of_a_rule(tmp_path: Path):
    """Coupons on all dates of a rule but its first: 101 of the 182 days from 2003-11-01, the second of them."""
    text = COUPONS.replace("DENOM", "").replace("TODAY", "2004-02-10").replace("30/360", "Actual/Actual (ICMA)")
    head = text[:text.index("payoff:")].replace("start: 2026-12-01", "start: 2003-05-01")
    own = ("payoff: part\nterms: {listed: {type: dates}, paid: {type: dates}}\nevents:\n"
           "  - {at: paid, pay: 12% * period, part: coupon}\n---\n")
    terms = ("payoff: part\nterms: {listed: {from: 2003-05-01, until: 2004-11-01, every: 6 months}, "
             "paid: listed.but_first}\n")
    result = package.price(written(tmp_path, own + head + terms + text[text.index("---"):]), paths=64)
    assert result.accrued == pytest.approx(0.12 * 0.5 * 101 / 182, rel=1e-14)


def test_interest_of_the_last_period_keeps_the_end_of_february(tmp_path: Path):
    """30E/360 (ISDA): 178 of 178 days on the termination date, and 152 of them a month before the end of it."""
    rule = "[2006-08-31, 2007-02-28]"
    found = [accrued(tmp_path, today, "2006-02-28", rule, "30E/360 (ISDA)") for today in ("2006-12-15", "2007-02-02")]
    assert found == pytest.approx([0.12 * 105 / 360, 0.12 * 152 / 360], rel=1e-14)


@pytest.mark.parametrize(("change", "said"), [
    (("day_count: 30/360\n", ""), "the contract states no day count"),
    (("30/360", "Actual/Actual (ICMA)"), "the coupon dates follow no rule of months")])
def test_interest_by_calendar_days_is_said(tmp_path: Path, change: tuple[str, str], said: str):
    """Where nothing else can count: 61 of the 92 days from 2027-06-01 to 2027-09-01."""
    text = ("payoff: fixed\nterms: {seen: {type: dates}}\nevents:\n  - {at: seen, pay: 3%, part: coupon}\n---\n"
            + COUPONS.replace("DENOM", "").replace("TODAY", "2027-08-01").replace("NAME", "fixed").replace(*change))
    start, end = text.index("terms: {initial"), text.index("---\nmarket")
    text = text[:start] + "terms: {seen: [2027-06-01, 2027-09-01, 2027-11-01]}\n" + text[end:]
    result = package.price(written(tmp_path, text), paths=64)
    assert result.accrued == pytest.approx(0.03 * 61 / 92, rel=1e-14)
    (why,) = (each for each in result.assumptions if each.startswith("interest accrues by calendar days: "))
    assert said in why


def test_a_conditional_coupon_does_not_accrue(tmp_path: Path):
    """Only what is paid whatever happens is interest."""
    assert package.price(written(tmp_path, WORST_OF + market() + fixings(LEVELS)), paths=64).accrued == 0.0


def shares_to_come(spot: float, lot: float, time: float, later: float) -> float:
    """Undiscounted worth of whole shares at delivery and their fraction in cash, below the strike; in shares of the
    notional: of each note of `lot` struck at 100."""
    number = 1 / 100
    whole = floor(number * lot + 1e-12) / lot
    forward = spot * exp(0.01 * time)
    d2 = (log(forward / 100) - 0.02 * time) / (0.2 * sqrt(time))
    level = forward * ndtr(-d2 - 0.2 * sqrt(time))
    return level * (whole * exp(0.01 * (later - time)) + number - whole)


@pytest.mark.parametrize("lot", [1000, 250, 20])
def test_shares_are_worth_their_level_on_the_delivery_date(lot: int):
    """Whole shares at their forward to the delivery, the fraction at the level of the last observation."""
    text = COUPONS.replace("NAME", "share_reverse_convertible").replace("DENOM", f"denomination: {lot}\n")
    found = prepare(text.replace("TODAY", "2026-12-01")).estimates(1 << 17, SEED)["leg: shares"]
    time, later = 358 / 365, 1.0
    check(found, exp(-0.03 * later) * shares_to_come(92.0, lot, time, later), sharp=0.01)


def test_a_delivery_that_is_certain(tmp_path: Path):
    """Between the last observation and the delivery: so many whole shares, worth today's forward, and cash."""
    text = COUPONS.replace("NAME", "share_reverse_convertible").replace("DENOM", "denomination: 250\n").replace(
        "TODAY", "2027-11-26") + "fixings: {harbour: {2027-11-24: 90}}\n"
    result = package.price(written(tmp_path, text), paths=1 << 14)
    leg = next(each for each in result.legs if each.name == "shares")
    later = 5 / 365
    truth = (2 * 92 * exp(0.01 * later) + 0.5 * 90) / 250 * exp(-0.03 * later)
    assert abs(leg.price - truth) < 4 * leg.standard_error
    assert any("owed on 2027-12-01: 2 shares of harbour for each note" in each for each in result.assumptions)


def test_whole_numbers_of_shares_survive_rounding(tmp_path: Path):
    """784 over 80 % of 98 are ten shares, though 1 / (80 % * 98) * 784 is a little less in floating point."""
    assert 1 / (0.8 * 98) * 784 < 10
    text = COUPONS.replace("notional: 500000", "notional: 784000").replace("NAME", "share_reverse_convertible")
    text = text.replace("DENOM", "denomination: 784\n").replace("TODAY", "2027-11-26").replace(
        "initial: 100, strike: 100%", "initial: 98, strike: 80%")
    result = package.price(written(tmp_path, text + "fixings: {harbour: {2027-11-24: 70}}\n"), paths=64)
    assert "owed on 2027-12-01: 10 shares of harbour for each note" in result.assumptions


def test_a_number_of_shares_that_is_still_to_come(tmp_path: Path):
    """The result says that fractions are then delivered as well; once the initial level is fixed they are cash."""
    text = COUPONS.replace("NAME", "share_reverse_convertible").replace("DENOM", "denomination: 250\n").replace(
        "initial: 100", "initial: {average: [2026-12-01, 2026-12-02]}")
    fixed = "fixings: {harbour: {2026-12-01: 98, 2026-12-02: 102}}\n"
    said = ("how many shares 'shares' delivers is not fixed yet: fractions are taken to be delivered as well, not paid "
            "in cash")
    before = package.price(written(tmp_path, text.replace("TODAY", "2026-12-01")), paths=1 << 14)
    assert said in before.assumptions
    after = package.price(written(tmp_path, text.replace("TODAY", "2026-12-03") + fixed), paths=256)
    assert not any("how many shares" in each for each in after.assumptions)


def test_delivery_asks_for_the_size_of_a_note(tmp_path: Path):
    """Without it nobody knows how many shares are whole; where nothing is delivered it says nothing."""
    text = COUPONS.replace("TODAY", "2026-12-01")
    assert "'denomination' is missing in the contract" in faults(
        tmp_path, text.replace("NAME", "share_reverse_convertible").replace("DENOM", ""))[0]
    assert "delivers no shares; leave out 'denomination'" in faults(
        tmp_path, text.replace("NAME", "reverse_convertible").replace("DENOM", "denomination: 1000\n"))[0]
