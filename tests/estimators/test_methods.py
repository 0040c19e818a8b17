"""Which estimators are valid, and what is said where one is not."""

from __future__ import annotations

from math import hypot

import pytest

from greek_tools import by_name, found, ready
from helpers import document
from mcx.estimators.methods import methods
from mcx.faults import Refusal

PATHS, SEED = 1 << 14, 0xCA62C1D6D192E819
ONE = """---
market: 0y
rates: {EUR: 4%}
funding: {EUR: 0 bp}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
"""
TWO = ONE + """  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
correlation: {harbour/lantern: 40%}
"""
MONTHLY = "{count: 12, until: 1y}"
DIGITAL = document("digital", side="call", pays="cash", amount=1, strike=100, expiry="1y")
BARRIER = document("barrier", side="put", direction="down", knock="in", strike=100, barrier=85,
                   watched=MONTHLY, expiry="1y")
AUTOCALL = document("autocall", size="notional: 1", initial=100, observations="{count: 4, until: 2y}",
                    first_call="0.5y", call_barrier="100%", coupon_barrier="80%", coupon="3%", memory="true",
                    knock_in="60%",
                    watched="observations.last", strike="100%")
ASIAN = document("asian", side="call", average_type="arithmetic", strike_type="fixed", strike=100, averaging=MONTHLY,
                 expiry="1y")
LOOKBACK = document("lookback", side="call", strike_type="floating", watched="{continuous: [0y, 1y]}", expiry="1y")
MADE = """payoff: made
about: Whatever a test asks for.
assets: 1
terms:
  beginning: {{type: date}}
  watched:   {{type: watch}}
  expiry:    {{type: date}}
running:
  first: {{average: spot, at: beginning}}
  low:   {{lowest: spot, at: watched}}
events:
  - at: expiry
    if: {condition}
    then:
      - pay: {amount}
---
"""


def made(condition: str, amount: str) -> str:
    terms = {"beginning": "0y", "watched": "{continuous: [0y, 1y]}", "expiry": "1y"}
    return MADE.format(condition=condition, amount=amount) + document("made", **terms) + ONE


@pytest.mark.parametrize(("text", "place"), [
    (DIGITAL, r"digital\.yaml:\d+:18 \(condition\)"), (BARRIER, r"barrier\.yaml:\d+:"),
    (AUTOCALL, r"autocall\.yaml:\d+:15")])
def test_pathwise_is_refused_where_the_payoff_jumps(text: str, place: str):
    """With the line of the condition that makes it jump."""
    with pytest.raises(Refusal, match=f"no pathwise estimate, since the payoff jumps at .*{place}"):
        found(text + ONE, PATHS, SEED, estimator="pathwise")


@pytest.mark.parametrize("text", [ASIAN, LOOKBACK, document("european", side="put", strike=100, expiry="1y")])
def test_pathwise_is_taken_where_nothing_jumps(text: str):
    """An average and an extreme have kinks, no jumps."""
    run = found(text + ONE, PATHS, SEED, estimator="pathwise")
    assert not run.jumps and not run.refused
    assert {value.estimator for value in run.values if value.what.name == "delta"} == {"pathwise"}


def test_auto_says_what_it_chose_and_why():
    """The chosen estimator by name, and how much worse the other one was in the pilot."""
    run = found(ASIAN + ONE, PATHS, SEED)
    said = "delta of harbour: pathwise; variance times cost in the pilot: "
    assert any(choice.startswith(said) for choice in run.choices)
    again = found(ASIAN + ONE, PATHS, SEED)
    assert run.choices == again.choices and by_name(run.values) == by_name(again.values), "one seed, one answer"


def test_no_density_no_likelihood_ratio():
    """Two assets that move as one: a smooth payoff is taken pathwise, a jumping one not at all, with the reason."""
    tied = TWO.replace("40%", "100%")
    smooth = document("exchange_option", "[harbour, lantern]", receive="harbour", give="lantern", receive_units=1,
                      give_units=1, expiry="1y")
    run = found(smooth + tied, PATHS, SEED)
    assert ("delta", "harbour", "") in by_name(run.values)
    reasons = {what.name: reason for what, reason in run.refused}
    assert "no randomness of its own" in reasons["gamma"] and "singular" in reasons["correlation"]
    with pytest.raises(Refusal, match="no likelihood ratio, since lantern has no randomness of its own"):
        found(smooth + tied, PATHS, SEED, estimator="likelihood")
    jumping = document("autocall", "[harbour, lantern]", size="notional: 1", initial="{harbour: 100, lantern: 95}",
                       observations="{count: 2, until: 1y}", first_call="0.5y", call_barrier="100%",
                       coupon_barrier="80%", coupon="3%", memory="true", knock_in="60%", watched="observations.last",
                       strike="100%")
    none = found(jumping + tied, PATHS, SEED)
    assert {value.what.name for value in none.values} == {"theta"}
    assert all("the payoff jumps, and lantern has no randomness of its own" in reason for what, reason in none.refused
               if what.name != "correlation")


def test_today_compared_with_later():
    """Struck at today's level: the spot moves both sides, and no estimator of a delta holds; vega is given."""
    run = found(made("spot > first", "1"), PATHS, SEED)
    reasons = {what.name: reason for what, reason in run.refused}
    assert "today's level is compared with a later one" in reasons["delta"]
    assert "today's level" in reasons["gamma"]
    assert ("vega", "harbour", "") in by_name(run.values)


@pytest.mark.parametrize(("condition", "amount"), [("low < 85", "120 - low"), ("low < 85", "max(spot - low, 0)")])
def test_a_crossing_and_the_extreme_itself(condition: str, amount: str):
    """An extreme that is compared and read: the law of the extreme, with its edge at the spot. No gamma."""
    run = found(made(condition, amount), 1 << 18, SEED, bump=0.01)
    values, bumped = by_name(run.values), by_name(run.comparison)
    for key in (("delta", "harbour", ""), ("vega", "harbour", ""), ("rho", "EUR", "")):
        assert abs(values[key].mean - bumped[key].mean) < 4 * hypot(values[key].error, bumped[key].error), key
        assert values[key].error < 0.05 * abs(values[key].mean)
    assert any("no finite variance" in reason for _, reason in run.refused)


def test_a_barrier_at_nothing_is_never_crossed():
    """A knock-in at 0 %, watched all the time, leaves every number finite; what it guards is worth nothing."""
    terms = {"side": "put", "direction": "down", "strike": 100, "watched": "{continuous: [0y, 1y]}", "expiry": "1y"}
    texts = (document("barrier", knock="out", barrier=1e-9, **terms),
             document("european", side="put", strike=100, expiry="1y"))
    out, european = (by_name(found(text + ONE, PATHS, SEED, estimator="likelihood").values) for text in texts)
    for key in (("delta", "harbour", ""), ("vega", "harbour", ""), ("gamma", "harbour", "")):
        assert abs(out[key].mean - european[key].mean) < 4 * hypot(out[key].error, european[key].error), key
    nothing = found(made("low < 0", "1"), PATHS, SEED)
    assert all(value.estimate.value == 0.0 for value in nothing.values)


def test_a_near_first_date_is_told():
    """The error of a likelihood ratio's delta grows as the first step shrinks, and the output says so."""
    terms = {"side": "call", "pays": "cash", "amount": 1, "strike": 100}
    far, near = (found(document("digital", **terms, expiry=expiry) + ONE, PATHS, SEED)
                 for expiry in ("1y", "0.01y"))
    errors = [by_name(run.values)["delta", "harbour", ""].error for run in (far, near)]
    assert errors[1] > 5 * errors[0], "by the root of 100, nearly"
    assert any("only 3.65 days away" in note for note in near.notes) and not far.notes


def test_mixed_shares_out_the_payments():
    """Payments without a jump are taken pathwise, the others by likelihood ratio; with none of the one, or none of the
    other, there is nothing to mix."""
    two = made("spot > 110", "1").replace("---", "  - at: expiry\n    pay: max(spot - 100, 0)\n---", 1)
    for text, asked, expected in (
        (two, "auto", ["mixed", "likelihood ratio"]), (two, "mixed", ["mixed"]),
        (DIGITAL + ONE, "auto", ["likelihood ratio"]), (DIGITAL + ONE, "mixed", ["likelihood ratio"]),
        (ASIAN + ONE, "mixed", ["pathwise"]), (ASIAN + ONE, "auto", ["pathwise", "likelihood ratio"]),
    ):
        run, market = ready(text)
        assert [method.name for method in methods(run, market, asked).valid] == expected
