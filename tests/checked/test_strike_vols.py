"""Vols by strike: what is read, what lies between, and what is refused at which place with which words."""

from __future__ import annotations

import pytest

from mcx.checked.market import Curve, Market
from mcx.checked.read_market import read_market
from mcx.checked.strike_vols import curve_at, strike_of
from mcx.text.documents import parse_documents

WHOLE = """\
market: 2026-12-01
rates: {EUR: 2.1%}
assets:
  quarry:
    spot: 62.5
    currency: EUR
    yield: 3%
    vol:
      strikes:
        60%: {1y: 34%, 2y: 33%}
        100%: {1y: {value: 27%, uncertain: 1%, source: desk}, 2y: 27.5%}
        120%: {1y: {value: 25%, uncertain: 2%, source: desk}, 2y: 26%}
      priced_at: 100%
"""


def parsed(text: str) -> tuple[Market, list[str]]:
    (document,), faults = parse_documents(text.encode(), "m.yaml")
    assert faults == []
    market, faults = read_market(document)
    return market, [str(fault).removeprefix("m.yaml:") for fault in sorted(faults)]


def faults_of(*changes: tuple[str, str]) -> list[str]:
    text = WHOLE
    for old, new in changes:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    return parsed(text)[1]


def values(curve: Curve) -> list[float]:
    return [node.quoted.value for node in curve.nodes]


def test_what_is_read():
    """Strikes are shares of the spot, each with its curve; the price takes that of one of them."""
    market, faults = parsed(WHOLE)
    assert faults == []
    quarry = market.assets["quarry"]
    assert quarry.by_strike.strikes == (0.6, 1.0, 1.2)
    assert quarry.by_strike.relative
    assert quarry.by_strike.priced_at == 1.0
    assert quarry.vol is quarry.by_strike.curves[1]
    assert strike_of(quarry, 75.0) == 1.2


def test_levels():
    """Without a percent sign strikes are levels of the asset, and `spot` is its spot."""
    text = WHOLE.replace("60%:", "40:").replace("      priced_at: 100%", "      priced_at: spot")
    market, faults = parsed(text.replace("100%:", "60.5:").replace("120%:", "75:"))
    assert faults == []
    vols = market.assets["quarry"].by_strike
    assert (vols.strikes, vols.relative, vols.priced_at) == ((40.0, 60.5, 75.0), False, 62.5)
    assert values(market.assets["quarry"].vol) == pytest.approx([0.27 - 0.02 * 2 / 14.5, 0.275 - 0.015 * 2 / 14.5])
    assert strike_of(market.assets["quarry"], 75.0) == 75.0


def test_between_and_beyond():
    """Linear between two strikes, with what was said of both numbers; flat beyond the last."""
    vols = parsed(WHOLE)[0].assets["quarry"].by_strike
    between = curve_at(vols, 1.1)
    assert values(between) == pytest.approx([0.26, 0.2675])
    assert (between.nodes[0].quoted.uncertain, between.nodes[0].quoted.source) == (pytest.approx(0.015), "desk")
    assert between.nodes[1].quoted.uncertain is None
    assert [node.label for node in between.nodes] == ["1y", "2y"]
    assert values(curve_at(vols, 0.3)) == [0.34, 0.33]
    assert values(curve_at(vols, 1.3)) == [0.25, 0.26]


def test_no_variance_falls_between_strikes():
    """Where total variance falls at no strike given it falls at none between."""
    text = WHOLE.replace("60%: {1y: 34%, 2y: 33%}", "60%: {1y: 34%, 2y: 24.1%}").replace(
        "2y: 27.5%", "2y: 19.1%")
    market, faults = parsed(text)
    assert faults == []
    for share in range(60, 121):
        short, long = values(curve_at(market.assets["quarry"].by_strike, share / 100))
        assert short**2 <= 2.0 * long**2


@pytest.mark.parametrize(("changes", "said"), [
    ([("60%:", "70:")], ["11:9: '100%' is in percent of the spot, the strikes before it are as a level; keep to one of "
                         "the two", "12:9: '120%' is in percent of the spot, the strikes before it are as a level; keep "
                         "to one of the two", "13:18: expected a strike as a level, as the strikes are, or 'spot', found "
                         "'100%'"]),
    ([("60%:", "0.6:")], ["10:9: expected a strike from 5% to 2000% of the spot, found '0.6'; is the unit right? The spot "
                          "is 62.5"]),
    ([("60%:", "6000%:")], ["10:9: expected a strike from 5% to 2000% of the spot, found '6000%'; is the unit right?"]),
    ([("60%:", "6000 bp:")], ["10:9: expected a strike as '80%' of the spot or as a level such as '51.5', found "
                              "'6000 bp'"]),
    ([("60%:", "low:")], ["10:9: expected a strike as '80%' of the spot or as a level such as '51.5', found 'low'"]),
    ([("60%:", "110%:")], ["11:9: '100%' is not above '110%'; strikes go upwards"]),
    ([("60%:", "100.0%:")], ["11:9: '100%' is not above '100.0%'; strikes go upwards"]),
    ([("{1y: 34%, 2y: 33%}", "{1y: 34%, 3y: 33%}")],
     ["11:15: the strike '100%' has '1y', '2y', the strike '60%' has '1y', '3y'; give each strike the same tenors",
      "12:15: the strike '120%' has '1y', '2y', the strike '60%' has '1y', '3y'; give each strike the same tenors"]),
    ([("{1y: 34%, 2y: 33%}", "34%")],
     ["11:15: the strike '100%' has '1y', '2y', the strike '60%' has one vol for all; give each strike the same tenors",
      "12:15: the strike '120%' has '1y', '2y', the strike '60%' has one vol for all; give each strike the same tenors"]),
    ([("2y: 33%", "2y: 20%")],
     ["10:28: total variance of the strike '60%' falls from 0.1156 at '1y' to 0.0801096 at '2y'; a vol of 24.0252% is the "
      "least that '2y' can have"]),
    ([("2y: 33%", "2y: 33")], ["10:28: expected a percentage with its unit, found '33'; write '33%'"]),
    ([("2y: 33%", "2y: 3300%")], ["10:28: expected a vol above 0% and up to 300%, found '3300%'; is the unit right?"]),
    ([("      priced_at: 100%\n", "")], ["9:7: 'priced_at' is missing in the vols"]),
    ([("priced_at: 100%", "priced_at: forward")],
     ["13:18: expected a strike as '80%' of the spot or as a level such as '51.5', found 'forward'"]),
    ([("priced_at: 100%", "priced_at: 62.5")],
     ["13:18: expected a strike in percent of the spot, as the strikes are, or 'spot', found '62.5'"]),
    ([("priced_at: 100%", "priced_at: {60%: 1}")],
     ["13:18: expected the strike whose vols price a contract, or 'spot', found a mapping"]),
    ([("priced_at: 100%", "priced_at: 100%\n      skew: 1%")], ["14:7: 'skew' is not a key of the vols; expected "
                                                              "'strikes' or 'priced_at'"]),
    ([("60%: {1y: 34%, 2y: 33%}\n", ""), ("        100%: {1y: {value: 27%, uncertain: 1%, source: desk}, 2y: 27.5%}\n", "")],
     ["10:17: expected vols at 2 strikes or more, as '{strikes: {80%: {1y: 21%}, 100%: {1y: 18%}}, priced_at: 100%}', "
      "found a mapping; with one strike give the vol alone"]),
    ([("spot: 62.5", "spot: -1"), ("2y: 33%", "2y: 20%"), ("priced_at: 100%", "priced_at: 1")],
     ["5:11: expected an amount above 0, found '-1'",
      "10:28: total variance of the strike '60%' falls from 0.1156 at '1y' to 0.0801096 at '2y'; a vol of 24.0252% is the "
      "least that '2y' can have",
      "13:18: expected a strike in percent of the spot, as the strikes are, or 'spot', found '1'"]),
])
def test_faults(changes, said):
    """All at once, each at its place."""
    found = faults_of(*changes)
    assert found == said


@pytest.mark.parametrize(("vol", "said"), [
    ("{strikes: {80%: 9%, 100%: 8%}, priced_at: spot}",
     "vols by strike are for assets; a rate of exchange has one vol for each tenor"),
    ("{1y: {90%: 9%, 100%: 8%}}", "vols by strike go under"),
])
def test_a_rate_of_exchange_has_no_strikes(vol, said):
    found = faults_of(("assets:\n", f"fx: {{EUR per USD: {{spot: 0.9, vol: {vol}}}}}\nassets:\n"))
    assert found
    assert all(said in each for each in found)
