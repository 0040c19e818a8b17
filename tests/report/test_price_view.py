"""The terminal view of prices, from results made by hand."""

from __future__ import annotations

import io
import sys
from dataclasses import replace

import pytest
from front_door import EXAMPLES, SEED

import mcx as package
from mcx.report.price_view import headline, show_price, show_prices
from mcx.report.results import Condition, Likelihood, PriceResult, PriceTable
from mcx.report.terminal import Page


@pytest.fixture(scope="module")
def note() -> PriceResult:
    return package.price(EXAMPLES / "harbour_lantern.yaml", paths=1000, seed=SEED)


def shown(monkeypatch: pytest.MonkeyPatch, view, result) -> str:
    monkeypatch.setenv("COLUMNS", "120")
    monkeypatch.setattr(sys, "stdout", io.StringIO())
    page = Page()
    view(result, page)
    page.write()
    return sys.stdout.getvalue()


@pytest.mark.parametrize(("price", "error", "percent", "said"), [
    (0.98331, 0.0001, True, "98.33 % ± 0.02 % (sampling error only)"),
    (0.98331, 0.00001, True, "98.331 % ± 0.002 % (sampling error only)"),
    (1.0, 0.0, True, "100.00 % ± 0.00 % (sampling error only)"),
    (10.4506, 0.01, False, "10.4506 EUR per unit ± 0.0196 (sampling error only)"),
    (-0.00001, 0.1, True, "0.00 % ± 19.60 % (sampling error only)"),
    (10.45061234, 1e-6, False, "10.450612 EUR per unit ± 0.000002 (sampling error only)"),
])
def test_headline(note: PriceResult, price: float, error: float, percent: bool, said: str):
    """Price and half-width of the 95 % interval, in the unit of the price, with as many decimals as the error says."""
    half = 1.959963984540054 * error
    size = {} if percent else {"notional": None, "units": 1.0}
    result = replace(note, price=price, standard_error=error, interval95=(price - half, price + half), **size)
    assert headline(result) == said


def test_probabilities_by_date(note: PriceResult, monkeypatch: pytest.MonkeyPatch):
    """A row for each date, a column for each condition, the ends beside them; four conditions to a table."""
    conditions = tuple(
        Condition(f"event {k}", k / 10, 0.01, (Likelihood("0.5y", k / 100, 0.01), Likelihood("10y", k / 50, 0.02)))
        for k in range(1, 6))
    result = replace(note, conditions=conditions, ends=(Likelihood("0.5y", 0.25, 0.03),),
                     reached_maturity=Likelihood("", 0.75, 0.03))
    lines = [line.split() for line in shown(monkeypatch, show_price, result).splitlines()]
    first = lines.index("event 1 event 2 event 3 event 4 ends here".split())
    rows = [" ".join(line) for line in lines[first:first + 7]]
    assert rows[1:] == ["ever 10.00 % 20.00 % 30.00 % 40.00 % 25.00 %", "0.5y 1.00 % 2.00 % 3.00 % 4.00 % 25.00 %",
                        "10y 2.00 % 4.00 % 6.00 % 8.00 %", "not ended early 75.00 %", "event 5", "ever 50.00 %"]
    assert "standard errors of at most 3.000 %" in shown(monkeypatch, show_price, result)


def test_facts(note: PriceResult, monkeypatch: pytest.MonkeyPatch):
    """The value in currency with its error, for how much; how many paths and why; the seed."""
    result = replace(note, value=984_285.104, value_standard_error=2753.8, expected_life=1.81849,
                     expected_life_standard_error=0.01)
    words = " ".join(shown(monkeypatch, show_price, result).split())
    assert "value 984,285.10 EUR for 1,000,000 EUR notional, standard error 2,753.80 standard error" in words
    assert "paths 1,000 in " in words and "asked for: 1,000 paths" in words
    assert f"seed {SEED}; variance reduction: none" in words and "expected life 1.818 years" in words


def test_legs_with_a_sum(note: PriceResult, monkeypatch: pytest.MonkeyPatch):
    """Each leg with its own error, then the price; one leg alone needs no sum."""
    lines = shown(monkeypatch, show_price, note).splitlines()
    row = next(line for line in lines if line.startswith("  sum"))
    assert row.split()[1] == f"{100 * note.price:.2f}"
    alone = replace(note, legs=note.legs[:1], parts=())
    assert "\n  sum" not in shown(monkeypatch, show_price, alone)


def test_what_holds_for_all_is_said_once(note: PriceResult, monkeypatch: pytest.MonkeyPatch):
    """In a table a sentence that not every contract shares stands behind the titles of those that do."""
    other = replace(note, contract="Other", warnings=("odd",), limits=note.limits[:1])
    text = shown(monkeypatch, show_prices, PriceTable((note, other)))
    flat = " ".join(text.split())
    assert "- Other: odd" in flat
    assert f"- {note.limits[0]}" in flat and f"- {note.contract}: {note.limits[1]}" in flat
    assert flat.count("not advice, not an offer") == 1
    assert "interrupted" not in text and "not valued" not in text


def test_a_table_has_a_column_of_units(note: PriceResult, monkeypatch: pytest.MonkeyPatch):
    """Headed, and whole on a narrow page beside long titles."""
    note = replace(note, contract="Harbour, Quarry and Orchard memory autocall with a very long title indeed")
    option = replace(note, contract="Option", notional=None, units=1.0)
    lines = shown(monkeypatch, show_prices, PriceTable((note, option))).splitlines()
    assert lines[0].split()[:3] == ["contract", "unit", "price"]
    end = lines[0].index("unit") + len("unit")
    assert lines[1][:end].endswith(" %") and next(line for line in lines if "Option" in line)[:end].endswith(" per unit")


def test_an_interrupted_price_is_marked(note: PriceResult, monkeypatch: pytest.MonkeyPatch):
    """Before the number, in its row of a table, and with the contracts that were not reached."""
    stopped = replace(note, interrupted=True)
    assert shown(monkeypatch, show_price, stopped).startswith("interrupted: the estimate so far\n")
    text = shown(monkeypatch, show_prices, PriceTable((note, replace(stopped, contract="Second")), ("Third", "Fourth")))
    assert "Second (interrupted)" in text and "not valued: Third, Fourth" in text


def test_exact_prices_show_their_digits(note: PriceResult, monkeypatch: pytest.MonkeyPatch):
    """Without an error there is nothing to round by: six decimals."""
    exact = replace(note, standard_error=0.0, value_standard_error=0.0, interval95=(note.price, note.price))
    text = shown(monkeypatch, show_price, exact)
    assert f"95 % interval   {100 * note.price:.6f} to {100 * note.price:.6f} %" in text
