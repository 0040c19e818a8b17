"""Warnings about what looks like a slip: each rule on both sides of its limit, and none for what is usual."""

from __future__ import annotations

from pathlib import Path

import pytest
from front_door import CALL, EXAMPLES, MARKET, mcx, written

import mcx as package

NOTE = """contract: Note
currency: EUR
notional: 1000
assets: [harbour]
payoff: autocall
terms:
  initial: 100
  observations: {count: 4, until: 1y}
  first_call: 0.25y
  call_barrier: 100%
  coupon_barrier: 70%
  coupon: 2%
  memory: true
  knock_in: 60%
  watched: {count: 52, until: 1y}
  strike: 100%
"""
EARLY = "(common practice: at most a month apart): is nothing watched between the two?"
FUNDED = MARKET.replace("assets:", "funding: {EUR: 0 bp}\nassets:")


def warned(tmp_path: Path, *changes: tuple[str, str], text: str = NOTE) -> list[str]:
    """The warnings of the readback, which those of a price hold as well."""
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    file = written(tmp_path, text + FUNDED)
    found = list(package.readback(file).warnings)
    priced = package.price(file, paths=64).warnings
    assert [each for each in priced if each in found] == found
    return found


def test_shipped_examples_are_plausible():
    """But for the one whose watch is meant to end early."""
    said = [warning for example in sorted(EXAMPLES.glob("*.yaml")) for found in [package.readback(example)]
            for each in getattr(found, "readbacks", (found,)) for warning in each.warnings]
    assert said == ["'touched' is watched until 0.5y and read until 1y " + EARLY]


@pytest.mark.parametrize(("initial", "said"), [
    ("100", []), ("20", []), ("500", []), ("1", []),
    ("19", ["'initial' is 19 and harbour stands at 100, 5.26 times that (common practice: 0.2 to 5 times): "
            "do both mean the same level?"]),
    ("4180", ["'initial' is 4180 and harbour stands at 100, 0.0239 times that (common practice: 0.2 to 5 times): "
            "do both mean the same level?"])])
def test_levels_far_from_todays(initial: str, said: list[str], tmp_path: Path):
    """From a fifth to five times; a level of 1 is a way to speak of the level itself."""
    assert warned(tmp_path, ("initial: 100", f"initial: {initial}")) == said


@pytest.mark.parametrize(("strike", "said"), [
    ("500%", []), ("501%", ["'strike' is 501 % (common practice: up to 500 %): is that meant?"])])
def test_large_percentages(strike: str, said: list[str], tmp_path: Path):
    """Above 500 %."""
    assert warned(tmp_path, ("strike: 100%", f"strike: {strike}")) == said


def test_a_first_date_after_the_last(tmp_path: Path):
    """An event without a date is no assumption but a likely slip."""
    said = "'called' never happens: no date of 'observations' from 'first_call'"
    assert warned(tmp_path, ("first_call: 0.25y", "first_call: 1.5y")) == [said]
    assert said not in package.price(written(tmp_path, NOTE.replace("0.25y", "1.5y") + FUNDED), paths=64).assumptions


@pytest.mark.parametrize(("watched", "until"), [
    ("{count: 52, until: 1y}", ""), ("{continuous: [0y, 0.95y]}", ""), ("[0.25y, 0.95y]", ""),
    ("{continuous: [0y, 0.9y]}", "0.9y"), ("[0.25y, 0.9y]", "0.9y")])
def test_a_watch_that_ends_early(watched: str, until: str, tmp_path: Path):
    """More than a month before what depends on it."""
    said = [f"'hit' is watched until {until} and read until 1y {EARLY}"] if until else []
    assert warned(tmp_path, ("{count: 52, until: 1y}", watched)) == said


@pytest.mark.parametrize(("expiry", "said"), [
    ("30y", []), ("31y", ["the last date is 31y, in 31 years (common practice: up to 30): is that meant?"])])
def test_a_date_far_away(expiry: str, said: list[str], tmp_path: Path):
    """More than thirty years."""
    assert warned(tmp_path, ("expiry: 1y", f"expiry: {expiry}"), text=CALL) == said


def test_levels_need_a_market(tmp_path: Path):
    """Without one only the contract is looked at; both stand on the page."""
    file = written(tmp_path, NOTE.replace("initial: 100", "initial: 4180").replace("strike: 100%", "strike: 700%"))
    assert package.readback(file).warnings == ("'strike' is 700 % (common practice: up to 500 %): is that meant?",)
    assert "\nwarnings\n- 'strike' is 700 % (common practice" in mcx("readback", file).out
