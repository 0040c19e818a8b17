"""`mcx verify` through its doors: command line, Python, records; the footing step by step."""

from __future__ import annotations

import json
from math import log
from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED, mcx, refused, written

import mcx as package

PATHS = 4096
ASKED = ("--paths", PATHS, "--seed", SEED)
NOTE = EXAMPLES / "quoted_note.yaml"
KEYS = {"gap": dict, "bands": list, "verdict": str, "implied": list, "readings": list, "margin": dict}
SHARE = """---
payoff: share
about: The level by 100.
terms:
  expiry: {type: date}
events:
  - at: expiry
    pay: spot / 100
"""
QUOTE = """---
quote: Saltmarsh desk
at: 0y
side: mid
unit: per unit
price: 9.5
accrual: dirty
commitment: firm
"""


def quoted(tmp_path: Path, quote: str = QUOTE, market: str = MARKET, name: str = "case.yaml") -> Path:
    return written(tmp_path, CALL + market + quote, name)


def told(tmp_path: Path, **changes: str) -> str:
    """What is said of the quote with some lines changed or added."""
    lines = dict(line.split(": ", 1) for line in QUOTE.splitlines()[1:]) | changes
    text = "---\n" + "".join(f"{key}: {value}\n" for key, value in lines.items() if value)
    outcome = mcx("verify", quoted(tmp_path, text), *ASKED)
    refused(outcome)
    return outcome.err


def test_the_documented_keys():
    """Those of the JSON, each of its kind, with what each entry holds; Python says the same."""
    outcome = mcx("verify", NOTE, *ASKED, "--solve", "coupon", "--json")
    found = outcome.json
    assert all(isinstance(found[key], kind) for key, kind in KEYS.items())
    assert all({"name", "half_width", "holds"} <= each.keys() for each in found["bands"])
    assert all({"input", "asset", "value", "standard_error", "plausible"} <= each.keys() for each in found["implied"])
    assert all({"reading", "price", "standard_error", "closes_gap"} <= each.keys() for each in found["readings"])
    again = package.verify(NOTE, paths=PATHS, seed=SEED, solve="coupon").to_dict()
    assert again | {"seconds": 0} == found | {"seconds": 0}


def test_the_demo_is_explained_by_a_reading():
    """80 bp away, held by nothing that was stated, so exit code 1; read with another watch it is closed."""
    outcome = mcx("verify", NOTE, "--json")
    found = outcome.json
    assert outcome.code == 1 and found["explained"] is False
    assert found["gap"]["price"] == pytest.approx(-0.0080, abs=4 * found["gap"]["standard_error"])
    assert found["verdict"].startswith("Nothing that was stated holds the gap of -80")
    closing = {each["reading"] for each in found["readings"] if each["closes_gap"]}
    assert closing == {"knock-in at each close", "knock-in all the time"}
    assert found["leads"][0].startswith("Read otherwise it would be closed: knock-in at each close")


def test_the_page_in_the_readme_is_the_one_that_is_printed():
    """Line by line, in its order."""
    readme = (EXAMPLES.parents[1] / "README.md").read_text(encoding="utf-8")
    page = readme.split("verify payoffs/examples/quoted_note.yaml\n```\n\n```\n", 1)[1]
    shown = page.split("\n```", 1)[0].splitlines()
    printed = iter(mcx("verify", NOTE).out.splitlines())
    assert len(shown) > 15
    for line in shown:
        assert line == "…" or line in printed, line


def test_the_terminal_says_what_a_reader_needs():
    """The verdict first, every part of the page, within 80 columns."""
    outcome = mcx("verify", NOTE, *ASKED, "--solve", "coupon")
    assert (outcome.code, outcome.err) == (1, "")
    assert outcome.out.startswith("Nothing that was stated holds the gap")
    words = " ".join(outcome.out.split())
    for said in ("the quote on our footing", "half the bid-offer on top", "from quarry 62.2 to our spot",
                 "put back on the bid", "input band", "never the band", "each input alone", "smallest joint move",
                 "other readings", "bond floor", "day-one margin", "for each year of expected life",
                 "the coupon at which", "stated is 3 %; the price moves by",
                 "indicative: nobody has to deal", "no skew", "licensed professional"):
        assert said in words, said
    assert max(map(len, outcome.out.splitlines())) <= 80


def test_ranges_that_were_looked_through_are_no_moves(tmp_path: Path):
    """A knock-in may be anything above nothing: the range of it starts at 0."""
    text = " ".join(mcx("verify", NOTE, *ASKED, "--solve", "knock_in").out.split())
    assert "looked for from 0 % to 192 %" in text and "at the spots that the quote states" in text
    out = mcx("verify", quoted(tmp_path, QUOTE.replace("price: 9.5", "price: 900")), *ASKED).out
    assert [line.split() for line in out.splitlines() if line.endswith(" none")][:3] == [
        ["vol", "harbour", "none"], ["yield", "harbour", "none"], ["rates", "EUR", "none"]]
    text = " ".join(out.split())
    assert "- vol harbour: no move from -21.0 % to +40.0 % meets the quote" in text
    assert "no reference spot was said" in text and "at the spots that the quote states" not in text


def test_one_footing(tmp_path: Path):
    """Side, unit, accrued, spot and fees, in that order, each by hand; the spot's step by pricing at both spots."""
    head = "currency: EUR\nunits: 1"
    note = CALL.replace(head, "currency: EUR\nnotional: 1000").replace("payoff: european", "payoff: share")
    note = note.replace("{side: call, strike: 100, expiry: 1y}", "{expiry: 1y}")
    note += MARKET.replace("rates:", "funding: {EUR: 0 bp}\nrates:") + SHARE
    more = "side: ask\nbid_offer: 4\nfees: 1\nspot: 102\ndenomination: 200\naccrued: 3"
    quote = QUOTE.replace("side: mid", more).replace("per unit", "per denomination")
    quote = quote.replace("price: 9.5", "price: 210").replace("dirty", "clean")
    found = mcx("verify", written(tmp_path, note + quote), *ASKED, "--json").json
    by_step = [each["quote"] for each in found["footing"]]
    at = (written(tmp_path, note.replace("spot: 100,", f"spot: {spot},"), f"{spot}.yaml") for spot in (100, 102))
    here, there = (mcx("price", file, *ASKED, "--json").json["price"] for file in at)
    assert [each["step"] for each in found["footing"]] == ["side", "unit", "accrued coupon", "spot", "fees"]
    moved = (208 + 3) / 200 + here - there
    assert by_step == pytest.approx([208, 208 / 200, (208 + 3) / 200, moved, moved - 1 / 200], rel=1e-10)
    assert found["mid"] == pytest.approx(by_step[-1]) and found["ask"] - found["bid"] == pytest.approx(4 / 200)
    assert found["gap"]["price"] == pytest.approx(found["mid"] - found["price"], abs=1e-12)


def test_each_band_by_itself(tmp_path: Path):
    """What is not stated holds nothing; the tolerance alone holds the gap, and the exit code is 0."""
    market = MARKET + "uncertainty: {vol: 0.1%}\n"
    outcome = mcx("verify", quoted(tmp_path, QUOTE + "tolerance: 2\n", market), *ASKED, "--json")
    bands = {each["name"]: (each["half_width"], each["holds"]) for each in outcome.json["bands"]}
    assert outcome.code == 0 and outcome.json["explained"]
    assert bands["half the bid-offer"] == (None, None) and bands["tolerance"] == (2.0, True)
    assert bands["sampling error"][1] is False and bands["input band"][1] is False
    assert "inside the stated tolerance, outside the sampling error and the 90 % input band" in outcome.json["verdict"]
    assert any("no uncertainty is stated for yield of harbour" in each for each in outcome.json["warnings"])


def test_several_quotes_are_ranked(tmp_path: Path):
    """On one footing, the highest first, each with the funding it implies; 1 as soon as one is not held."""
    market = MARKET.replace("rates:", "funding: {EUR: 50 bp}\nrates:")
    one = QUOTE.replace("price: 9.5", "price: 10")
    other = one.replace("Saltmarsh", "Northgate").replace("side: mid", "side: two-way")
    other = other.replace("price: 10", "bid: 10.1\nask: 10.3")
    outcome = mcx("verify", quoted(tmp_path, one + other, market), "--paths", 1 << 19, "--json")
    found = outcome.json
    assert [(each["rank"], each["dealer"], each["mid"]) for each in found["ranking"]] == [
        (1, "Northgate desk", pytest.approx(10.2)), (2, "Saltmarsh desk", 10.0)]
    price = found["quotes"][0]["price"]
    for each in found["ranking"]:  # what is paid after a year is discounted with the spread
        assert each["funding"] == pytest.approx(0.005 - log(each["mid"] / price), abs=1e-6)
    assert outcome.code == 1
    assert "quotes on one footing, the highest first" in mcx("verify", quoted(tmp_path, one + other, market), *ASKED).out


def test_quotes_of_several_contracts_are_ranked_apart(tmp_path: Path):
    """One table for each contract, under its title."""
    two = CALL + "---\n" + CALL.replace("contract: Call", "contract: Put").replace("side: call", "side: put") + MARKET
    out = mcx("verify", written(tmp_path, two + QUOTE + "for: Put\n" + QUOTE + "for: Call\n"), *ASKED).out
    tables = [out.index(f"quotes of {title} on one footing") for title in ("Put", "Call")]
    assert tables == sorted(tables)


def test_the_target_of_a_note_has_a_unit():
    """12.5 would be 1,250 % of the notional."""
    refused(mcx("verify", NOTE, *ASKED, "--solve", "coupon", "--target", "12.5"), "write the target in % or bp")


BEGUN = """\
contract: Harbour knock-out
payoff: barrier
currency: EUR
units: 1
assets: [harbour]
start: 2026-03-02
settlement: 2 business days
calendar: {holidays: ECB, roll: following}
terms:
  side: call
  direction: down
  knock: out
  strike: 100
  barrier: 80
  watched: {continuous: [2026-03-02, expiry]}
  expiry: 2026-12-11
happened: {touched: {2026-12-01: false}}
---
market: 2026-12-01
assets:
  harbour: {spot: 104, currency: EUR, yield: 0%, vol: 20%}
rates: {EUR: 2%}
---
quote: Saltmarsh desk
at: 2026-12-01
side: mid
unit: per unit
price: 4.4
issue_price: 8
accrual: dirty
commitment: firm
"""


def test_a_contract_that_has_begun(tmp_path: Path):
    """What an issue price holds beyond today's value was not charged on the first day; a reading that watches on dates
    does not choke on what was stated of the watch, but asks for the fixings that it needs."""
    out = mcx("verify", written(tmp_path, BEGUN), *ASKED).out
    assert "issue price less our price (it has begun)" in out and "day-one margin" not in out
    found = mcx("verify", written(tmp_path, BEGUN), *ASKED, "--json").json
    readings = {each["reading"]: each for each in found["readings"]}
    assert readings["barrier at expiry"]["price"] is not None
    assert "needs a fixing of 'harbour' on 2026-03-02" in readings["barrier at each close"]["note"]


def test_interrupted_between_quotes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """The verdict that is whole, who is left without one, and no record."""
    from mcx.estimators import verify

    file = quoted(tmp_path, QUOTE + QUOTE.replace("Saltmarsh", "Northgate"))
    whole = verify.Bench.verify

    def pressed_at_another(bench, quote, *wish):
        if quote.who == "Northgate desk":
            raise KeyboardInterrupt
        return whole(bench, quote, *wish)

    monkeypatch.setattr(verify.Bench, "verify", pressed_at_another)
    outcome = mcx("verify", file, *ASKED, "--record", tmp_path / "r.json")
    assert outcome.code == 130 and not (tmp_path / "r.json").exists()
    assert outcome.out.rstrip().endswith("\ninterrupted: without a verdict are Northgate desk on Call")
    found = mcx("verify", file, *ASKED, "--json").json
    assert (found["not_verified"], len(found["quotes"])) == (["Northgate desk on Call"], 1)


def test_a_record_reproduces(tmp_path: Path):
    """Everything is in it, and comes out again to the last bit; a changed number is told by its name."""
    from mcx.report import record as records

    file = tmp_path / "quote.json"
    assert mcx("verify", NOTE, *ASKED, "--solve", "coupon", "--target", "99%", "--record", file).code == 1
    found = mcx("replay", file, "--json")
    assert found.code == 0 and found.json["identical"] and found.json["largest_difference"] == 0.0
    stored = json.loads(file.read_text(encoding="utf-8"))
    assert stored["verb"] == "verify"
    assert (stored["request"][0]["solve"], stored["request"][0]["target"]) == ("coupon", 0.99)
    stored.pop("sha256")
    stored["results"][0]["implied"][0]["value"] += 1e-9
    file.write_text(json.dumps({**stored, "sha256": records._checksum(stored)}), encoding="utf-8")
    changed = mcx("replay", file, "--json")
    assert changed.code == 1 and changed.json["first_difference"].endswith("implied[vol quarry].value")


@pytest.mark.parametrize(("changes", "said"), [
    ({"side": "offer"}, "expected a side: 'bid', 'ask', 'mid' or 'two-way', found 'offer'"),
    ({"side": "two-way"}, "'bid' is missing in the quote: a two-way quote has a bid and an ask"),
    ({"side": "two-way", "price": "", "bid": "10", "ask": "9"}, "the bid is above the ask"),
    ({"unit": "percent of notional"}, "expected the unit of the price: 'per unit' or 'cash', found 'percent of"),
    ({"price": "95%"}, "expected an amount of money, found '95%'"),
    ({"price": ""}, "'price' is missing in the quote"),
    ({"accrual": "clean"}, "'accrued' is missing in the quote"),
    ({"accrued": "1"}, "'accrued' does not go with a dirty price"),
    ({"at": "2026-12-01 16:30"}, "expected '0y', as the market is of time 0"),
    ({"at": "yesterday"}, "expected a date and time such as '2026-12-01 16:30'"),
    ({"at": "2026-02-30"}, "expected a day of the calendar"),
    ({"fees": "1"}, "'fees' does not go with a mid"),
    ({"spot": "{harbor: 101}"}, "'harbor' is not a key of the reference spots; did you mean 'harbour'?"),
    ({"denomination": "1000"}, "'denomination' does not go with the unit 'per unit'"),
    ({"tolerance": "-1"}, "expected a number of 0 or more, found '-1'"),
    ({"for": "Cal"}, "no contract has the title 'Cal'; did you mean 'Call'?"),
    ({"commitment": ""}, "'commitment' is missing in the quote"),
    ({"colour": "blue"}, "'colour' is not a key of the quote"),
])
def test_wrong_quotes(tmp_path: Path, changes: dict, said: str):
    """Each fault with its place, and what was expected."""
    err = told(tmp_path, **changes)
    assert said in err
    assert "case.yaml:" in err


@pytest.mark.parametrize(("options", "said"), [
    (("--solve", "strik"), "states no numeric term 'strik'; did you mean 'strike'?"),
    (("--target", "9"), "name the term with 'solve'"),
    (("--solve", "strike", "--target", "much"), "'target' is a price such as '99.5%'"),
    (("--solve", "strike", "--target", "9%"), "'Call' has no notional to take a share of"),
    (("--paths", "4095"), "at least 4,096 paths"),
])
def test_wrong_requests(tmp_path: Path, options: tuple, said: str):
    refused(mcx("verify", quoted(tmp_path), "--paths", PATHS, *options), said)


def test_no_quote(tmp_path: Path):
    """What is missing, and how it begins."""
    refused(mcx("verify", written(tmp_path, CALL + MARKET)), "no quote in", "'quote: DEALER'")


def test_a_quote_for_one_of_several_contracts(tmp_path: Path):
    """The title says which; without it all is asked at once."""
    two = CALL + "---\n" + CALL.replace("contract: Call", "contract: Put").replace("side: call", "side: put") + MARKET
    refused(mcx("verify", written(tmp_path, two + QUOTE), *ASKED), "the files hold 2 contracts; say which one")
    found = mcx("verify", written(tmp_path, two + QUOTE + "for: Put\n"), *ASKED, "--json").json
    assert found["contract"] == "Put"
