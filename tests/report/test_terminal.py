"""Pages: numbers whole at every width, aligned, as many decimals as the error gives reason for."""

from __future__ import annotations

import io
import re
import sys

import pytest
from front_door import EXAMPLES, mcx
from hypothesis import given
from hypothesis import strategies as st

from mcx.report.terminal import Page, decimals, fixed

NUMBER = re.compile(r"-?\d[\d,]*(?:\.\d+)?")


def rendered(monkeypatch: pytest.MonkeyPatch, width: int, fill) -> str:
    """What a page of some width writes."""
    monkeypatch.setenv("COLUMNS", str(width))
    monkeypatch.setattr(sys, "stdout", io.StringIO())
    page = Page()
    fill(page)
    page.write()
    return sys.stdout.getvalue()


HEADS = ("contract", "%", "standard error", "EUR")
ROWS = (("Harbour and Lantern memory autocall 2029", "100.20", "0.28", "1,002,034.99"),
        ("other", "-5.94", "0.24", "-59.00"))


def test_wide_table(monkeypatch: pytest.MonkeyPatch):
    """Words left, numbers right, two columns between, no space at the end of a line."""
    assert rendered(monkeypatch, 100, lambda page: page.table(HEADS, ROWS)).splitlines() == [
        "  contract                                       %  standard error           EUR",
        "  Harbour and Lantern memory autocall 2029  100.20            0.28  1,002,034.99",
        "  other                                      -5.94            0.24        -59.00"]


def test_narrow_table(monkeypatch: pytest.MonkeyPatch):
    """Words go below one another, numbers stay whole."""
    assert rendered(monkeypatch, 56, lambda page: page.table(HEADS, ROWS)).splitlines() == [
        "  contract               %  standard error           EUR",
        "  Harbour and       100.20            0.28  1,002,034.99",
        "  Lantern memory",
        "  autocall 2029",
        "  other              -5.94            0.24        -59.00"]


def test_too_narrow_table(monkeypatch: pytest.MonkeyPatch):
    """As wide as its longest words and its numbers: nothing is broken, nothing left out."""
    lines = rendered(monkeypatch, 10, lambda page: page.table(HEADS, ROWS)).splitlines()
    assert lines[1].split() == ["Harbour", "100.20", "0.28", "1,002,034.99"]
    assert [line.strip() for line in lines[2:6]] == ["and", "Lantern", "memory", "autocall"]


@given(st.integers(1, 120), st.data())
def test_no_width_loses_a_word(width: int, data: st.DataObject):
    """Every word and number of every cell comes through whole, in wide letters too."""
    word = st.text(st.characters(categories=["L", "N"], exclude_characters="\u0130"), min_size=1, max_size=15)
    cells = st.lists(word, min_size=1, max_size=4).map(" ".join)
    rows = data.draw(st.lists(st.tuples(cells, cells, word, word), min_size=1, max_size=4))
    with pytest.MonkeyPatch.context() as patch:
        text = rendered(patch, width, lambda page: page.table(("a", "b", "c", "d"), rows, words=2))
    words = [word for row in (("a", "b", "c", "d"), *rows) for cell in row for word in cell.split()]
    assert sorted(text.split()) == sorted(words)
    assert all(line == line.rstrip(" ") for line in text.splitlines())


def test_empty_table(monkeypatch: pytest.MonkeyPatch):
    """Heads alone."""
    assert rendered(monkeypatch, 80, lambda page: page.table(("a", "b"), ())) == "  a  b\n"


def test_paragraphs(monkeypatch: pytest.MonkeyPatch):
    """Lines wrap at the width of the page, behind dashes and names with an indent; long names are folded, not cut."""
    def fill(page: Page) -> None:
        page.items(["one two three four five six"])
        page.named([("barrier_reverse_convertible_on_three", "[red]a :smile: b[/red]")])

    assert rendered(monkeypatch, 20, fill).splitlines()[:2] == ["- one two three four", "  five six"]
    wide = rendered(monkeypatch, 80, fill)
    assert wide.splitlines()[1:] == ["barrier_reverse_convertible_  [red]a :smile: b[/red]", "on_three"]


@pytest.mark.parametrize("width", [30, 60, 80])
@pytest.mark.parametrize("command", ["price", "readback"])
def test_numbers_survive_every_width(width: int, command: str, monkeypatch: pytest.MonkeyPatch):
    """A price and a readback say the same numbers in the same order within each row, however wide the page is."""
    files = [EXAMPLES / "harbour_lantern.yaml", *(("--paths", 640) if command == "price" else ())]
    monkeypatch.setenv("COLUMNS", "500")
    whole = mcx(command, *files).out
    monkeypatch.setenv("COLUMNS", str(width))
    found = mcx(command, *files).out
    assert "\u2026" not in found
    timing = re.compile(r" in \d+\.\d\d s")
    words = [sorted(NUMBER.findall(timing.sub("", text))) for text in (whole, found)]
    assert words[0] == words[1]


@pytest.mark.parametrize(("error", "digits", "fewest", "shown"), [
    (0.0123, 2, 2, 3), (0.0123, 1, 2, 2), (12.0, 2, 2, 2), (12.0, 2, 0, 0), (1e-6, 2, 2, 7), (1e-30, 2, 2, 10),
    (0.0, 2, 2, 6), (0.0, 1, 2, 2), (float("nan"), 2, 4, 6), (float("inf"), 1, 2, 2), (0.1, 1, 0, 1), (0.0999, 1, 0, 2),
])
def test_decimals(error: float, digits: int, fewest: int, shown: int):
    """As many as show that many digits of the error."""
    assert decimals(error, digits, fewest) == shown


@pytest.mark.parametrize(("number", "places", "shown"), [
    (1234567.891, 2, "1,234,567.89"), (-0.001, 2, "0.00"), (-0.0, 0, "0"), (-0.006, 2, "-0.01"),
    (-1234.5, 1, "-1,234.5"), (-0.0004, 3, "0.000"),
])
def test_fixed(number: float, places: int, shown: str):
    """Thousands parted, and never minus nothing."""
    assert fixed(number, places) == shown and fixed(number, places, "%") == f"{shown} %"
