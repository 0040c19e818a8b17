"""From files to a request: which documents there are, what they say of each other, and all faults at once."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.checked.library import Definitions, shipped, shipped_names, shipped_text
from mcx.checked.load import NO_FUNDING, Request, checked_request, load, request
from mcx.checked.payoff import MULTIPLES
from mcx.checked.read_payoff import read_payoff
from mcx.dates.dating import date_contract
from mcx.faults import InputError
from mcx.text.documents import parse_documents

EXAMPLES = sorted((Path(__file__).parents[2] / "payoffs" / "examples").glob("*.yaml"))
EXAMPLE_TEXTS = [file.read_text(encoding="utf-8") for file in EXAMPLES]
CONTRACT = """\
contract: Worst-of put
currency: EUR
notional: 2000000
assets: [harbour, quarry, orchard]
start: 2026-12-01
settlement: 2 business days
calendar: {holidays: ECB, roll: modified following}
payoff: rainbow_option
terms:
  side: put
  which: worst
  initial: 100
  strike: 90%
  expiry: 2027-12-01
"""
MARKET = """\
market: 2026-12-01
rates: {EUR: 2.1%}
funding: {EUR: 0 bp}
assets:
  harbour: {spot: 100, currency: EUR, yield: 2.4%, vol: 18%}
  quarry: {spot: 100, currency: EUR, yield: 3.1%, vol: 27%}
  orchard: {spot: 100, currency: EUR, yield: 1.2%, vol: 24%}
correlation: {harbour/quarry: 60%, harbour/orchard: 65%, quarry/orchard: 55%}
"""
OPTION = """\
contract: Call
currency: EUR
units: 1
assets: [harbour]
payoff: european
terms: {side: call, strike: 100, expiry: 1y}
"""
TEXTBOOK = """\
market: 0y
rates: {EUR: 5%}
assets: {harbour: {spot: 100, yield: 0%, vol: 25%}}
"""


def made(*texts: str) -> tuple[Request, list[str]]:
    """The request of several files, a.yaml, b.yaml and so on, and its faults."""
    documents, faults = [], []
    for name, text in zip("abcdef", texts, strict=False):
        found, wrong = parse_documents(text.encode(), f"{name}.yaml")
        documents += found
        faults += wrong
    asked, faults = checked_request(documents, faults)
    return asked, [str(fault) for fault in faults]


@pytest.mark.parametrize("file", EXAMPLES, ids=lambda file: file.stem)
def test_examples_load_and_have_dates(file: Path):
    """Every shipped example is free of faults, dates included."""
    asked = load([file])
    assert asked.contracts
    for contract in asked.contracts:
        dated, faults = date_contract(contract, asked.market.valuation)
        assert faults == []
        assert dated.moments


def test_every_shipped_definition_has_an_example():
    """The library and its examples go together."""
    used = {contract.payoff.name for file in EXAMPLES for contract in load([file]).contracts}
    assert used == set(shipped_names())


def test_the_example_of_the_reference():
    """What the grammar's reference shows as a definition of one's own is one, with a contract that has its dates."""
    reference = (EXAMPLES[0].parents[1] / "README.md").read_text(encoding="utf-8")
    example = reference.split("## 2. Write your own definition")[1].split("```yaml\n")[1].split("```")[0]
    asked, faults = made(example, MARKET)
    assert faults == []
    dated, faults = date_contract(asked.contracts[0], asked.market.valuation)
    assert faults == [] and len(dated.moments) == 4


@pytest.mark.parametrize("name", shipped_names())
def test_files_are_named_after_their_definitions(name: str):
    """A shipped definition is found by the name of its file."""
    assert Definitions()[name].body.get("payoff").text == name


def test_files_in_any_order(tmp_path: Path):
    """Contracts keep the order of the files; where the market and the definitions stand does not matter."""
    for name, text in (("c", CONTRACT), ("m", MARKET), ("p", shipped_text("rainbow_option"))):
        (tmp_path / f"{name}.yaml").write_text(text)
    one, other = ([tmp_path / f"{name}.yaml" for name in names] for names in ("cm", "mpc"))
    assert load(one).contracts[0].terms == load(other).contracts[0].terms
    assert [document.body.get("payoff").text for document in load(one).payoffs] == ["rainbow_option"]
    assert load(one).market == load(other).market


def test_no_market_is_no_fault():
    """A readback needs no market; what needs one asks for it."""
    asked, faults = made(CONTRACT)
    assert faults == []
    assert asked.market is None


def test_all_faults_of_all_documents_are_raised_at_once(tmp_path: Path):
    """`load` raises the faults of contract, market, files and everything between them, in order of place."""
    (tmp_path / "c.yaml").write_text(CONTRACT.replace("side: put", "side: pot"))
    (tmp_path / "m.yaml").write_text(MARKET.replace("18%", "18"))
    files = [str(tmp_path / name) for name in ("c.yaml", "m.yaml", "missing.yaml")]
    with pytest.raises(InputError) as error:
        load(files)
    assert [str(fault.place) for fault in error.value.faults] == [
        f"{files[0]}:10:9", f"{files[1]}:5:57", f"{files[2]}:1:1"]


SLIPS = [
    (CONTRACT, "currency: EUR", "currency: USD",
     ["a.yaml:2:11: the market has no rates for 'USD'; it has 'EUR'",
      "b.yaml:3:10: no funding spread for 'USD', the currency of the note 'Worst-of put'; write 'funding: "
      "{USD: 0 bp}' to value it without the issuer's spread",
      *(f"b.yaml:{line}:3: '{name}' is quoted in EUR, but 'Worst-of put' pays in USD; write in the contract "
        f"'conversion: {{{name}: quanto}}' (paid at a fixed rate) or '{{{name}: composite}}' (converted at the rate of "
        "the day)"
        for line, name in ((5, "harbour"), (6, "quarry"), (7, "orchard")))]),
    (CONTRACT, "[harbour,", "[harbor,",
     ["a.yaml:4:10: the market has no asset 'harbor'; did you mean 'harbour'?"]),
    (MARKET, "funding: {EUR: 0 bp}", "source: screen",
     ["b.yaml:1:9: no funding spread for 'EUR', the currency of the note 'Worst-of put'; write 'funding: "
      "{EUR: 0 bp}' to value it without the issuer's spread"]),
    (MARKET, ", quarry/orchard: 55%", "",
     ["b.yaml:8:14: no correlation for 'quarry/orchard'; write 'quarry/orchard: NUMBER%' under 'correlation'"]),
    (MARKET, "correlation: {harbour/quarry: 60%, harbour/orchard: 65%, quarry/orchard: 55%}\n", "",
     ["b.yaml:1:9: no correlation for 'harbour/quarry', 'harbour/orchard' and 'quarry/orchard'; write 'correlation: "
      "{harbour/quarry: NUMBER%, harbour/orchard: NUMBER%, quarry/orchard: NUMBER%}'"]),
]


@pytest.mark.parametrize(("whole", "old", "new", "expected"), SLIPS,
                         ids=[new or old for _, old, new, _ in SLIPS])
def test_slips_between_documents(whole: str, old: str, new: str, expected: list[str]):
    """What contract and market say of each other must fit, each fault at the document to change."""
    assert whole.count(old) == 1
    texts = [text.replace(old, new) if text == whole else text for text in (CONTRACT, MARKET)]
    assert made(*texts)[1] == expected


WRONG_TERM = ("  side: put", "  side: pot",
              "a.yaml:10:9: expected 'side' to be: 'call' or 'put', found 'pot'; did you mean 'put'?")
NO_PAYOFF = ("payoff: rainbow_option", "payoff: rainbow_opton",
             "a.yaml:8:9: there is no payoff 'rainbow_opton'; did you mean 'rainbow_option'?")
WRONG_VOL = ("vol: 18%", "vol: 18", "b.yaml:5:57: expected a percentage with its unit, found '18'; write '18%'")
WRONG_DATE = ("market: 2026-12-01", "market: 01.12.2026",
              "b.yaml:1:9: expected the valuation date, or '0y' for textbook contracts, found '01.12.2026'; "
              "write '2026-12-01'")


@pytest.mark.parametrize("alone", [WRONG_TERM, NO_PAYOFF, WRONG_VOL, WRONG_DATE], ids=lambda slip: slip[1].strip())
@pytest.mark.parametrize(("whole", "old", "new", "expected"), SLIPS,
                         ids=[new or old for _, old, new, _ in SLIPS])
def test_slips_between_documents_beside_others(whole: str, old: str, new: str, expected: list[str], alone):
    """What does not fit between two documents is told in the same round as what is wrong in either."""
    texts = [text.replace(old, new) if text == whole else text for text in (CONTRACT, MARKET)]
    slip, instead, fault = alone
    assert sum(text.count(slip) for text in texts) == 1
    expected = [each for each in expected if not (alone is WRONG_VOL and "'harbour' is quoted" in each)]
    assert made(*(text.replace(slip, instead) for text in texts))[1] == sorted(
        [fault, *expected], key=lambda text: [int(part) if part.isdigit() else part for part in text.split(":")[:3]])


def test_what_is_wrong_in_a_document_is_not_missing_beside_it():
    """A rate, an asset or a correlation that is there but wrong gives its own fault and no second one."""
    for old, new, place in (("EUR: 2.1%", "EUR: 2.1", "2:14"), ("vol: 18%", "vol: 18", "5:57"),
                            ("harbour/quarry: 60%", "harbour/quarry: 0.6", "8:31"),
                            ("harbour/quarry: 60%", "harbor/quarry: 60%", "8:15"),
                            ("EUR: 0 bp", "EUR: 80", "3:16"), ("funding: {EUR: 0 bp}", "funding: 80 bp", "3:10"),
                            ("market: 2026-12-01", "market: today", "1:9")):
        assert MARKET.count(old) == 1
        (fault,) = made(CONTRACT, MARKET.replace(old, new))[1]
        assert fault.startswith(f"b.yaml:{place}: ")


def test_currency_of_the_asset():
    """An asset in another currency than the contract's needs its conversion, and each conversion its market: rates of
    that currency, then the rate of exchange's vol and correlation, or the rate itself with all its correlations."""
    market = MARKET.replace("quarry: {spot: 100, currency: EUR", "quarry: {spot: 100, currency: USD")
    assert made(CONTRACT, market)[1] == [
        "b.yaml:6:3: 'quarry' is quoted in USD, but 'Worst-of put' pays in EUR; write in the contract 'conversion: "
        "{quarry: quanto}' (paid at a fixed rate) or '{quarry: composite}' (converted at the rate of the day)"]
    quanto = CONTRACT.replace("currency: EUR", "currency: EUR\nconversion: {quarry: quanto}")
    assert made(quanto, market)[1] == ["b.yaml:6:3: the market has no rates for 'USD', the currency of 'quarry'"]
    market = market.replace("rates: {", "rates: {USD: 4%, ")
    assert made(quanto, market)[1] == ["b.yaml:6:3: 'quarry' is paid in EUR at a fixed rate; its market needs 'quanto: "
                                       "{fx_vol: ..., fx_correlation: ..., fx: EUR per USD}'"]
    composite = quanto.replace("quanto", "composite")
    assert made(composite, market)[1] == ["b.yaml:6:3: 'quarry' is converted from USD to EUR, but the market has no "
                                          "rate of exchange; write 'fx: {EUR per USD: {spot: ..., vol: ...}}'"]
    market = market.replace("correlation:", "fx: {USD per EUR: {spot: 1.1, vol: 8%}}\ncorrelation:")
    assert made(composite, market)[1] == ["b.yaml:9:14: no correlation for 'harbour/USD per EUR', 'quarry/USD per EUR' "
                                          "and 'orchard/USD per EUR'; write 'harbour/USD per EUR: NUMBER%', "
                                          "'quarry/USD per EUR: NUMBER%' and 'orchard/USD per EUR: NUMBER%' under "
                                          "'correlation'"]
    assert made(CONTRACT.replace("currency: EUR", "currency: EUR\nconversion: {harbour: quanto}"), MARKET)[1] == [
        "a.yaml:3:14: 'harbour' is quoted in EUR, the contract's currency: there is nothing to convert"]


def test_a_quanto_that_only_the_market_suggests():
    """The market's 'quanto' is enough, but then the result says that it was."""
    market = MARKET.replace("rates: {", "rates: {USD: 4%, ").replace(
        "quarry: {spot: 100, currency: EUR",
        "quarry: {spot: 100, quanto: {fx_vol: 9%, fx_correlation: -20%, fx: EUR per USD}, currency: USD")
    asked, faults = made(CONTRACT, market)
    assert faults == []
    assert asked.contracts[0].conversion == {"quarry": "quanto"}
    assert any("taken to be paid in EUR at a fixed rate" in said for said in asked.contracts[0].assumptions)
    assert made(CONTRACT, market.replace("EUR per USD", "GBP per USD"))[1] == [
        "b.yaml:6:31: the quanto of 'quarry' is about GBP per USD; expected 'EUR per USD' or 'USD per EUR'"]


def test_correlations_that_cannot_be():
    """A matrix that is not positive semi-definite is refused; the nearest one that is printed, and then
    accepted."""
    wrong = MARKET.replace("60%", "90%").replace("65%", "-80%")
    _, (fault,) = made(CONTRACT, wrong)
    assert fault.startswith("b.yaml:8:14: no assets can be correlated like this (the smallest eigenvalue of "
                            "the matrix is -0.")
    nearest = fault.split("the nearest correlations that can be: ")[1]
    head = wrong[: wrong.index("correlation:")]
    assert made(CONTRACT, f"{head}correlation: {{{nearest}}}\n")[1] == []


def test_correlation_of_other_assets_is_not_judged():
    """Only the contract's own assets must make a correlation matrix."""
    contract = CONTRACT.replace("[harbour, quarry, orchard]", "[harbour, quarry]")
    assert made(contract, MARKET.replace("60%", "90%").replace("65%", "-80%"))[1] == []


def test_times_and_dates_do_not_mix():
    """A textbook contract needs a textbook market, and the other way round."""
    assert made(OPTION, MARKET)[1] == [
        "b.yaml:1:9: 'Call' uses times, and needs a market that begins 'market: 0y'"]
    assert "b.yaml:1:9: 'Worst-of put' uses calendar dates, and needs a market of a date" in made(CONTRACT,
                                                                                                  TEXTBOOK)[1]


def test_times_that_cannot_be_read():
    """Whether a contract uses times is not judged by dates that cannot be read."""
    (fault,) = made(OPTION.replace("expiry: 1y", "expiry: 1yr"), TEXTBOOK)[1]
    assert fault.startswith("a.yaml:6:42: expected a date such as '2026-11-16', a time such as '0.25y'")


def test_two_markets():
    """Two markets in one call are an error."""
    assert made(OPTION, TEXTBOOK,
                TEXTBOOK)[1] == ["c.yaml:1:1: a second market; the first stands at b.yaml:1:1"]


def test_two_contracts_of_one_title():
    """Results go by title, so in one call each contract has its own."""
    assert made(OPTION, OPTION)[1] == [
        "b.yaml:1:11: the contract 'Call' stands at a.yaml:1:11 already; each needs its own title"]


def test_own_definitions():
    """A user's definition wins over a shipped one, which is said; two of one name are a fault; an unused
    one is read."""
    own = shipped_text("european").replace("Call or put", "Own call or put")
    asked, faults = made(OPTION, own)
    assert faults == []
    assert asked.contracts[0].payoff.place.file == "b.yaml"
    assert asked.contracts[0].assumptions == (
        f"'european' is defined at {asked.contracts[0].payoff.place}; the shipped definition of that name is "
        "not used",)
    assert made(OPTION, shipped_text("european"))[0].contracts[0].assumptions == ()
    (fault,) = made(OPTION, own, own)[1]
    assert fault.endswith(f": the payoff 'european' is defined at {asked.contracts[0].payoff.place} already")
    assert [fault.split(":")[0] for fault in made(OPTION, "payoff: other\nevents: []\n")[1]] == ["b.yaml"]


def test_funding_of_options_is_an_assumption():
    """A contract per unit without a funding spread is discounted without one, and says so."""
    asked, faults = made(OPTION, TEXTBOOK)
    assert faults == []
    assert asked.contracts[0].assumptions == (NO_FUNDING,)
    asked, _ = made(OPTION, TEXTBOOK.replace("rates", "funding: {EUR: 10 bp}\nrates"))
    assert asked.contracts[0].assumptions == ()


def test_funding_of_a_note_is_stated_whatever_its_size_is_called():
    """A payment of part 'bond' is an issuer's promise, also of a definition that leaves it open what amounts are."""
    own = ("payoff: own\nterms: {expiry: {type: date}}\nevents:\n  - {at: expiry, pay: 1, part: bond}\n"
           "  - {at: expiry, pay: spot, part: option}\n")
    note = OPTION.replace("payoff: european", "payoff: own").replace("side: call, strike: 100, ", "")
    said = ("b.yaml:1:9: no funding spread for 'EUR', the currency of the note 'Call'; write 'funding: {EUR: 0 bp}' to "
            "value it without the issuer's spread")
    assert made(note, TEXTBOOK, own)[1] == [said]
    funded = TEXTBOOK.replace("rates", "funding: {EUR: 0 bp}\nrates")
    assert made(note, funded, own)[1] == []
    assert made(note, TEXTBOOK, own.replace("bond", "option"))[1] == []


def test_shipped_notes_take_a_notional():
    """Every shipped definition with a bond in it says that its amounts are multiples of the notional."""
    for name in shipped_names():
        payoff, _ = read_payoff(shipped(name))
        if any(pay.part == "bond" for pay in payoff.payments()):
            assert payoff.pays == MULTIPLES, name


MOST_WORDS = ["", "-1", "0", "70", "nan", "1e999", "[]", "{}", "[1, 2]", "{a: 1}", "2026-02-30", "9999-12-31",
              "2026-11-01", "0y", "0.5y", "1y", "-1%", "900%", "3 bp", "expiry", "observations.last",
              "final.first",
              "2 business days", "1 day", "99999 years", "true", "call", "harbour", "none", "'x'", "market",
              "null",
              "{continuous: [0y, 1y]}", "{count: 3, until: 1y}",
              "{from: 2026-12-01, until: 2027-12-01, every: 1 month}",
              "\u00e9", "~", "*a", "&a 1", "? x", "a: b", "spot", "<<", "!!int 3"]


@st.composite
def mutations(draw: st.DrawFn) -> str:
    """A shipped example with its definition, a few pieces of it replaced, dropped or doubled."""
    text = draw(st.sampled_from(EXAMPLE_TEXTS))
    if draw(st.booleans()):
        names = [line.split()[1] for line in text.splitlines() if line.startswith("payoff:")]
        name = draw(st.sampled_from(names))
        text += "---\n" + shipped_text(name)
    for _ in range(draw(st.integers(1, 4))):
        lines = text.splitlines() or [""]
        k = draw(st.integers(0, len(lines) - 1))
        kind = draw(st.sampled_from(["value", "drop", "double", "swap", "cut", "inner"]))
        if kind == "value" and ":" in lines[k]:
            lines[k] = lines[k].split(":")[0] + ": " + draw(st.sampled_from(MOST_WORDS))
        elif kind == "drop":
            del lines[k]
        elif kind == "double":
            lines.insert(k, lines[k])
        elif kind == "swap":
            other = draw(st.integers(0, len(lines) - 1))
            lines[k], lines[other] = lines[other], lines[k]
        elif kind == "inner":
            words = lines[k].split(" ")
            words[draw(st.integers(0, len(words) - 1))] = draw(st.sampled_from(MOST_WORDS))
            lines[k] = " ".join(words)
        else:
            lines[k] = lines[k][: draw(st.integers(0, len(lines[k])))]
        text = "\n".join(lines) + "\n"
    return text


@given(mutations())
def test_no_wrong_document_gives_a_traceback(text: str):
    """Whatever is done to an example, the outcome is a dated contract or faults with places, never an
    exception."""
    documents, faults = parse_documents(text.encode(), "m.yaml")
    asked, faults = checked_request(documents, faults)
    for contract in asked.contracts:
        dated, wrong = date_contract(contract, asked.market.valuation if asked.market else None)
        assert dated is None or not wrong
        assert dated or wrong or faults
        faults = [*faults, *wrong]
    for fault in faults:
        assert fault.place.line >= 1
        assert fault.text and not fault.text.endswith(".") and "object at 0x" not in fault.text


def test_requests_load_nothing_heavy():
    """Faults are told without numpy, numba or scipy being imported."""
    code = ("import sys\nfrom mcx.checked.load import request\n"
            f"request([{str(EXAMPLES[0])!r}])\n"
            "print(*sorted({'numpy', 'numba', 'scipy', 'holidays'} & set(sys.modules)))")
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True,
                          cwd=Path(__file__).parents[2])
    assert done.stdout.split() == []


def test_request_gives_what_is_sound():
    """`request` hands out the sound documents beside the faults of the others."""
    asked, faults = request([EXAMPLES[0], "missing.yaml"])
    assert len(asked.contracts) == 1
    assert [str(fault) for fault in faults] == ["missing.yaml:1:1: there is no such file"]
