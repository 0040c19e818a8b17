"""Levels from files: YAML and CSV say the same, and everything wrong is found at once, with its place."""

from __future__ import annotations

from datetime import date
from functools import cache

import pytest
from front_door import CALL, EXAMPLES
from helpers import request_of
from hypothesis import given
from hypothesis import strategies as st

from mcx.checked.load import load
from mcx.dates.dated_contract import DatedContract, Day
from mcx.dates.dating import date_contract
from mcx.report.levels import read_levels


def dated_of(request) -> DatedContract:
    found, faults = date_contract(request.contracts[0], request.market.valuation if request.market else None)
    assert not faults
    return found


@cache
def note() -> DatedContract:
    """Two assets, harbour and lantern, valued on 2026-12-01."""
    return dated_of(load([EXAMPLES / "harbour_lantern.yaml"]))


@cache
def textbook() -> DatedContract:
    return dated_of(request_of(CALL))


def faults_of(text: str, file: str, dated: DatedContract | None = None) -> list[str]:
    """The faults of a file, as they are printed."""
    return [str(fault) for fault in read_levels(text.encode(), file, dated or note())[1]]


YAML = "harbour: {2026-12-01: 4180.2, 2027-02-16: 4101}\nlantern: {2026-12-01: 801.1}\n"
CSV = "date,lantern , harbour\n2026-12-01, 801.1,4180.2\n\n2027-02-16,,4101\n"


@pytest.mark.parametrize(("text", "file"), [(YAML, "levels.yaml"), (CSV, "levels.csv"), (CSV, "LEVELS.CSV"),
                                            (CSV.replace("\n", "\r\n"), "levels.csv"), ("\ufeff" + CSV, "levels.csv")])
def test_yaml_and_csv_say_the_same(text: str, file: str):
    """By asset and day; a day has its time from the valuation date, Actual/365."""
    levels, faults = read_levels(text.encode(), file, note())
    first, second = Day(0.0, date(2026, 12, 1)), Day(77 / 365, date(2027, 2, 16))
    assert faults == []
    assert levels == {"harbour": {first: 4180.2, second: 4101.0}, "lantern": {first: 801.1}}


def test_textbook_levels_go_by_time():
    """Times in place of dates, in both."""
    found = {"harbour": {Day(0.25): 101.0, Day(1.0): 99.0}}
    assert read_levels(b"harbour: {0.25y: 101, 1y: 99}", "l.yaml", textbook()) == (found, [])
    assert read_levels(b"date,harbour\n0.25y,101\n1y,99\n", "l.csv", textbook()) == (found, [])


def test_documents_add_up():
    """One asset in each document is as good as all in one."""
    assert read_levels(b"harbour: {2026-12-01: 1}\n---\nlantern: {2026-12-01: 2}\n", "l.yaml", note())[1] == []


def test_everything_wrong_in_yaml_at_once():
    """Unknown assets, no dates, no levels, twice the same: each at its place."""
    text = ("harbor: {2026-12-01: 1}\nharbour: {2026-13-01: 1, 2026-12-01: -4, 2026-12-02: high, 2026-12-03: 1,\n"
            "  2026-12-03: 2}\nlantern: 801\n")
    found = sorted(faults_of(text, "l.yaml"))
    assert [fault.split(": ")[0] for fault in found] == [
        "l.yaml:1:1", "l.yaml:2:11", "l.yaml:2:38", "l.yaml:2:54", "l.yaml:3:3", "l.yaml:4:10"]
    assert "'harbor' is no asset of the contract; did you mean 'harbour'?" in found[0]


def test_everything_wrong_in_csv_at_once():
    """Line and column of each cell; a line of the wrong length as a whole."""
    text = "date,harbour,zzz\n2026-13-01,1,1\n2026-12-01, -4,1\n2026-12-02,1\n2026-12-03,1,1\n2026-12-03,2,1\n"
    assert faults_of(text, "l.csv") == [
        "l.csv:1:14: 'zzz' is no asset of the contract; expected harbour or lantern, with levels by date",
        *(fault for fault in faults_of(text, "l.csv") if fault.startswith(("l.csv:2:1: ", "l.csv:3:13: "))),
        "l.csv:4:1: expected 3 values, found 2",
        "l.csv:6:1: a second level of 'harbour' on 2026-12-03"]
    assert len(faults_of(text, "l.csv")) == 5


@pytest.mark.parametrize(("text", "file", "said"), [
    ("", "l.yaml", "l.yaml:1:1: the file is empty; expected levels by asset"),
    ("- 1", "l.yaml", "l.yaml:1:1: expected levels by asset"),
    ("harbour: {", "l.yaml", "l.yaml:1:"), ("harbour", "l.yaml", "expected levels by asset and date"),
    ("", "l.csv", "l.csv:1:1: expected a first line 'date,' and the assets, as 'date,harbour,lantern'"),
    ("harbour,date\n", "l.csv", "l.csv:1:1: expected a first line"),
    ("date\n", "l.csv", "l.csv:1:1: expected a first line"),
    ("date,harbour,harbour\n2026-12-01,1,2\n", "l.csv", "l.csv:1:14: a second column of 'harbour'"),
    ("date,harbour\n2026-12-01,1\x00\n", "l.csv", "l.csv:2:13: the character U+0000 is not allowed"),
    ('date,harbour\n2026-12-01,"1\n', "l.csv", "l.csv:2:1: the line is not CSV: unexpected end of data"),
    ("date,harbour\n2026-12-01," + "1" * 200_000, "l.csv", "l.csv:2:1: the line is not CSV: field larger than"),
    ("date,harbour\n2026-12-01,1" + "0" * 400, "l.csv", "l.csv:2:12: "),
])
def test_files_that_are_none(text: str, file: str, said: str):
    """Each with its place and what was expected."""
    found = faults_of(text, file)
    assert found and said in found[0]


anything = st.binary(max_size=60) | st.text("date,hrbou0123456789-.\n\r\"' {}:", max_size=80).map(str.encode)
cells = st.text("0123456789-.,\n\r\" ", max_size=80).map(lambda rest: b"date,harbour\n" + rest.encode())


@given(st.sampled_from(["l.csv", "l.yaml"]), anything | cells)
def test_any_bytes(file: str, data: bytes):
    """Levels or faults, never an exception."""
    levels, faults = read_levels(data, file, note())
    assert set(levels) == {"harbour", "lantern"}
    assert all(fault.place.file == file for fault in faults)
