"""Given levels run through contracts: every payment as a termsheet's own examples would work it out by hand."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from front_door import CALL, EXAMPLES, MARKET, mcx, refused, written
from hypothesis import given
from hypothesis import strategies as st

import mcx as package
from mcx.faults import InputError, RequestError
from mcx.report.results import PathResult

NOTE = EXAMPLES / "harbour_lantern.yaml"
INITIAL = {"harbour": 4210.50, "lantern": 812.40}
DATES = ("2027-02-16", "2027-05-17", "2027-08-16", "2027-11-16", "2028-02-16", "2028-05-16", "2028-08-16", "2028-11-16",
         "2029-02-16", "2029-05-16", "2029-08-16", "2029-11-16")
PAID = ("2027-02-18", "2027-05-19", "2027-08-18", "2027-11-18", "2028-02-18", "2028-05-18", "2028-08-18", "2028-11-20",
        "2029-02-20", "2029-05-18", "2029-08-20", "2029-11-20")  # two business days later


def note_on(folder: Path, *performances: float, best: float = 1.3) -> PathResult:
    """The note where lantern is the worst asset, at these shares of its initial level, from the first date on."""
    rows = [f"{date},{best * INITIAL['harbour']},{share * INITIAL['lantern']}"
            for date, share in zip(DATES, performances, strict=False)]
    levels = written(folder, "\n".join(("date,harbour,lantern", *rows)), "levels.csv")
    return package.readback(NOTE, path=levels).path


def paid(result: PathResult) -> list[tuple[str, str, float]]:
    return [(each.date, each.leg, pytest.approx(each.amount, rel=1e-12)) for each in result.payments]


def test_called_with_the_coupons_missed_before(tmp_path: Path):
    """Two coupons missed below 70 %, remembered, and paid with the call at 95 % on the first date that allows it;
    levels after that are not needed."""
    result = note_on(tmp_path, 1.2, 0.65, 0.69, 1.00)
    assert result.ended == DATES[3]
    assert paid(result) == [(PAID[0], "coupon", 0.019), (PAID[3], "coupon", 3 * 0.019), (PAID[3], "redemption", 1.0)]
    assert result.total == pytest.approx(1.076, rel=1e-12)
    assert [each.value for each in result.payments] == pytest.approx([19_000, 57_000, 1_000_000])
    conditions = {condition.name: condition for condition in result.conditions}
    assert conditions["called"].held and conditions["called"].dates == (DATES[3],)
    assert conditions["coupon paid"].dates == (DATES[0], DATES[3])
    assert not conditions["knocked in"].held and conditions["knocked in"].dates == ()
    assert result.notes == (f"the contract ended on {DATES[3]}; later dates without levels are left out",)


def test_not_called_before_the_first_call_date(tmp_path: Path):
    """High levels before it change nothing but the coupons."""
    result = note_on(tmp_path, 1.5, 1.5, 1.5, *[0.80] * 8, 0.89)
    assert result.ended == "" and len(result.payments) == 13
    assert result.total == pytest.approx(1.0 + 12 * 0.019, rel=1e-12)


def test_knocked_in_at_the_end(tmp_path: Path):
    """Below 60 % on the last date, and only there: the final performance of the worst asset, no coupon."""
    result = note_on(tmp_path, *[0.55] * 11, 0.59)
    assert paid(result) == [(PAID[11], "redemption", 1.0), (PAID[11], "capital at risk", 0.59 - 1.0)]
    held = {condition.name: condition.held for condition in result.conditions}
    assert held == {"coupon paid": False, "called": False, "knocked in": True}


def test_at_the_barrier(tmp_path: Path):
    """At 60 % the note is not knocked in; just below it is."""
    assert note_on(tmp_path, *[0.65] * 11, 0.6000000001).total == pytest.approx(1.0)
    assert note_on(tmp_path, *[0.65] * 11, 0.5999999999).total == pytest.approx(0.6)


def test_missing_levels_are_all_listed(tmp_path: Path):
    """For each asset every date without a level, as long as the contract has not ended."""
    with pytest.raises(InputError) as found:
        note_on(tmp_path, 0.8, 0.8, 0.8, 0.8, 0.8, 0.8, 0.8, 0.8, 0.8, 0.8)
    faults = found.value.faults
    assert [str(fault.place).rpartition("/")[2] for fault in faults] == ["levels.csv:1:1"] * 2
    assert all(f"of '{asset}' for 2029-08-16 and 2029-11-16; " in fault.text
               for asset, fault in zip(INITIAL, faults, strict=True))


def test_a_gap_before_the_end_counts(tmp_path: Path):
    """The contract ends on the fourth date, but the second is missing: no answer."""
    levels = "".join(f"{date},{INITIAL['harbour']},{INITIAL['lantern']}\n" for date in (DATES[0], *DATES[2:4]))
    file = written(tmp_path, "date,harbour,lantern\n" + levels, "levels.csv")
    with pytest.raises(InputError, match="no level of 'harbour' for 2027-05-17, "):
        package.readback(NOTE, path=file)


def test_a_missing_level_decides_nothing(tmp_path: Path):
    """Not even where a condition says 'not': the end that it would bring about on that date does not count."""
    own = ("payoff: own\nabout: ends early\nterms: {dates: {type: dates}}\nevents:\n  - at: dates\n    name: out\n"
           "    if: not spot < 100\n    then:\n      - pay: 1\n      - end\n")
    contract = CALL.replace("european", "own").replace("{side: call, strike: 100, expiry: 1y}",
                                                       "{dates: {count: 2, until: 1y}}")
    files = written(tmp_path, contract), written(tmp_path, own, "own.yaml")
    with pytest.raises(InputError, match="no level of 'harbour' for 0.5y; "):
        package.readback(*files, path=written(tmp_path, "harbour: {1y: 90}", "levels.yaml"))
    assert package.readback(*files, path=written(tmp_path, "harbour: {0.5y: 100}", "levels.yaml")).path.ended == "0.5y"


BARRIER = """contract: Barrier
currency: EUR
units: 2
assets: [harbour]
payoff: barrier
terms: {side: call, direction: down, knock: out, strike: 100, barrier: 90, watched: {continuous: [0y, 1y]}, expiry: 1y,
  rebate: 3}
"""


@pytest.mark.parametrize(("between", "amount"), [(90.5, 12.5), (90.0, 3.0), (60.0, 3.0)])
def test_continuous_watching_looks_at_what_is_given(tmp_path: Path, between: float, amount: float):
    """The extreme of the given levels, said so; no model fills the gaps, and money is for all units."""
    levels = written(tmp_path, f"harbour: {{0y: 100, 0.5y: {between}, 1y: 112.5}}", "levels.yaml")
    result = package.readback(written(tmp_path, BARRIER), path=levels).path
    assert [(each.date, each.amount, each.value) for each in result.payments] == [("1y", amount, 2 * amount)]
    assert result.notes == ("harbour is watched all the time; here only the given levels from 0y to 1y were looked at",)


@pytest.mark.parametrize(("between", "amount"), [(119.5, 12.5), (120.0, 3.0), (180.0, 3.0)])
def test_a_barrier_above_looks_at_the_highest(tmp_path: Path, between: float, amount: float):
    """The highest of the given levels touches it, wherever in the stretch it stands."""
    levels = written(tmp_path, f"harbour: {{0y: 100, 0.5y: {between}, 1y: 112.5}}", "levels.yaml")
    up = BARRIER.replace("direction: down", "direction: up").replace("barrier: 90", "barrier: 120")
    payments = package.readback(written(tmp_path, up), path=levels).path.payments
    assert [(each.date, each.amount) for each in payments] == [("1y", amount)]


def test_both_ends_of_a_watch_are_needed(tmp_path: Path):
    """Without them the stretch is not covered."""
    levels = written(tmp_path, "harbour: {0.5y: 95}", "levels.yaml")
    with pytest.raises(InputError, match="no level of 'harbour' for 0y and 1y"):
        package.readback(written(tmp_path, BARRIER), path=levels)


ASIAN = """contract: Asian
currency: EUR
units: 1
assets: [harbour]
payoff: asian
terms: {side: call, average_type: KIND, strike_type: fixed, strike: 100, averaging: {count: 4, until: 1y}, expiry: 1y}
"""


@given(st.lists(st.floats(1.0, 1000.0), min_size=4, max_size=4), st.sampled_from(["arithmetic", "geometric"]))
def test_averages(tmp_path_factory: pytest.TempPathFactory, levels: list[float], kind: str):
    """Of any levels, as numpy takes them."""
    folder = tmp_path_factory.getbasetemp()
    file = written(folder, "date,harbour\n" + "".join(f"{(k + 1) / 4}y,{x!r}\n" for k, x in enumerate(levels)), "l.csv")
    total = package.readback(written(folder, ASIAN.replace("KIND", kind)), path=file).path.total
    average = np.mean(levels) if kind == "arithmetic" else np.exp(np.mean(np.log(levels)))
    assert total == pytest.approx(max(average - 100.0, 0.0), rel=1e-9, abs=1e-9)


def test_levels_that_nothing_looks_at(tmp_path: Path):
    """Said, not silently dropped."""
    levels = written(tmp_path, "harbour: {0.25y: 1, 1y: 130}", "levels.yaml")
    result = package.readback(written(tmp_path, CALL), path=levels).path
    assert (result.total, result.notes) == (30.0, ("not looked at: harbour on 0.25y",))


def test_no_market_changes_a_payment(tmp_path: Path):
    """Amounts are undiscounted and no model enters: with a market and without one the same."""
    levels = written(tmp_path, "harbour: {1y: 130}", "levels.yaml")
    both = [package.readback(written(tmp_path, text), path=levels).path for text in (CALL, CALL + MARKET)]
    assert both[0] == both[1]


def test_on_the_terminal_and_in_json(tmp_path: Path):
    """Payments with their dates, the sum, conditions, the end."""
    rows = "".join(f"{date},{INITIAL['harbour']},{INITIAL['lantern']}\n" for date in DATES[:4])
    file = written(tmp_path, "date,harbour,lantern\n" + rows, "levels.csv")
    outcome = mcx("readback", NOTE, "--path", file)
    words = " ".join(outcome.out.split())
    assert outcome.code == 0
    for said in (f"{PAID[3]} redemption 1 1,000,000.00", "sum undiscounted 1.076 1,076,000.00",
                 f"called: yes on {DATES[3]}", "knocked in: no", f"ended early: {DATES[3]}"):
        assert said in words
    assert mcx("readback", NOTE, "--path", file, "--json").json["path"]["ended"] == DATES[3]


def test_wrong_requests(tmp_path: Path):
    """Levels for two contracts, no such file, and faults of contract files before those of levels."""
    file = written(tmp_path, "harbour: {1y: 130}", "levels.yaml")
    with pytest.raises(RequestError, match="one contract at a time; the files hold 2"):
        package.readback(EXAMPLES / "autocall.yaml", path=file)
    call, wrong = written(tmp_path, CALL), written(tmp_path, "x: {1y: -1}", "l.yaml")
    refused(mcx("readback", call, "--path", tmp_path / "none.csv"), "none.csv: the levels cannot be read")
    refused(mcx("readback", call, "--path", wrong), "l.yaml:1:1: ")
