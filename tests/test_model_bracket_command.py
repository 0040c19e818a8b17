"""The model bracket through the doors: `mcx price` and `mcx verify`, their text, their JSON, their records."""

from __future__ import annotations

import json
import re
from functools import cache
from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED, mcx, written

EXAMPLE = EXAMPLES / "vols_by_strike.yaml"
ASKED = ("--paths", 16384, "--seed", SEED)
NOTE, AUTOCALL = 0, 1
VOLS = "{strikes: {80%: 28%, 100%: 22%, 120%: 19%}, priced_at: spot}"
CLIQUET = """contract: Four returns
currency: EUR
units: 1
assets: [harbour]
payoff: forward_start
terms: {side: call, pays: money, strike: 100%, strike_date: 6m, expiry: 1y}
"""
QUOTE = """---
quote: Saltmarsh desk
at: 0y
side: mid
unit: per unit
price: %s
accrual: dirty
commitment: firm
"""


@cache
def priced() -> list[dict]:
    """The two contracts of the example."""
    outcome = mcx("price", EXAMPLE, *ASKED, "--json")
    assert outcome.code == 0
    return outcome.json["prices"]


def test_the_bracket_in_json():
    """Ends about the headline price, every level with its strike and vol, the headline's strike named."""
    note = priced()[NOTE]
    bracket = note["model_bracket"]
    prices = [one["price"] for one in bracket["strikes"]]
    spread = [*prices, *(price for one in bracket["strikes"] for price in one["skewed"]), *bracket["strip"]]
    assert (bracket["lower"], bracket["upper"]) == (min(spread), max(spread))
    assert bracket["upper"] == note["price"]  # priced at the strike of the redemption
    assert [one["assets"][0]["strike"] for one in bracket["strikes"]] == ["65% of the spot", "100% of the spot"]
    assert [(each["asset"], each["strike"]) for each in bracket["headline"]] == [("quarry", "100% of the spot")]
    assert (bracket["exact"], bracket["indicative"]) == (True, [])
    assert bracket["strikes"][0]["difference_standard_error"] > 0.0 == bracket["strikes"][1]["difference_standard_error"]
    assert bracket["paths"] == 16384


def test_an_autocall_is_indicative():
    """It may end early and looks at two assets; its knock-in stands at a strike given for one of them, and beyond the
    strikes given for none."""
    bracket = priced()[AUTOCALL]["model_bracket"]
    assert not bracket["exact"]
    assert bracket["strip"] == []
    assert len(bracket["indicative"]) == 3
    for words, said in zip(("sells another", "ends early", "several assets"), bracket["indicative"], strict=True):
        assert words in said
    knock_in = bracket["strikes"][0]
    assert [each["level"] for each in knock_in["assets"]] == [37.41, 2508.12]
    assert knock_in["skewed"][1] - knock_in["skewed"][0] > 0.005  # two slopes of vol
    assert [each["strike"] for each in bracket["headline"]] == ["100% of the spot", "4180.2"]


@pytest.mark.parametrize(("contract", "said"), [
    (CALL, ("100 (100% of the spot)", "every payment depends on one level of one date")),
    (CALL.replace("strike: 100", "strike: 130"),
     ("130 (130% of the spot, beyond the", "and beyond them, where they are taken as flat")),
    (CLIQUET, ("of one to come", "indicative only", "that is no certainty", "live on forward vol and forward skew")),
])
def test_the_text(tmp_path, contract, said):
    """The bracket is a heading of its own; the headline's strike and what the model cannot do are said."""
    file = written(tmp_path, contract + MARKET.replace("vol: 22%", f"vol: {VOLS}"))
    text = " ".join(mcx("price", file, *ASKED).out.split())
    for words in ("model bracket (apart from sampling and inputs)", "the headline takes the 22.00 % of harbour at 100% "
                  "of the spot", "one vol for each asset and tenor cannot do better", "vols are linear in strike between "
                  "the strikes given, flat below 80% of the spot and above 120% of the spot", *said):
        assert words in text


def test_no_word_of_it_without_vols_by_strike(tmp_path):
    outcome = mcx("price", written(tmp_path, CALL + MARKET), *ASKED)
    assert "model bracket" not in outcome.out
    assert mcx("price", written(tmp_path, CALL + MARKET), *ASKED, "--json").json["model_bracket"] is None


def test_a_butterfly_is_warned_of(tmp_path):
    vols = "{strikes: {80%: 20%, 100%: 60%, 120%: 20%}, priced_at: spot}"
    found = mcx("price", written(tmp_path, CALL + MARKET.replace("vol: 22%", f"vol: {vols}")), *ASKED, "--json").json
    assert any("fit no law of its level" in text for text in found["warnings"])


SPREAD = """payoff: spread
about: A put at 100 less one at 80.
terms:
  end: {type: date}
events:
  - at: end
    pay: max(100 - spot, 0) - max(80 - spot, 0)
---
contract: Spread
currency: EUR
units: 1
assets: [harbour]
payoff: spread
terms: {end: 1y}
"""


BY_THE_HEADLINE = " by the headline's vol."
MEAN = SPREAD.replace("(100 - spot", "(100 - closes").replace("(80 - spot", "(80 - closes").replace(
    "events:", "running:\n  closes:\n    average: spot\n    at: fixings\nevents:").replace(
    "terms:\n", "terms:\n  fixings: {type: dates}\n").replace("{end: 1y}", "{end: 1y, fixings: [6m, 1y]}")


@pytest.mark.parametrize(("price", "holds"), [(5.7, True), (6.9, False), (4.6, False)])
def test_the_verdict(tmp_path, price, holds):
    """A quote inside the bracket is explained by it alone, one outside is not; on neither side of the price is the
    bracket as wide."""
    file = written(tmp_path, MEAN + MARKET.replace("vol: 22%", f"vol: {VOLS}") + QUOTE % price)
    found = mcx("verify", file, *ASKED, "--json").json
    bracket, band = found["model_bracket"], found["bands"][-1]
    assert band["name"] == "model bracket"
    assert band["holds"] is holds is found["explained"]
    assert (bracket["lower"] <= price <= bracket["upper"]) is holds
    end = bracket["upper"] if price > found["compared"] else bracket["lower"]
    assert band["half_width"] == pytest.approx(abs(end - found["compared"]), abs=1e-12)
    assert ("inside the model bracket, outside the sampling error" in found["verdict"]) is holds
    assert any("Explained by the model bracket alone" in lead for lead in found["leads"]) is holds
    assert found["gap"]["rest"] is None
    assert any("sells another" in one for one in bracket["indicative"])
    text = mcx("verify", file, *ASKED).out
    assert "model bracket (apart from sampling and inputs)" in text


@pytest.mark.parametrize(("price", "more", "code", "said"), [
    (4.71, "", 0, "is left; it is inside the sampling error."),
    (5.00, "bid_offer: 1\n", 0, "is left; it is inside half the bid-offer, outside the sampling error."),
    (5.30, "", 1, "is left, and nothing that was stated holds it: it is outside the sampling error."),  # in the bracket
    (5.96, "", 1, "is left, and nothing that was stated holds it: it is outside the sampling error."),  # the headline
    (3.90, "tolerance: 0.5\n", 1, "it is outside the sampling error and the stated tolerance."),
])
def test_a_price_without_a_model_is_what_a_quote_is_held_against(tmp_path, price, more, code, said):
    """Where each strike at its own vol is the price, a quote that only the wrong ends of the bracket or the headline
    reach is not explained."""
    file = written(tmp_path, SPREAD + MARKET.replace("vol: 22%", f"vol: {VOLS}") + QUOTE % price + more)
    outcome = mcx("verify", file, *ASKED, "--json")
    found, bracket = outcome.json, outcome.json["model_bracket"]
    assert bracket["exact"] and bracket["lower"] < price < bracket["upper"] or price == 3.90
    rest = price - bracket["strip"][0]
    assert found["gap"]["rest"] == pytest.approx(rest, abs=1e-12)
    assert (outcome.code, found["explained"]) == (code, code == 0)
    assert found["verdict"].startswith("With each strike at its own vol ")
    assert found["verdict"].endswith(said)
    for band in found["bands"][:-1]:
        assert band["holds"] == (None if band["half_width"] is None else abs(rest) <= band["half_width"])
    assert found["bands"][-1]["holds"] is (code == 0)
    assert found["bands"][-1]["half_width"] == pytest.approx(found["compared"] - bracket["strip"][0], abs=1e-12)
    page = tmp_path / "page.html"
    text = " ".join(mcx("verify", file, *ASKED, "--report", page).out.split())
    for words in ("left of it", "Left of the gap: "):
        assert words in page.read_text(), words
    z = rest / found["gap"]["standard_error"]
    for words in ("left of it", "what may hold what is left of the gap", f"what is left is z = {z:+.1f}"):
        assert words in text, words
    assert re.search(r"model bracket [0-9.]+ taken off", text)


def test_ranked_by_the_middle_and_held_by_what_is_left(tmp_path):
    """Of two quotes the one next to the headline is not held, the one that the strikes price is."""
    other = (QUOTE % 4.71).replace("Saltmarsh", "Northgate")
    market = SPREAD + MARKET.replace("vol: 22%", f"vol: {VOLS}")
    file = written(tmp_path, market + QUOTE % 5.96 + other)
    found = mcx("verify", file, *ASKED, "--json").json
    assert [(each["dealer"], each["explained"]) for each in found["ranking"]] == [
        ("Saltmarsh desk", False), ("Northgate desk", True)]
    assert [each["rest"] for each in found["ranking"]] == [each["gap"]["rest"] for each in found["quotes"]]
    heads, first = mcx("verify", file, *ASKED).out.splitlines()[2:4]
    assert heads.split() == ["dealer", "bid", "middle", "ask", "gap", "left", "held", "implied", "funding"]
    assert f"{found['ranking'][0]['rest']:.4f}" in first
    plain = mcx("verify", written(tmp_path, market.replace(VOLS, "22%") + QUOTE % 5.96 + other), *ASKED).out
    assert "gap" in plain.splitlines()[2] and "left" not in plain.splitlines()[2] and "taken off" not in plain


@pytest.mark.parametrize(("price", "width", "reaches"), [(4.90, "3%", True), (4.60, "3%", True), (5.30, "0.1%", False)])
def test_the_worst_corner_goes_where_the_gap_that_is_left_goes(tmp_path, price, width, reaches):
    """Below the headline a quote may lie above what each strike at its own vol says."""
    doubt = f"uncertainty: {{yield: {width}}}\n"
    file = written(tmp_path, SPREAD + MARKET.replace("vol: 22%", f"vol: {VOLS}") + doubt + QUOTE % price)
    found = mcx("verify", file, *ASKED, "--json").json
    rest, corner = found["gap"]["rest"], found["worst_corner"]
    assert found["gap"]["price"] < 0.0
    assert (corner["price"] - found["compared"]) * rest > 0.0
    assert corner["reaches"] is reaches is (abs(corner["price"] - found["compared"]) >= abs(rest))
    said = "reaches" if reaches else "does not reach"
    text = " ".join(mcx("verify", file, *ASKED).out.split())
    assert f"which {said} as far as what is left of the gap; never the band" in text
    alone = [each["plausible"] for each in found["implied"]]
    assert (f"inside its stated uncertainty{BY_THE_HEADLINE}" in text) is (True not in alone)


def test_a_fixed_rate_of_exchange_is_only_indicative(tmp_path):
    text = CALL.replace("assets: [harbour]", "assets: [harbour]\nconversion: {harbour: quanto}")
    quanto = f"quanto: {{fx_vol: 9%, fx_correlation: -20%, fx: EUR per USD}}, vol: {VOLS}"
    market = MARKET.replace("vol: 22%", quanto).replace("rates: {", "rates: {USD: 4%, ")
    file = written(tmp_path, text + market.replace("currency: EUR, yield", "currency: USD, yield"))
    bracket = mcx("price", file, *ASKED, "--json").json["model_bracket"]
    assert not bracket["exact"]
    assert [one for one in bracket["indicative"] if "harbour goes under skew with a rate of exchange" in one
            and "keeps the forward of the headline" in one]


@pytest.mark.parametrize("verb", ["price", "greeks", "verify", "methods"])
def test_every_verb_names_the_strike_whose_vols_it_takes(tmp_path, verb):
    file = written(tmp_path, CALL + MARKET.replace("vol: 22%", f"vol: {VOLS}") + QUOTE % 9.5)
    assumed = mcx(verb, file, "--paths", 4096, "--json").json["assumptions"]
    assert any("the vols of harbour at 100% of the spot, as its market says, and so do sensitivities" in one
               for one in assumed)


def test_assets_priced_alike_are_named_together(tmp_path):
    """One sentence for strikes that are the same, another for strikes that are not."""
    text = EXAMPLE.read_text(encoding="utf-8").replace("        2500:", "        60%:").replace(
        "        3300:", "        80%:").replace("        4200:", "        100%:").replace("        5000:", "        120%:")

    def said(text: str) -> list[str]:
        prices = mcx("price", written(tmp_path, text), *ASKED, "--json").json["prices"]
        return [one for one in prices[AUTOCALL]["assumptions"] if one.startswith("the price takes the vols of ")]

    both, = said(text)
    assert both.startswith("the price takes the vols of quarry and harbour at 100% of the spot, as their market says")
    apart = said(EXAMPLE.read_text(encoding="utf-8"))
    assert [one.split(" at ")[0].split(" of ")[1] for one in apart] == ["quarry", "harbour"]


def test_a_market_to_fill_in_says_how_vols_by_strike_are_written():
    text = mcx("payoffs", "european", "--blank", "--assets", "harbour").out
    assert "strikes: {80%: {1y: 21%}, 100%: {1y: 18%}}, priced_at: 100%" in text


def test_the_bracket_stands_at_the_spot_of_the_quote(tmp_path):
    """A strike in percent goes along with it, so the level is another strike there."""
    quote = QUOTE % 5.3 + "spot: 110\n"
    file = written(tmp_path, CALL + MARKET.replace("vol: 22%", f"vol: {VOLS}") + quote)
    found = mcx("verify", file, *ASKED, "--json").json
    (one,) = found["model_bracket"]["strikes"]
    assert one["assets"][0]["strike"] == "90.9091% of the spot"
    assert one["assets"][0]["vol"] == pytest.approx(0.22 + 0.06 * (100 - 1000 / 11) / 20)
    assert found["model_bracket"]["headline"][0]["vol"] == pytest.approx(0.22)


def test_an_implied_vol_moves_all_strikes(tmp_path):
    """It is found as for one vol: the whole of the curve that prices the contract moves."""
    file = written(tmp_path, CALL + MARKET.replace("vol: 22%", f"vol: {VOLS}") + QUOTE % 10.5)
    plain = written(tmp_path, CALL + MARKET + QUOTE % 10.5, "plain.yaml")
    one, other = (next(each for each in mcx("verify", each, *ASKED, "--json").json["implied"] if each["input"] == "vol")
                  for each in (file, plain))
    assert one["value"] == other["value"] != 0.22


@pytest.mark.parametrize("verb", ["price", "verify"])
def test_records_reproduce(tmp_path: Path, verb: str):
    """With the bracket in them; a record whose bracket was another would show."""
    record = tmp_path / "record.json"
    assert mcx(verb, EXAMPLE, *ASKED, "--record", record).code == 0
    stored = json.loads(record.read_text())
    assert stored["results"][0]["model_bracket"]["strikes"]
    found = mcx("replay", record, "--json")
    assert (found.code, found.json["identical"], found.json["largest_difference"]) == (0, True, 0.0)


@pytest.mark.parametrize("command", [("greeks", "--grid"), ("readback",),
                                     ("methods", "--paths", 4096)])
def test_every_verb_takes_such_a_market(command):
    """Sensitivities, ladders and methods are those of the headline's vols."""
    verb, *rest = command
    outcome = mcx(verb, EXAMPLE, *rest, *(ASKED if verb == "greeks" else ()), "--json")
    assert (outcome.code, outcome.err) == (0, "")


def test_no_reading_closes_what_is_closed():
    """A gap of one vol that a reading with one vol would close is not open where each strike at its own vol leaves
    nothing of it."""
    found = mcx("verify", EXAMPLE, "--paths", 65536, "--seed", 1, "--json").json
    assert abs(found["gap"]["rest"]) < 2.0 * found["gap"]["standard_error"] < 0.1 * abs(found["gap"]["price"])
    left = {each["reading"]: each for each in found["readings"]}["knock-in at each close"]
    assert abs(left["left"]) < 4.0 * found["gap"]["standard_error"]
    assert not any(each["closes_gap"] for each in found["readings"])


def test_what_is_not_in_the_model_fits_what_the_bracket_says():
    """Of a contract that a strip decides nothing is left open by vols by strike; of another it is."""
    strip, path = (each["limits"] for each in mcx("price", EXAMPLE, *ASKED, "--json").json["prices"])
    assert any("the strip" in each for each in strip) and not any("neither more paths" in each for each in strip)
    assert any("neither more paths" in each for each in path)


@pytest.mark.parametrize(("strike", "outside"), [(100, False), (90, False), (85, True)])
def test_a_headline_outside_its_bracket_is_said(tmp_path, strike, outside):
    """Priced at 100 % of the spot, where a call refers to one other level with another vol, the headline is no price of
    the bracket."""
    vols = "{strikes: {90%: 22%, 100%: 22%, 120%: 22%}, priced_at: 100%}" if strike == 90 else VOLS.replace("spot", "100%")
    call = CALL.replace("strike: 100", f"strike: {strike}")
    file = written(tmp_path, call + MARKET.replace("vol: 22%", f"vol: {vols}"))
    assert mcx("price", file, *ASKED, "--json").json["model_bracket"]["headline_outside"] is outside
    text = " ".join(mcx("price", file, *ASKED).out.split())
    assert ("which is no level of the contract, and lies outside" in text) is outside
