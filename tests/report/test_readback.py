"""Readbacks: what the sentences and tables say is what the contract says."""

from __future__ import annotations

import re
from functools import cache
from math import exp, log, sqrt
from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, written

import mcx as package
from mcx.report.results import Readback

NOTE = EXAMPLES / "harbour_lantern.yaml"
ALL = sorted(EXAMPLES.glob("*.yaml"))


@cache
def readbacks(example: Path) -> tuple[Readback, ...]:
    found = package.readback(example)
    return getattr(found, "readbacks", (found,))


def read(tmp_path: Path, payoff: str, terms: str = "{level: 100, expiry: 1y}", market: str = MARKET) -> Readback:
    """The readback of a textbook contract on a definition of its own."""
    contract = CALL.replace("european", "own").replace("{side: call, strike: 100, expiry: 1y}", terms)
    own = f"---\npayoff: own\nabout: made for this test\n{payoff}"
    return package.readback(written(tmp_path, contract + own + market))


def test_terms_as_the_contract_writes_them():
    """Every term, in the definition's order, with its words."""
    (found,) = readbacks(NOTE)
    terms = {term.name: term for term in found.terms}
    assert " ".join(terms) == ("initial observations first_call call_barrier coupon_barrier coupon memory knock_in "
                               "watched strike")
    assert terms["initial"].value == "harbour 4210.5, lantern 812.4"
    assert terms["observations"].value == "every 3 months: 12 dates from 2027-02-16 to 2029-11-16"
    assert terms["call_barrier"].value.startswith("100 %; 100 %; 100 %; 95 %;")
    assert (terms["memory"].value, terms["coupon"].value, terms["first_call"].value) == ("true", "1.9 %", "2027-11-16")
    assert terms["knock_in"].about == "knocked in when the worst asset is below this level"


def test_facts():
    """Currency, size, assets, start, day count, settlement, calendar."""
    (found,) = readbacks(NOTE)
    facts = {fact.name: fact.text for fact in found.facts}
    assert facts["notional"] == "1,000,000 EUR; amounts are multiples of it"
    assert facts["assets"] == "harbour and lantern" and facts["day count"] == "30/360"
    assert facts["settlement"].startswith("2 business days after the date")
    assert re.fullmatch(r"ECB, modified following \(holidays .*\)", facts["calendar"])


def test_events_in_plain_sentences():
    """Signs are words, choices are decided, and what an end does to each event is said."""
    (found,) = readbacks(NOTE)
    events = {event.name: event for event in found.events}
    coupon = events["coupon paid"]
    assert coupon.text == (
        "On each of 12 dates of observations (2027-02-16 to 2029-11-16), if performance is at or above coupon_barrier "
        "(70 %): pays (coupon + missed) times the notional as 'coupon', due 2 business days later; missed becomes 0. "
        "Otherwise: missed becomes missed + coupon.")  # memory is decided
    assert coupon.ends_here == ("It still happens on a date on which 'called' ends the contract.",)
    assert "of observations from first_call on (2027-11-16 to 2029-11-16)" in events["called"].text
    assert events["called"].text.endswith("the contract ends: nothing later is observed or newly owed, what is already "
                                          "owed is still paid.")
    assert found.events[2].name == "redemption"  # has no name of its own
    assert events["knocked in"].ends_here == (
        "It no longer happens on a date on which 'called' has ended the contract.",)


def test_events_without_a_name_are_headed_by_what_they_do():
    """By their legs, else by the values that they set."""
    (found,) = readbacks(EXAMPLES / "range_accrual.yaml")
    assert [event.name for event in found.events] == [
        "days_inside and days_seen set", "coupon", "days_inside and days_seen set", "redemption"]


def test_every_date_is_in_the_table():
    """Each event once on each of its dates, with that date's numbers and the day it is paid."""
    (found,) = readbacks(NOTE)
    rows = [(line.date, line.nth, line.terms, line.paid) for line in found.dates if line.what == "called"]
    assert rows[0] == ("2027-11-16", 4, "call_barrier 95 %", "2027-11-18")
    assert rows[-1] == ("2029-11-16", 12, "call_barrier 90 %", "2029-11-20") and len(rows) == 9
    assert [line.date for line in found.dates] == sorted(line.date for line in found.dates)


@pytest.mark.parametrize("example", ALL, ids=lambda path: path.stem)
def test_dates_in_order_and_every_payment_has_its_day(example: Path):
    """For every shipped example: dates do not go back, nothing is paid before it is decided, watches have a law."""
    for found in readbacks(example):
        def time(date: str) -> float:
            return float(date[:-1]) if date.endswith("y") else float(date.replace("-", ""))

        times = [time(line.date) for line in found.dates]
        assert times == sorted(times)
        assert all(time(paid) >= time(line.date) for line in found.dates for paid in line.paid.split(", ") if paid)
        assert {watch.law for watch in found.watches} <= {"exact", "unread", "bracketed"}
        assert all(event.text.endswith(".") and "None" not in event.text for event in found.events)


def test_market_on_the_dates(tmp_path: Path):
    """Forward, vol to date and both discount factors by their closed forms (flat rates, yields, vols)."""
    text = CALL + MARKET.replace("assets:", "funding: {EUR: 80 bp}\nassets:")
    (line,) = [line for line in package.readback(written(tmp_path, text)).market if line.date == "1y"]
    assert line.discount_factor == pytest.approx(exp(-0.04), rel=1e-14)
    assert line.funded_discount_factor == pytest.approx(exp(-0.048), rel=1e-14)
    (asset,) = line.assets
    assert (asset.asset, asset.vol) == ("harbour", pytest.approx(0.22, rel=1e-12))
    assert asset.forward == pytest.approx(100 * exp(0.04 - 0.015), rel=1e-14)


def test_quotes_of_the_market(tmp_path: Path):
    """Spots with their currency, correlations as stated, the funding spread or that there is none."""
    quotes = {quote.name: quote.text for quote in readbacks(NOTE)[0].quotes}
    assert quotes == {"spot of harbour": "4,180.2 EUR", "spot of lantern": "801.1 EUR",
                      "correlation harbour/lantern": "65 %", "issuer's funding spread": "80 bp"}
    found = package.readback(written(tmp_path, CALL + MARKET)).quotes
    assert found[-1].text == "not stated: none is taken"
    curve = MARKET.replace("assets:", "funding: {EUR: {1y: 80 bp, 3y: 0.95%}}\nassets:")
    assert package.readback(written(tmp_path, CALL + curve)).quotes[-1].text == "1y 80 bp, 3y 95 bp"
    composite = package.readback(EXAMPLES / "dividends_and_currencies.yaml").readbacks[1]
    assert any(quote.name == "spot of EUR per CHF" for quote in composite.quotes)


def test_vol_term_structure_on_the_dates(tmp_path: Path):
    """Black vols at the nodes are those of the market; between them total variance is linear."""
    market = MARKET.replace("vol: 22%", "vol: {6m: 20%, 1y: 30%}")
    contract = CALL.replace("payoff: european", "payoff: asian").replace(
        "{side: call, strike: 100, expiry: 1y}",
        "{side: call, average_type: arithmetic, strike_type: fixed, strike: 100, "
        "averaging: {count: 4, until: 1y}, expiry: 1y}")
    vols = {line.date: line.assets[0].vol for line in package.readback(written(tmp_path, contract + market)).market}
    between = sqrt((0.2**2 * 0.5 + (0.3**2 - 0.2**2 * 0.5) / 2) / 0.75)
    assert vols == {"0.25y": pytest.approx(0.2), "0.5y": pytest.approx(0.2), "0.75y": pytest.approx(between),
                    "1y": pytest.approx(0.3)}
    assert log(vols["1y"]) == pytest.approx(log(0.3))


def test_without_a_market(tmp_path: Path):
    """Everything but the market's numbers."""
    found = package.readback(written(tmp_path, CALL))
    assert found.market == found.quotes == () and found.path is None and found.events


@pytest.mark.parametrize(("formula", "words"), [
    ("1 if spot > level else 0", "1 if spot is above level (100), else 0"),
    ("1 if spot <= level else 0", "1 if spot is at or below level (100), else 0"),
    ("1 if not spot < level else 0", "1 if spot is at or above level (100), else 0"),
    ("1 if not (spot < level and spot > 3) else 0", "1 if not (spot is below level (100) and spot is above 3), else 0"),
    ("1 if spot == level or spot != 5 else 0", "1 if spot equals level (100) or spot does not equal 5, else 0"),
    ("spot - (level - 1)", "spot - (level - 1)"), ("spot - level - 1", "spot - level - 1"),
    ("(spot - level) * 2", "(spot - level) * 2"), ("spot / (level * 2)", "spot / (level * 2)"),
    ("(spot / level) ** 2", "(spot / level) ** 2"), ("-(spot + level)", "-(spot + level)"),
    ("max(spot - level, 0)", "max(spot - level, 0)"), ("abs(spot) * 1e-7", "abs(spot) * 1e-07"),
])
def test_formulas_in_words(formula: str, words: str, tmp_path: Path):
    """Comparisons are spelled out with the term's number, brackets stay where they decide."""
    terms = "terms: {level: {type: number}, expiry: {type: date}}"
    payoff = f"{terms}\nevents:\n  - at: expiry\n    pay: {formula}\n"
    (event,) = read(tmp_path, payoff).events
    assert event.text == f"On expiry (1y): pays {words} for each unit, due the same day."


@pytest.mark.parametrize(("running", "words"), [
    ("average: spot", "the average of spot, so far, on 0.25y, 0.5y, 0.75y and 1y (see 'dates')"),
    ("total: spot", "the sum of spot, so far,"), ("total: 1", "1 for each date, so far,"),
    ("total: spot > 90", "how often spot is above 90, so far,"), ("lowest: spot", "the lowest spot, so far,"),
    ("highest: spot", "the highest spot, so far,"), ("ever: spot < 90", "true once spot is below 90, observed on 0.25y,"),
    ("always: spot >= 90", "true as long as spot is at or above 90, observed on 0.25y,"),
    ("latest: spot", "the latest spot, so far,"),
    ("product: spot / 100", "the product of spot / 100, so far,"),
])
def test_running_values_in_words(running: str, words: str, tmp_path: Path):
    """How they run, over what, and when."""
    kind = "1 if value else 0" if running.split(":")[0] in ("ever", "always") else "value"
    payoff = ("terms: {dates: {type: dates}}\nrunning:\n  value: {" + running + ", at: dates}\n"
              f"events:\n  - at: dates.last\n    pay: {kind}\n")
    found = read(tmp_path, payoff, "{dates: {count: 4, until: 1y}}")
    assert found.running[0].text.startswith(words)


def test_what_the_terms_rule_out_is_left_away():
    """A plain barrier contract does not speak of the other direction; an event that cannot happen says so."""
    rebates = {found.events[0].text.partition("Otherwise: ")[2] for found in readbacks(EXAMPLES / "barrier.yaml")}
    assert rebates == {"pays nothing.", "pays rebate for each unit as 'rebate', due the same day."}
    for found in readbacks(EXAMPLES / "barrier.yaml"):
        text = " ".join((*(event.text for event in found.events), *(each.text for each in found.running)))
        terms = {term.name: term.value for term in found.terms}
        assert "direction" not in text and "side" not in text
        assert ("at or below" in text) == (terms["direction"] == "down")


@pytest.mark.parametrize(("kind", "words"), [
    ("knocked", "On expiry (1y), if spot is below level (100): pays 1 for each unit, due the same day."),
    ("always", "On expiry (1y): pays 1 for each unit, due the same day."),
    ("never", "Never in this contract: its terms rule the condition out."),
])
def test_decided_parts_of_conditions_are_left_away(kind: str, words: str, tmp_path: Path):
    """What a choice decides of an 'and' or an 'or' is not said; what it rules out altogether is."""
    payoff = ("terms:\n  level: {type: number}\n  kind: {type: choice, of: [knocked, always, never]}\n"
              "  expiry: {type: date}\nevents:\n  - at: expiry\n    if: kind != 'never' and (kind == 'always' or spot < level)\n"
              "    then:\n      - pay: 1\n")
    (event,) = read(tmp_path, payoff, f"{{level: 100, kind: {kind}, expiry: 1y}}").events
    assert event.text == words


def test_watches_that_are_refused_are_said(tmp_path: Path):
    """A continuous watch on two assets: refused, with the place of the definition, where `price` refuses it too."""
    payoff = ("assets: 2\nterms: {level: {type: number}, watched: {type: watch}, expiry: {type: date}}\nrunning:\n"
              "  hit: {ever: worst(spot) < level, at: watched}\n"
              "events:\n  - at: expiry\n    pay: 0 if hit else 1\n")
    contract = CALL.replace("european", "own").replace("[harbour]", "[harbour, lantern]").replace(
        "{side: call, strike: 100, expiry: 1y}", "{level: 80, watched: {continuous: [0y, 1y]}, expiry: 1y}")
    market = MARKET + ("  lantern: {spot: 100, currency: EUR, yield: 0%, vol: 30%}\n"
                       "correlation: {harbour/lantern: 50%}\n")
    file = written(tmp_path, f"{contract}---\npayoff: own\nabout: made for this test\n{payoff}{market}")
    (watch,) = package.readback(file).watches
    assert watch.law == "refused" and str(file) in watch.reason
    with pytest.raises(package.InputError):
        package.price(file, paths=64)
