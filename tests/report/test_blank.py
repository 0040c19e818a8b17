"""Blanks: loaded as they are they give a fault for every blank, filled in as they say they price."""

from __future__ import annotations

import re
from functools import cache

import pytest
from front_door import mcx, refused, written

import mcx as package
from mcx.checked.library import shipped, shipped_names
from mcx.checked.payoff import Payoff, Term
from mcx.checked.read_payoff import read_payoff
from mcx.faults import InputError, RequestError
from mcx.report.blank import blank as fill_in
from mcx.text.documents import parse_documents

ASSETS = ("alder", "birch", "cedar")
EMPTY = re.compile(r"( *)([\w./]+):\s*(#.*)?")
OPTIONAL = re.compile(r"( *)# (\w+):\s*# optional;.*")
HEAD = {"currency": "EUR", "notional": "1000000", "units": "10", "denomination": "1000", "start": "2026-12-01", "day_count": "30/360",
        "settlement": "2 business days", "holidays": "ECB", "roll": "modified following", "market": "2026-12-01",
        "rates": "{EUR: {1y: 2%, 3y: 2.5%}}", "funding": "{EUR: 80 bp}", "spot": "100", "yield": "2%", "vol": "20%",
        "quote": "a desk", "at": "2026-12-01 16:30", "side": "bid", "unit": "cash", "price": "98", "accrual": "dirty",
        "commitment": "firm", "bid_offer": "1", "size": "1000", "fees": "1", "issue_price": "100%", "tolerance": "0"}
BY_TYPE = {"number": "1", "percent": "80%", "level": "100", "watch": "2028-12-01", "flag": "true", "date": "2028-12-01",
           "dates": "{from: 2027-03-01, until: 2028-12-01, every: 3 months}"}
BY_NAME = {"strike_date": "2027-06-01", "first_call": "2027-06-01", "receive": "alder", "give": "birch",
           "upper": "120%", "cap": "150%", "bonus": "110%"}
NO_STRIKE = {"strike_type": "floating"}  # for the other choice the optional strike is needed


@cache
def payoff_of(name: str) -> Payoff:
    payoff, faults = read_payoff(shipped(name))
    assert not faults
    return payoff


def assets_for(name: str) -> tuple[str, ...]:
    """As many assets as the definition takes, three at most."""
    fewest, most = payoff_of(name).assets
    return ASSETS[: min(most or 3, 3)]


def value_for(key: str, terms: dict[str, Term], with_optional: bool) -> str:
    if key in terms:
        term, names = terms[key], BY_NAME if with_optional else BY_NAME | NO_STRIKE
        return names.get(key) or (term.choices[0] if term.type == "choice" else BY_TYPE[term.type])
    if "/" in key:
        return "50%"
    return HEAD.get(key, "100")  # one asset's entry of a term


def filled(name: str, with_optional: bool = False) -> str:
    """The blank with a value in every empty place, found from the line alone."""
    terms = {term.name: term for term in payoff_of(name).terms}
    lines = package.blank(name, assets_for(name)).splitlines()
    done, money = [], any(line.startswith("units:") for line in lines)
    for line, following in zip(lines, [*lines[1:], ""], strict=True):
        if with_optional and (optional := OPTIONAL.fullmatch(line)):
            key, indent = optional[2], optional[1]
            value = "{alder: 100}" if (key, indent) == ("spot", "") else value_for(key, terms if indent else {}, True)
            line = f"{indent}{key}: {'100' if money and key == 'issue_price' else value}"
        elif found := EMPTY.fullmatch(line):
            indent = len(found[1])
            parent = len(following) - len(following.lstrip(" ")) > indent
            line = line if parent else f"{found[1]}{found[2]}: {value_for(found[2], terms if indent else {}, with_optional)}"
        done.append(line)
    return "\n".join(done) + "\n"


@pytest.mark.parametrize("name", shipped_names())
def test_filled_in_it_prices(name: str, tmp_path):
    """Every definition's blank, each empty place filled as its comment says."""
    result = package.price(written(tmp_path, filled(name)), paths=64)
    assert result.payoff == name and result.contract.startswith("New ")


@pytest.mark.parametrize("name", [name for name in shipped_names()
                                  if any(term.optional for term in payoff_of(name).terms)])
def test_optional_terms_can_be_filled_in_too(name: str, tmp_path):
    """The lines that are commented out are as good once the sign is taken away."""
    text = filled(name, with_optional=True)
    assert text.count("# optional") < filled(name).count("# optional")
    package.price(written(tmp_path, text), paths=64)


@pytest.mark.parametrize("name", shipped_names())
def test_as_it_is_every_blank_is_a_fault(name: str, tmp_path):
    """One fault on each empty line, none elsewhere: the blank's own words are right."""
    text = package.blank(name, assets_for(name))
    lines = text.splitlines()
    empty = {number for number, line in enumerate(lines, start=1) if EMPTY.fullmatch(line)
             and not (number < len(lines) and lines[number].startswith(" " * (len(line) - len(line.lstrip()) + 1)))}
    with pytest.raises(InputError) as found:
        package.price(written(tmp_path, text))
    assert {fault.place.line for fault in found.value.faults} == empty, str(found.value)


def test_day_count_is_asked_for_only_where_it_counts():
    """Year fractions need one; a European option does not."""
    assert "day_count:" in package.blank("reverse_convertible", ["alder"])
    assert "day_count:" not in package.blank("european", ["alder"])


def test_size_is_asked_for_as_the_definition_pays():
    """Units for money per unit, else a notional; both are named where the definition leaves it open."""
    money, either = package.blank("european", ["alder"]), package.blank("rainbow_option", ["alder", "birch"])
    note = package.blank("autocall", ["alder"])
    assert "\nnotional:" in note and "units" not in note
    assert "\nunits:" in money and "notional" not in money
    assert "\nnotional:" in either and "'units:'" in either


def test_terms_with_a_default_are_optional():
    """They stand behind a comment sign, like those that need not be stated."""
    text = b"payoff: own\nabout: x\nterms:\n  share: {type: percent, default: 50%}\n  on: {type: date}\n" \
           b"events:\n  - at: on\n    pay: share\n"
    payoff, faults = read_payoff(parse_documents(text, "own.yaml")[0][0])
    lines = fill_in(payoff, ["alder"]).splitlines()
    assert faults == () or faults == []
    assert [line.split(":")[0] for line in lines if "share" in line or "  on:" in line] == ["  # share", "  on"]


def test_from_the_command_line():
    """Text as it is, or in one JSON object."""
    plain = mcx("payoffs", "european", "--blank", "--assets", "alder")
    assert (plain.code, plain.out) == (0, package.blank("european", ["alder"]))
    assert mcx("payoffs", "european", "--blank", "--assets", "alder", "--json").json == {"blank": plain.out}


@pytest.mark.parametrize(("name", "assets", "said"), [
    ("european", "alder,birch", "'european' takes 1 asset, not 2"),
    ("exchange_option", "alder", "'exchange_option' takes 2 assets, not 1"),
    ("basket_option", "alder", "'basket_option' takes 2 or more assets, not 1"),
    ("autocall", "alder,alder", "an asset is named twice"), ("autocall", "", "not ''"), ("autocall", "a,,b", "not ''"),
    ("autocall", "a b,c", "not 'a b'"),
    ("autocall", "a: b", "not 'a: b'"), ("europaen", "alder", "did you mean 'european'?"),
    ("zzz", "a", "'mcx payoffs' lists"),
])
def test_what_does_not_fit(name: str, assets: str, said: str):
    """Each with its sentence."""
    refused(mcx("payoffs", name, "--blank", "--assets", assets), said)


def test_no_assets_at_all():
    """From Python an empty list."""
    with pytest.raises(RequestError, match="the assets are names"):
        package.blank("european", [])
