"""What a result and a readback say of dividends and currencies."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from front_door import EXAMPLES

import mcx

DEMO = EXAMPLES / "dividends_and_currencies.yaml"


def test_both_verbs_say_it():
    """Escrow with its value, decrement, quanto with its direction, composite with its rate."""
    note, call = mcx.price(DEMO, paths=1024).prices
    said = "\n".join(note.assumptions)
    assert "quarry gives up 45 points a year, taken as a cash dividend of a 365th of that on every calendar day" in said
    assert "those with ex dates up to the last observation, 2028-11-30, are worth 12.0768 today" in said
    assert "correlation of -20 % with EUR per USD" in said
    converted = "converted to EUR at the rate of each date (composite), which is simulated too, from 1.064 EUR per CHF"
    assert any(converted in each for each in call.assumptions)
    readbacks = mcx.readback(DEMO).readbacks
    for result, readback in zip((note, call), readbacks, strict=True):
        assert {each for each in result.assumptions if "holidays as listed" not in each} <= set(readback.assumptions)
    facts = {fact.name: fact.text for fact in readbacks[0].facts}
    assert facts["conversion"] == "lantern: its level counts as quoted, at a fixed rate of exchange (quanto)"
    assert facts["payment calendar"] == "ECB, and closed on 2027-12-24, following"
    assert facts["calendar"].startswith("ECB and XNYS, open in all of them, following")
    assert "at the ends of months" in readbacks[0].terms[1].value


def changed(tmp_path: Path, old: str, new: str) -> Path:
    """The demo with one text put in place of another."""
    text = DEMO.read_text()
    assert text.count(old) == 1
    file = tmp_path / "changed.yaml"
    file.write_text(text.replace(old, new))
    return file


@pytest.mark.parametrize(("old", "new", "said"), [
    ("decrement: 45 points", "decrement: 5%", "quarry gives up 5 % a year, taken as a continuous yield"),
    ("    decrement: 45 points\n", "", "quarry is a total-return index: its level keeps all dividends"),
    ("ex: 2027-05-03, cash: 6.0", "ex: 2026-12-01, cash: 6.0",
     "the spot of lantern is without its dividend up to the valuation date, the last on 2026-12-01"),
    ("cash: 7.0}]", "cash: 7.0}]\n    dividend_blend: {cash_until: 1y, share_from: 2y}",
     "cash dividends of lantern turn into shares of its level"),
    ("quanto: {fx_vol: {6m: 7%, 2y: 8%}", "quanto: {fx_vol: {6m: 7%, 1y: 8%}",
     "the vols of the rate of exchange of lantern end at 1y; the last vol is held to 2028-11-30"),
])
def test_each_kind_is_said(tmp_path: Path, old: str, new: str, said: str):
    """What the market changes, the result says."""
    (note, _) = mcx.price(changed(tmp_path, old, new), paths=256).prices
    assert any(each.startswith(said) for each in note.assumptions), note.assumptions


@pytest.mark.parametrize("verb", [mcx.price, mcx.readback])
def test_dividends_worth_the_spot(tmp_path: Path, verb):
    """A fault at the asset with both numbers, for either verb."""
    file = changed(tmp_path, "cash: 6.0", "cash: 900")
    with pytest.raises(mcx.InputError) as caught:
        verb(file)
    (fault,) = caught.value.faults
    line = file.read_text().splitlines().index("  lantern:") + 1
    assert str(fault).startswith(f"{file}:{line}:3: the cash dividends of 'lantern' up to the contract's last "
                                 "observation are worth ") and str(fault).endswith("its spot is 801.1")


def test_watches_with_cash_dividends_are_nearly_exact(tmp_path: Path):
    """The readback says so where cash dividends are still to come, and 'exact' without."""
    file = changed(tmp_path, "watched: observations.last", "watched: {continuous: [2026-12-01, observations.last]}")
    text = file.read_text().replace("[quarry, lantern]", "[lantern]")
    text = text.replace("{quarry: 1012.40, lantern: 804.50}", "804.50")
    file.write_text(text)
    assert [watch.law for watch in mcx.readback(file).readbacks[0].watches] == ["nearly exact"]
    said = ("in the continuous watch of hit the cash dividends of lantern to come count at their mean over each step, "
            "of at most a month: nearly exact")
    assert said in mcx.price(file, paths=64).prices[0].assumptions
    dividends = "dividends: [{ex: 2027-05-03, cash: 6.0}, {ex: 2028-05-02, cash: 6.5}, {ex: 2029-05-02, cash: 7.0}]"
    plain = text.replace(dividends, "yield: 1%")
    file.write_text(plain)
    assert plain != text
    assert [watch.law for watch in mcx.readback(file).readbacks[0].watches] == ["exact"]
    assert not any("nearly exact" in each for each in mcx.price(file, paths=64).prices[0].assumptions)


@pytest.mark.parametrize("paid", ["cash: 6.0", "share: 3%"])
def test_a_hit_that_a_dividend_may_bring_about_is_refused(tmp_path: Path, paid: str):
    """At the line of the event; a dividend after the watch does no harm."""
    example = (Path(__file__).parents[2] / "payoffs" / "examples" / "touch_at_hit.yaml").read_text()
    file = tmp_path / "case.yaml"
    for ex, refused in (("2027-02-01", True), ("2031-02-01", False)):
        file.write_text(re.sub(r"yield: \S+?,", f"dividends: [{{ex: {ex}, {paid}}}],", example, count=1))
        assert file.read_text() != example
        if refused:
            with pytest.raises(mcx.InputError, match="the moment of a hit is not known where"):
                mcx.price(file, paths=4096)
        else:
            mcx.price(file, paths=4096)
