"""History from documents: fixings in all forms, what is missing, what happened, disrupted days, adjustments, levels to
be fixed, and what readback says of all that."""

from __future__ import annotations

from datetime import date
from itertools import combinations, product
from math import exp, log, sqrt
from pathlib import Path

import pytest
from closed_forms import touch_at_expiry
from front_door import mcx, refused, written
from helpers import check, prepare
from scipy.special import ndtr
from seasoned import LEVELS, SEED, WORST_OF, faults, fixings, market

import mcx as package
from mcx.dates.dating import date_contract
from mcx.tape.unroll import unroll

# Fixings


@pytest.mark.parametrize("gone", [gone for count in (1, 2, 3, 6) for gone in combinations(LEVELS, count)])
def test_every_missing_fixing_is_listed_at_once(tmp_path: Path, gone: tuple):
    """Whatever is missing: every asset with every date, and nothing else."""
    left = {key: level for key, level in LEVELS.items() if key not in gone}
    found = faults(tmp_path, WORST_OF + market() + fixings(left))
    listed = {(name, day) for fault in found for name in ("harbour", "lantern") if f"fixing of '{name}'" in fault
              for day in ("2027-03-01", "2027-06-01", "2027-09-01") if day in fault}
    assert listed == set(gone)
    assert len(found) == len({name for name, _ in gone})
    assert all("'note' needs a fixing of" in fault for fault in found)


def test_fixings_after_a_call_are_not_needed():
    """A note that was called looks at nothing later."""
    early = {("harbour", "2027-03-01"): 101, ("lantern", "2027-03-01"): 51, ("harbour", "2027-06-01"): 101,
             ("lantern", "2027-06-01"): 51}
    assert prepare(WORST_OF + market() + fixings(early)).price(64, SEED).mean == 0.0


def test_a_table_says_the_same_as_the_document(tmp_path: Path):
    """A CSV file, seen from where the market's file is; its text is in the record, which replays."""
    inside = package.price(written(tmp_path, WORST_OF + market() + fixings(LEVELS)), paths=256)
    days = ("2027-03-01", "2027-06-01", "2027-09-01")
    rows = [f"{day},{LEVELS['lantern', day]},{LEVELS['harbour', day]}" for day in days]
    (tmp_path / "closes.csv").write_text("\n".join(["date,lantern,harbour", *rows]))
    file = written(tmp_path, WORST_OF + market() + "fixings: closes.csv\n", "beside.yaml")
    outside = package.price(file, paths=256, record=tmp_path / "record.json")
    assert outside.price == inside.price
    (tmp_path / "closes.csv").unlink()
    assert package.replay(tmp_path / "record.json").identical
    assert mcx("price", file).err.count("closes.csv") == 1


def test_what_is_wrong_with_fixings(tmp_path: Path):
    """Unknown names, slips of dates and levels, twice the same; each at its place."""
    wrong = "fixings:\n  habour: {2027-03-01: 1}\n  harbour: {2027-03-1: 1, 2027-03-01: -5}\n  lantern: 4\n"
    found = faults(tmp_path, WORST_OF + market() + wrong)
    assert [fault.split(": ")[0] for fault in found] == ["30:3", "31:13", "31:39", "32:12"]
    assert "did you mean 'harbour'?" in found[0]
    refused(mcx("price", written(tmp_path, WORST_OF + market() + "fixings: none.csv\n")), "29:10: the fixings in")
    (tmp_path / "twice.csv").write_text("date,harbour\n2027-03-01,1\n2027-03-01,2\nx,3\n")
    found = faults(tmp_path, WORST_OF + market() + "fixings: twice.csv\n")
    assert [fault.removeprefix(f"{tmp_path}/") for fault in found][:2] == [
        "twice.csv:3:1: a second fixing of 'harbour' on 2027-03-01",
        "twice.csv:4:1: expected a date such as '2026-11-16', found 'x'"]


def test_the_fixing_of_the_valuation_date_may_be_in_or_not():
    """Both work; what was used is said, for each asset."""
    texts = []
    for assets in ((), ("harbour",), ("lantern",), ("harbour", "lantern")):
        todays = {key: level for key, level in LEVELS.items() if key[1] < "2027-09-01" or key[0] in assets}
        found = prepare(WORST_OF + market("2027-09-01") + fixings(todays))
        texts.append(found.dated.assumptions[-1].split("valuation date, uses ")[1])
        levels = [LEVELS[name, "2027-09-01"] if name in assets else spot
                  for name, spot in (("harbour", 92), ("lantern", 47))]
        held = found.estimates(64, SEED)["condition: coupon paid @ 2027-09-01"].mean
        assert held == (min(levels[0] / 100, levels[1] / 50) >= 0.8)
    assert texts == ["the market's spot",
                     "that day's fixing of harbour and the market's spot of lantern, not fixed yet",
                     "that day's fixing of lantern and the market's spot of harbour, not fixed yet",
                     "that day's fixing"]


def test_a_composite_level_needs_the_rate_of_its_day(tmp_path: Path):
    """Level times rate, whichever way it is quoted; a missing rate is listed by its own name."""
    text = (WORST_OF.replace("payoff:", "conversion: {lantern: composite}\npayoff:")
            + market().replace("lantern: {spot: 47, currency: EUR", "lantern: {spot: 50, currency: USD").replace(
                "rates: {EUR: 2%}", "rates: {EUR: 2%, USD: 3%}\nfx: {USD per EUR: {spot: 1.1, vol: 8%}}").replace(
                "50%}\n", "50%, harbour/USD per EUR: 0%, lantern/USD per EUR: 0%}\n"))
    found = faults(tmp_path, text + fixings(LEVELS))
    assert len(found) == 1 and "a fixing of 'USD per EUR' on 2027-03-01, 2027-06-01 and 2027-09-01" in found[0]
    rates = {("USD per EUR", day): 1.25 for day in ("2027-03-01", "2027-06-01", "2027-09-01")}
    state = prepare(text + fixings(LEVELS | rates)).unrolled.state
    found = [level for (_, asset), level in state.fixings.items() if asset == 1]
    assert sorted(found) == pytest.approx([38.25 / 1.25, 44 / 1.25, 48.5 / 1.25])


@pytest.mark.parametrize(("day", "inside", "said"), [
    ("2027-09-01", ("lantern", "USD per EUR"), ""),
    ("2027-09-01", ("lantern",), "that day's fixing of lantern is left out, for that of USD per EUR is not in"),
    ("2027-09-01", ("USD per EUR",), "that day's fixing of USD per EUR is left out, for that of lantern is not in"),
    ("2027-09-01", (), ""),
    ("2027-07-01", ("lantern",),
     "fixings of lantern on days without one of USD per EUR are left out, the first of them of 2027-07-01")])
def test_one_fixing_alone_of_a_composite_level_is_said_to_be_left_out(day: str, inside: tuple[str, ...], said: str):
    """It is half of a level: on the valuation date the market's spots count, earlier nothing reads it."""
    levels = {key: level for key, level in LEVELS.items() if key[1] < "2027-09"}
    levels |= {("USD per EUR", when): 1.25 for when in ("2027-03-01", "2027-06-01")} | {
        (name, day): {"lantern": 44.0, "USD per EUR": 1.25}[name] for name in inside}
    text = (WORST_OF.replace("payoff:", "conversion: {lantern: composite}\npayoff:")
            + market("2027-09-01").replace("lantern: {spot: 47, currency: EUR", "lantern: {spot: 50, currency: USD")
            .replace("rates: {EUR: 2%}", "rates: {EUR: 2%, USD: 3%}\nfx: {USD per EUR: {spot: 1.1, vol: 8%}}").replace(
                "50%}\n", "50%, harbour/USD per EUR: 0%, lantern/USD per EUR: 0%}\n") + fixings(levels))
    found = prepare(text)
    left_out = [each for each in found.dated.assumptions if "left out" in each]
    assert len(left_out) == bool(said) and all(said in each for each in left_out)
    fixed = day == "2027-09-01" and len(inside) == 2
    assert any("that day's fixing of lantern and the market's spot of harbour" in each
               for each in found.dated.assumptions) == fixed


@pytest.mark.parametrize(("rate", "level", "said"), [
    (1.10, 47.0, []), (1.22, 51.0, []),
    (1.10, 42.0, ["lantern was fixed at 38.1818 on 2027-09-01, the valuation date, and stands at 45.4545, 1.19 times "
                  "that (common practice: within 10 %): do both mean the same level?"]),
    (0.91, 41.4, ["USD per EUR was fixed at 0.91 on 2027-03-01 and stands at 1.1: is the fixing the rate the other way "
                  "round?"])])
def test_fixings_that_do_not_go_with_the_spot_are_asked_about(tmp_path: Path, rate: float, level: float,
                                                              said: list[str]):
    """A fixing far from the spot of its own day, and a rate of exchange that looks turned round."""
    levels = LEVELS | {("lantern", "2027-09-01"): level} | {
        ("USD per EUR", day): rate for day in ("2027-03-01", "2027-06-01", "2027-09-01")}
    text = (WORST_OF.replace("payoff:", "conversion: {lantern: composite}\npayoff:")
            + market("2027-09-01").replace("lantern: {spot: 47, currency: EUR", "lantern: {spot: 50, currency: USD")
            .replace("rates: {EUR: 2%}", "rates: {EUR: 2%, USD: 3%}\nfx: {USD per EUR: {spot: 1.1, vol: 8%}}").replace(
                "50%}\n", "50%, harbour/USD per EUR: 0%, lantern/USD per EUR: 0%}\n") + fixings(levels))
    file = written(tmp_path, text)
    assert [each for each in package.readback(file).warnings if "was fixed at" in each] == said
    assert [each for each in package.price(file, paths=64).warnings if "was fixed at" in each] == said


# What happened

TOUCH = """contract: touch
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
settlement: 0 business days
calendar: {holidays: none, roll: following}
HAPPENEDpayoff: touch
terms: {kind: one touch, direction: down, barrier: 80, cash: 10, watched: {continuous: [2026-12-01, 2027-12-01]},
        expiry: 2027-12-01}
---
market: TODAY
rates: {EUR: 2%}
assets: {harbour: {spot: 92, currency: EUR, yield: 1%, vol: 20%}}
"""


def touch(happened: str, today: str = "2027-06-01", more: str = "") -> str:
    stated = f"happened: {{touched: {happened}}}\n" if happened else ""
    return TOUCH.replace("HAPPENED", stated).replace("TODAY", today) + more


@pytest.mark.parametrize("happened", ["{2027-06-01: false}", "{2027-05-31: false}", "{2027-08-02: false}",
                                      "{2027-05-31: false, 2027-06-02: true}"])
def test_not_touched_so_far(happened: str):
    """A statement of the eve, of the day or of a later day: the rest of the watch by its closed form."""
    left = (date(2027, 12, 1) - date(2027, 6, 1)).days / 365
    truth = touch_at_expiry("down", "one", "cash", 80.0, 10.0, spot=92.0, maturity=left, rate=0.02, dividend_yield=0.01,
                            vol=0.2)
    check(prepare(touch(happened)).price(1 << 16, SEED), truth, sharp=0.01)


@pytest.mark.parametrize(("happened", "more"), [
    ("{2027-03-04: true}", ""), ("", "fixings: {harbour: {2027-03-04: 79.5}}\n"),
    ("", "fixings: {harbour: {2026-12-01: 79.5}}\n"),  # on the first day of the watch
    ("{2027-03-01: false, 2027-03-04: true}", "fixings: {harbour: {2027-03-04: 82}}\n")])
def test_touched_already(happened: str, more: str):
    """By the contract's word, or by a fixing: the cash is certain."""
    left = (date(2027, 12, 1) - date(2027, 6, 1)).days / 365
    assert prepare(touch(happened, more=more)).price(64, SEED).mean == pytest.approx(10 * exp(-0.02 * left), rel=1e-14)


@pytest.mark.parametrize(("happened", "more", "said"), [
    ("", "fixings: {harbour: {2026-11-30: 79}}\n", "must say what had happened by 2027-05-31"),  # before the watch
    ("", "", "'touched' is watched all the time from 2026-12-01, which fixings cannot tell; the contract must say "
             "what had happened by 2027-05-31 or 2027-06-01, as 'happened: {touched: {2027-06-01: false}}'"),
    ("{2027-05-28: false}", "", "must say what had happened by 2027-05-31"),
    ("{2027-06-02: true}", "", "must say what had happened by 2027-05-31"),
    ("{2027-06-01: false}", "fixings: {harbour: {2027-03-04: 79.5}}\n",
     "'touched' is stated as false on 2027-06-01, which fixings contradict"),
    ("true", "", "expected what happened by date, as 'hit: {2027-03-04: true}', found 'true'"),
    ("{2027-06-01: 3}", "", "expected true or false"),
])
def test_what_the_contract_must_say_of_a_watch(tmp_path: Path, happened: str, more: str, said: str):
    """Nothing is taken for granted of the time that daily fixings do not show."""
    found = faults(tmp_path, touch(happened, more=more))
    assert len(found) == 1 and said in found[0], found


def test_an_extreme_so_far(tmp_path: Path):
    """The lowest level so far is stated; a fixing below it counts where it is of a later day, and is a contradiction
    where it is not."""
    text = touch("").replace("payoff: touch\nterms: {kind: one touch, direction: down, barrier: 80, cash: 10, ",
                             "HAPPENEDpayoff: lowest\nterms: {").replace("watched: {c", "watched: {c")
    text = ("payoff: lowest\nterms: {watched: {type: watch}, expiry: {type: date}}\nrunning:\n  low: {lowest: spot, "
            "at: watched}\nevents:\n  - {at: expiry, pay: low}\n---\n" + text)
    for level, more, so_far in ((70.5, "", 70.5), (70.5, "fixings: {harbour: {2027-06-01: 66}}\n", 66.0)):
        found = text.replace("HAPPENED", f"happened: {{low: {{2027-05-31: {level}}}}}\n") + more
        price = prepare(found).estimates(1 << 12, SEED)["price"].mean * exp(0.02 * 183 / 365)
        assert 60 < price < so_far
    found = faults(tmp_path, text.replace("HAPPENED", "happened: {low: {2027-06-01: 70}}\n")
                   + "fixings: {harbour: {2027-06-01: 66}}\n")
    assert "'low' is stated as 70 on 2027-06-01, which fixings contradict: harbour was fixed at 66 on 2027-06-01" in found[0]


# Disrupted days and corporate actions


def coupons(text: str) -> list[float]:
    """What has been paid or is owed."""
    return [each.amount for each in prepare(text).unrolled.state.payments]


def test_a_disrupted_day_takes_another_level():
    """The level of a later day, or the level that the contract states; of that asset on that day only."""
    plain = WORST_OF + market() + fixings(LEVELS)
    assert coupons(plain) == pytest.approx([0.02, 0.04])
    later = fixings(LEVELS | {("lantern", "2027-06-03"): 45.0})
    moved = plain.replace("payoff:", "disruption: {lantern: {2027-06-01: 2027-06-03}}\npayoff:", 1)
    assert coupons(moved.replace(fixings(LEVELS), later)) == pytest.approx([0.02, 0.02, 0.02])
    stated = plain.replace("payoff:", "disruption: {lantern: {2027-06-01: 43.5}}\npayoff:", 1)
    assert coupons(stated) == pytest.approx([0.02, 0.02, 0.02])
    assert any("lantern on 2027-06-01 takes 43.5 (disrupted day)" in each for each in prepare(stated).dated.assumptions)


def test_an_observation_may_be_moved_beyond_the_valuation_date():
    """It is then simulated on its new day, though its own day is past."""
    early = {key: level for key, level in LEVELS.items() if key[1] < "2027-09"}
    text = (WORST_OF + market("2027-09-01") + fixings(early)).replace(
        "payoff:", "disruption: {lantern: {2027-09-01: 2027-10-01}, harbour: {2027-09-01: 90}}\npayoff:", 1)
    found = prepare(text)
    held = found.estimates(1 << 14, SEED)["condition: coupon paid @ 2027-09-01"]
    time = 30 / 365
    forward = 47 * exp((0.02 - 0.02) * time)
    check(held, float(ndtr((log(forward / 40) - 0.25**2 / 2 * time) / (0.25 * sqrt(time)))), sharp=0.01)


def test_a_disrupted_day_must_be_of_the_past_or_move_on(tmp_path: Path):
    """A level of the future is nobody's to state, and time goes one way."""
    for later in ("2027-05-31", "2027-06-01"):
        text = WORST_OF.replace(
            "payoff:", f"disruption: {{lantern: {{2027-12-01: 43.5, 2027-06-01: {later}}}}}\npayoff:", 1)
        found = faults(tmp_path, text + market() + fixings(LEVELS))
        assert any("lies after the valuation date 2027-09-15" in each for each in found)
        assert any(f"moved to {later}; expected a later date" in each for each in found)


def test_a_level_stated_for_the_valuation_date_counts_on_it():
    """As one of an earlier date would: the coupon is decided by it, not by the spot."""
    early = {key: level for key, level in LEVELS.items() if key[1] < "2027-09"}
    for level, paid in ((30.0, False), (47.0, True)):
        text = WORST_OF.replace(
            "payoff:", f"disruption: {{lantern: {{2027-09-01: {level}}}, harbour: {{2027-09-01: 95}}}}\npayoff:", 1)
        state = prepare(text + market("2027-09-01") + fixings(early)).unrolled.state
        assert any(each.day.date == date(2027, 9, 1) for each in state.payments) == paid


def test_a_split_changes_nothing():
    """Two new shares for one: levels since then count twice, today's spot too; without the adjustment the old result
    stays as it is."""
    plain = WORST_OF + market() + fixings(LEVELS)
    halved = {key: level / 2 if key[0] == "lantern" and key[1] > "2027-05" else level for key, level in LEVELS.items()}
    split = (WORST_OF.replace("payoff:", "adjustments: {lantern: {2027-05-03: 2}}\npayoff:", 1)
             + market().replace("spot: 47", "spot: 23.5") + fixings(halved))
    assert prepare(split).price(4096, SEED).mean == pytest.approx(prepare(plain).price(4096, SEED).mean, rel=1e-12)
    on_the_day = {key: level / 2 if key[0] == "lantern" and key[1] > "2027-03" else level
                  for key, level in LEVELS.items()} | {("lantern", "2027-03-01"): LEVELS["lantern", "2027-03-01"] / 2}
    split = split.replace("2027-05-03: 2}", "2027-03-01: 2}").replace(fixings(halved), fixings(on_the_day))
    assert prepare(split).price(4096, SEED).mean == pytest.approx(prepare(plain).price(4096, SEED).mean, rel=1e-12)
    assert coupons(split) == pytest.approx(coupons(plain))
    announced = plain.replace("payoff:", "adjustments: {lantern: {2028-05-03: 2}}\npayoff:", 1)
    assert prepare(announced).price(4096, SEED).mean == prepare(plain).price(4096, SEED).mean
    assert any("not in force yet" in each for each in prepare(announced).dated.assumptions)


def test_a_split_of_a_watched_asset():
    """The extreme of a continuous watch counts by the factor as well."""
    plain = touch("{2027-06-01: false}")
    split = plain.replace("spot: 92", "spot: 46").replace(
        "payoff:", "adjustments: {harbour: {2027-05-03: 2}}\npayoff:", 1)
    assert prepare(split).price(4096, SEED).mean == pytest.approx(prepare(plain).price(4096, SEED).mean, rel=1e-12)


def test_a_contradiction_names_the_fixing_as_it_was_published(tmp_path: Path):
    """And what it counts as, where an adjustment makes the two differ."""
    split = touch("{2027-06-01: false}").replace(
        "payoff:", "adjustments: {harbour: {2027-05-03: 0.5}}\npayoff:", 1)
    found = faults(tmp_path, split + "fixings: {harbour: {2027-05-05: 91}}\n")
    assert any("harbour was fixed at 91 on 2027-05-05, which counts as 45.5" in each for each in found), found


# Levels to be fixed


@pytest.mark.parametrize(("how", "level"), [
    ("{fixing: 2027-03-01}", {"harbour": 97.5, "lantern": 48.5}),
    ("{average: [2027-03-01, 2027-06-01]}", {"harbour": 96.75, "lantern": 43.375}),
    ("{lowest: {from: 2027-03-01, until: 2027-09-01, every: 3 months}}", {"harbour": 94.25, "lantern": 38.25}),
    ("{highest: [2027-03-01, 2027-09-01]}", {"harbour": 97.5, "lantern": 48.5})])
def test_an_initial_level_that_was_fixed(how: str, level: dict[str, float]):
    """The fixing, or the average, lowest or highest of several, is as good as the number written in."""
    text = WORST_OF.replace("from: 2027-03-01", "from: 2027-12-01").replace(
        "first_call: 2027-06-01", "first_call: 2028-03-01")
    written_in = text.replace("{harbour: 100, lantern: 50}",
                              f"{{harbour: {level['harbour']}, lantern: {level['lantern']}}}")
    fixed = text.replace("{harbour: 100, lantern: 50}", how)
    assert prepare(fixed + market() + fixings(LEVELS)).price(4096, SEED).mean == pytest.approx(
        prepare(written_in + market()).price(4096, SEED).mean, rel=1e-12)


def test_an_initial_level_that_is_still_to_come():
    """It is simulated: a forward-start call by its closed form (M. Rubinstein, "Pay now, choose later", 1991)."""
    text = """contract: c
currency: EUR
units: 1
assets: [harbour]
payoff: european
terms: {side: call, strike: {fixing: 0.5y}, expiry: 1y}
---
market: 0y
rates: {EUR: 2%}
assets: {harbour: {spot: 100, currency: EUR, yield: 1%, vol: 20%}}
"""
    d1 = (0.01 * 0.5 + 0.02 * 0.5) / (0.2 * sqrt(0.5))
    d2 = d1 - 0.2 * sqrt(0.5)
    truth = 100 * exp(-0.01 * 0.5) * (exp(-0.01 * 0.5) * ndtr(d1) - exp(-0.02 * 0.5) * ndtr(d2))
    check(prepare(text).price(1 << 18, SEED), truth, sharp=0.005)


def test_a_level_is_known_on_the_day_of_its_last_fixing():
    """What is decided at that close may read it: the coupon of 2027-03-01 at the mean of two closes, that one too."""
    text = WORST_OF.replace("{harbour: 100, lantern: 50}", "{average: [2026-12-01, 2027-03-01]}")
    levels = LEVELS | {("harbour", "2026-12-01"): 102.5, ("lantern", "2026-12-01"): 51.5}
    state = prepare(text + market() + fixings(levels)).unrolled.state
    assert state.terms["initial"] == pytest.approx((100.0, 50.0)) and state.payments[0].day.date == date(2027, 3, 1)


def test_a_level_is_not_read_before_it_is_fixed(tmp_path: Path):
    """A coupon that needs the initial level stands before its last fixing."""
    text = WORST_OF.replace("{harbour: 100, lantern: 50}", "{average: [2027-03-01, 2028-01-03]}")
    found, *_ = faults(tmp_path, text + market("2026-12-15"))
    assert "'initial' is fixed on 2028-01-03 only and read on 2027-03-01" in found


# Readback


def test_state(tmp_path: Path):
    """Fixings, what happened, paid, owed, running values, what is next, and how far every level is."""
    text = WORST_OF + market("2027-09-02") + fixings(LEVELS)
    state = package.readback(written(tmp_path, text)).state
    assert [(each.date, each.what, each.happened) for each in state.past] == [
        ("2027-03-01", "coupon paid", "yes"), ("2027-06-01", "coupon paid", "no"), ("2027-06-01", "called", "no"),
        ("2027-09-01", "coupon paid", "yes"), ("2027-09-01", "called", "no")]
    assert {(each.asset, each.date): each.level for each in state.fixings} == LEVELS
    assert [(each.date, each.value) for each in state.paid] == [("2027-03-03", 20.0)]
    assert [(each.date, each.value) for each in state.owed] == [("2027-09-03", pytest.approx(40.0))]
    assert [(each.name, each.text) for each in state.running] == [("missed", "0")]
    assert [each.text for each in state.next] == ["2027-12-01: coupon paid, called", "2027-09-03"]
    assert {(each.what, each.asset): (each.level, pytest.approx(each.distance)) for each in state.distances} == {
        ("coupon paid", "harbour"): (pytest.approx(80), 80 / 92 - 1),
        ("coupon paid", "lantern"): (pytest.approx(40), 40 / 47 - 1),
        ("called", "harbour"): (pytest.approx(100), 100 / 92 - 1),
        ("called", "lantern"): (pytest.approx(50), 50 / 47 - 1),
        ("hit", "harbour"): (pytest.approx(60), 60 / 92 - 1), ("hit", "lantern"): (pytest.approx(30), 30 / 47 - 1)}
    shown = mcx("readback", tmp_path / "case.yaml").out
    assert "state on 2027-09-02" in shown and "distance of today's levels" in shown


def test_the_state_of_a_contract_that_cannot_be_valued_is_not_followed(tmp_path: Path):
    """It says why, and what was stated; no next payment and no distance as if nothing had been missed."""
    text = touch("{2027-06-01: false}").replace("payoff: touch", "conversion: {harbour: composite}\npayoff: touch")
    text = text.replace("currency: EUR, yield: 1%", "currency: USD, dividends: [{ex: 2027-09-01, cash: 1}]")
    text = text.replace("rates: {EUR: 2%}", "rates: {EUR: 2%, USD: 3%}")
    text += "fx: {EUR per USD: {spot: 0.9, vol: 8%}}\ncorrelation: {harbour/EUR per USD: 20%}\n"
    state = package.readback(written(tmp_path, text)).state
    assert (state.next, state.distances) == ((), ())
    assert [each.value for each in state.stated] == ["no"] and len(state.not_followed) == 1
    assert f"not followed, since the contract cannot be valued: - {state.not_followed[0]}" in " ".join(
        mcx("readback", tmp_path / "case.yaml").out.split())


def test_calendar(tmp_path: Path):
    """What comes next of all contracts, in order of time; of one that was called only what is owed."""
    called = WORST_OF.replace("contract: note", "contract: other").replace("call_barrier: 100%", "call_barrier: 85%")
    text = WORST_OF + called + market("2027-09-02") + fixings(LEVELS)
    lines = package.readback(written(tmp_path, text), calendar=True).lines
    dates = [each.date for each in lines]
    assert dates == sorted(dates)
    assert [(each.date, each.kind, each.of) for each in lines if each.contract == "other"] == [
        ("2027-09-03", "payment", "coupon (owed)"), ("2027-09-03", "payment", "redemption (owed)")]
    first = [(each.kind, each.of) for each in lines if each.contract == "note" and each.date == "2027-12-01"]
    assert first == [("fixing", "harbour and lantern"), ("decision", "coupon paid"), ("decision", "called")]
    assert len({each.date for each in lines if each.kind == "fixing"}) == 5
    assert "2027-12-01" in mcx("readback", tmp_path / "case.yaml", "--calendar").out


def test_calendar_leaves_out_what_todays_fixings_have_decided(tmp_path: Path):
    """Without them the valuation date is still to come."""
    for known, first in ((LEVELS, "2027-09-03"), ({key: level for key, level in LEVELS.items() if key[1] < "2027-09"},
                                                  "2027-09-01")):
        text = WORST_OF + market("2027-09-01") + fixings(known)
        lines = package.readback(written(tmp_path, text), calendar=True).lines
        assert lines[0].date == first
        assert any(each.of == "redemption (if it is due)" and each.date == "2027-09-03" for each in lines) == (
            first == "2027-09-01")


@pytest.mark.parametrize(("change", "said"), [
    (None, ["coupon", "coupon (if it is due)", "put (if it is due)"]),
    (("{at: seen, if: spot > 100, then: [end]}", "{at: seen, if: spot > 100, then: [pay: 1]}"),
     ["coupon", "payment (if it is due)", "coupon", "put (amount open)"]),
    (("{at: seen, if: spot > 100, then: [end]}", "{at: {once: far}, end}"),
     ["coupon (if it is due)", "coupon (if it is due)", "put (if it is due)"])])
def test_calendar_says_which_payments_are_certain(tmp_path: Path, change: tuple[str, str] | None, said: list[str]):
    """A coupon is, until a condition or an end may come before it; an amount that hangs on levels is open."""
    text = ("payoff: sample\nassets: 1\nterms: {early: {type: date}, seen: {type: date}, expiry: {type: date}}\n"
            "running:\n  far: {ever: spot > 900, at: {continuous: [early, expiry]}}\nevents:\n"
            "  - {at: early, pay: 1, as: coupon}\n  - {at: seen, if: spot > 100, then: [end]}\n"
            "  - {at: expiry, pay: 1, as: coupon}\n  - {at: expiry, pay: \"max(100 - spot, 0)\", as: put}\n---\n"
            "contract: note\ncurrency: EUR\nunits: 1\nassets: [harbour]\nstart: 2026-12-01\n"
            "settlement: 0 business days\ncalendar: {holidays: none, roll: following}\npayoff: sample\n"
            "terms: {early: 2027-03-01, seen: 2027-06-01, expiry: 2027-12-01}\n"
            "---\nmarket: 2026-12-01\nrates: {EUR: 2%}\nassets:\n"
            "  harbour: {spot: 100, currency: EUR, yield: 0%, vol: 20%}\n")
    if change:
        assert change[0] in text
        text = text.replace(*change)
    lines = package.readback(written(tmp_path, text), calendar=True).lines
    assert [each.of for each in lines if each.kind == "payment"] == said


@pytest.mark.parametrize(("asset", "known"), list(product(("harbour", "lantern"), (True, False))))
def test_readback_and_price_ask_for_the_same_fixings(tmp_path: Path, asset: str, known: bool):
    """Both stop, or neither does."""
    left = LEVELS if known else {key: level for key, level in LEVELS.items() if key != (asset, "2027-06-01")}
    file = written(tmp_path, WORST_OF + market() + fixings(left))
    codes = [mcx(verb, file, *more).code for verb, more in (("price", ("--paths", 64)), ("readback", ()),
                                                            ("readback", ("--calendar",)))]
    assert codes == [0 if known else 2] * 3


@pytest.mark.parametrize(("stated", "said"), [
    ("disruption: {lantern: {2027-06-02: 2027-06-03}}", "'lantern' is not observed on 2027-06-02, so that no "
     "observation is moved; the nearest observation is on 2027-06-01"),
    ("happened: {hit: {2027-06-02: true}}", "'hit' is not watched all the time in this contract"),
    ("happened: {missed: {2027-06-02: 1}}", "'missed' is not a running value that can be watched all the time"),
    ("adjustments: {quarry: {2027-06-02: 2}}", "'quarry' is not an asset of the contract"),
    ("adjustments: {lantern: {2027-06-02: -2}}", "expected an amount above 0"),
])
def test_what_changes_nothing_is_refused(tmp_path: Path, stated: str, said: str):
    """A statement that nothing reads is a slip."""
    found = faults(tmp_path, WORST_OF.replace("payoff:", f"{stated}\npayoff:", 1) + market() + fixings(LEVELS))
    assert len(found) == 1 and said in found[0], found


def test_what_must_be_stated_and_what_must_be_fixed_is_told_at_once(tmp_path: Path):
    """A payment that hangs on a watch does not hide the fixings that it needs as well; of a watch that is read on
    several past days the last one is named."""
    text = ("payoff: both\nterms: {watched: {type: watch}, seen: {type: dates}}\nrunning:\n  hit: {ever: spot < 80, "
            "at: watched}\nevents:\n  - {at: seen, if: hit, then: [pay: spot]}\n  - {at: seen.last, pay: spot}\n---\n"
            + touch("").replace("payoff: touch", "payoff: both"))
    start = text.index("terms: {kind")
    text = (text[:start] + "terms: {watched: {continuous: [2026-12-01, 2027-12-01]}, seen: [2027-03-01, 2027-05-03, "
            "2027-12-01]}\n" + text[text.index("---\nmarket"):]).replace("settlement: 0", "settlement: 250")
    found = faults(tmp_path, text.replace("if: hit, then: [pay: spot]", "if: hit or spot < 85, then: [pay: spot]"))
    assert len(found) == 2
    assert any("needs a fixing of 'harbour' on 2027-03-01 and 2027-05-03" in each for each in found)
    assert any("must say what had happened by 2027-05-31 or 2027-06-01" in each for each in found)
    path = written(tmp_path, "harbour: {2027-03-01: 90, 2027-05-03: 88, 2027-12-01: 95}\n", "path.yaml")
    refused(mcx("readback", written(tmp_path, text), "--path", path), "must say what had happened by 2027-05-31")


def test_without_a_market_for_its_past_a_contract_says_what_it_needs():
    """A contract that is dated without history asks for its fixings at its own place."""
    contract = prepare(WORST_OF + market() + fixings(LEVELS)).dated.contract
    dated, _ = date_contract(contract, date(2027, 9, 15))
    assert [fault.place for fault in unroll(dated, nodes=()).faults] == [contract.place] * 2
