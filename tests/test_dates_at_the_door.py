"""Dates and fixings as a user meets them: what every result says of its calendars, and where slips are shown."""

from __future__ import annotations

from pathlib import Path

import holidays
import pytest
from front_door import mcx, refused, written

NOTE = """contract: note
currency: EUR
notional: 1000
assets: [harbour]
start: 2026-12-01
day_count: 30/360
settlement: 2 business days
calendar: {holidays: ECB, roll: modified following}
payment_calendar: {holidays: [ECB, XNYS], open: in all, roll: following}
payoff: reverse_convertible
terms: {initial: 100, strike: 100%, coupon: 6%, coupon_dates: {from: 2027-02-28, until: 2027-11-30, every: 3 months,
        end_of_month: true}, final: coupon_dates.last, maturity: coupon_dates.last}
---
market: 2026-12-01
rates: {EUR: 2%}
funding: {EUR: 1%}
assets: {harbour: {spot: 92, currency: EUR, yield: 1%, vol: 20%}}
---
quote: Quay Bank
at: 2026-12-01 16:30
side: mid
unit: percent of notional
price: 95%
accrual: dirty
commitment: firm
"""
VERSION = f"holidays {holidays.__version__} ECB; holidays {holidays.__version__} ECB and XNYS for payments"


@pytest.mark.parametrize("command", [
    ("price", "--paths", 4096), ("greeks", "--paths", 4096), ("verify", "--paths", 4096), ("methods", "--paths", 4096),
    ("readback",), ("readback", "--calendar")])
def test_every_result_names_the_lists_of_holidays_and_their_version(tmp_path: Path, command: tuple):
    """As text and as JSON; in records as well."""
    verb, *options = command
    file = written(tmp_path, NOTE)
    shown, data = mcx(verb, file, *options), mcx(verb, file, *options, "--json")
    assert VERSION in " ".join(shown.out.split()) and VERSION in data.out
    if verb in ("price", "greeks", "verify"):
        mcx(verb, file, *options, "--record", tmp_path / "record.json")
        assert VERSION in (tmp_path / "record.json").read_text()


@pytest.mark.parametrize(("table", "said"), [
    (b"date,harbour\n2027-02-26,\xff\n", "closes.csv:2:12: byte 0xff at offset 24 is not UTF-8"),
    (b"date;harbour\n2027-02-26;99\n", "closes.csv:1:1: expected a first line 'date,' and names of assets"),
    (b'date,harbour\n2027-02-26,"4,210.5"\n', "closes.csv:2:12: expected a number, found '4,210.5'; write '4210.5'"),
    (b"date,harbour,harbour\n2027-02-26,99,98\n", "closes.csv:1:14: a second column of 'harbour'"),
    (b"date,harbour\n2027-02-26,99,98\n", "closes.csv:2:1: expected 2 values, found 3"),
    (b"date,harbour\n2027-02-26,0\n", "closes.csv:2:12: expected an amount above 0, found '0'"),
    (b'date,harbour\n2027-02-26,"99\n', "closes.csv:2:1: the line is not CSV"),
    (b"", "closes.csv:1:1: expected a first line 'date,' and names of assets"),
])
def test_slips_in_a_table_of_fixings_are_shown_in_the_table(tmp_path: Path, table: bytes, said: str):
    """File, line and column are the table's own."""
    (tmp_path / "closes.csv").write_bytes(table)
    text = NOTE.replace("market: 2026-12-01", "market: 2027-03-01")
    text = text.replace("---\nquote", "fixings: closes.csv\n---\nquote")
    refused(mcx("price", written(tmp_path, text), "--paths", 64), said)


@pytest.mark.parametrize("table", [
    "\ufeffdate,harbour\r\n2027-02-26,99\r\n", "date, harbour\n2027-02-26 , 99.0\n\n",
    'date,"harbour"\n2027-02-26,"99"\n'])
def test_tables_of_fixings_in_other_hands(tmp_path: Path, table: str):
    """A byte order mark, ends of lines, spaces and quotes change nothing."""
    (tmp_path / "closes.csv").write_bytes(table.encode())
    text = NOTE.replace("market: 2026-12-01", "market: 2027-03-01").replace(
        "initial: 100", "initial: {fixing: 2027-02-26}")
    tabled, inside = (mcx("price", written(tmp_path, text.replace("---\nquote", f"fixings: {how}\n---\nquote")),
                          "--paths", 64, "--json").json for how in ("closes.csv", "{harbour: {2027-02-26: 99}}"))
    assert tabled["price"] == inside["price"]
