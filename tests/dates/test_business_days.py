"""Good business days and where the others roll."""

from __future__ import annotations

from datetime import date

import holidays
import pytest

from mcx.checked.contract import BusinessDays
from mcx.dates.business_days import GoodDays, NotCovered, good_days
from mcx.faults import Place

PLACE = Place("note.yaml", 9, 23)


def good(roll: str = "following", name: str = "ECB") -> GoodDays:
    found, faults = good_days(BusinessDays((name,), roll, PLACE, (PLACE,)))
    assert faults == []
    return found


@pytest.mark.parametrize("bad",
                         ["2027-01-01", "2027-03-26", "2027-03-29", "2026-05-01", "2026-12-25", "2028-12-26"])
def test_ecb_closing_days(bad: str):
    """The ECB closes on New Year's Day, Good Friday, Easter Monday, 1 May and 25 and 26 December (its
    press release of 14 December 2000 on the long-term calendar, from memory)."""
    assert not good().is_good(date.fromisoformat(bad))


@pytest.mark.parametrize("open_day", ["2026-12-24", "2026-12-28", "2027-05-03"])
def test_ecb_open_days(open_day: str):
    """24 December is a good day, and a closing day at the weekend is not made up for."""
    assert good().is_good(date.fromisoformat(open_day))


@pytest.mark.parametrize(
    ("roll", "bad", "rolled"),
    [
        ("following", "2027-03-26", "2027-03-30"),  # Good Friday over Easter Monday
        ("preceding", "2027-03-29", "2027-03-25"),
        ("modified following", "2027-03-27", "2027-03-30"),
        ("following", "2027-07-31", "2027-08-02"),
        ("modified following", "2027-07-31", "2027-07-30"),  # would leave July
        ("modified following", "2027-05-01", "2027-05-03"),
        ("following", "2026-12-25", "2026-12-28"),
        ("modified following", "2027-03-25", "2027-03-25"),  # good already
    ],
)
def test_rolls(roll: str, bad: str, rolled: str):
    """Each convention moves a bad day its own way (2006 ISDA Definitions, section 4.12) and leaves good
    days alone."""
    assert good(roll).rolled(date.fromisoformat(bad)) == date.fromisoformat(rolled)


@pytest.mark.parametrize(
    ("start", "count", "end"),
    [("2027-03-24", 2, "2027-03-30"), ("2026-12-24", 2, "2026-12-29"), ("2026-12-24", 0, "2026-12-24"),
     ("2026-12-26", 0, "2026-12-28")],
)
def test_adding_business_days(start: str, count: int, end: str):
    """Good days are counted from the date, itself rolled; none is added for a count of 0."""
    assert good().add(date.fromisoformat(start), count) == date.fromisoformat(end)


def test_none_means_weekends_only():
    """`none` knows no holidays and names no version."""
    plain = good("following", "none")
    assert plain.is_good(date(2026, 12, 25))
    assert plain.rolled(date(2026, 12, 26)) == date(2026, 12, 28)
    assert plain.version == ""


def test_version_names_the_package_and_the_list():
    """The version string says which package, which version and which list gave the holidays."""
    assert good().version == f"holidays {holidays.__version__} ECB"


def test_unknown_list_is_a_fault_with_a_near_name():
    """A name that the package does not know is a fault at its place."""
    found, faults = good_days(BusinessDays(("XNYSE",), "following", PLACE, (PLACE,)))
    assert found is None
    assert [str(fault) for fault in faults] == ["note.yaml:9:23: there are no holidays 'XNYSE'; did you mean "
                                                "'XNYS'?"]
    _, faults = good_days(BusinessDays(("weekends",), "following", PLACE, (PLACE,)))
    assert "expected 'none' (weekends only)" in faults[0].text


@pytest.mark.parametrize(("name", "year"), [("ECB", 1998), ("ECB", 2101), ("none", 2200), ("none", 1899)])
def test_years_outside_the_list_are_refused(name: str, year: int):
    """A date in a year that the list does not cover never passes for a good day."""
    with pytest.raises(NotCovered, match=f"{year}-06-01 lies outside"):
        good("following", name).is_good(date(year, 6, 1))
