"""What single texts mean: values exactly, and faults with what was found and what was expected."""

from __future__ import annotations

import datetime
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.faults import Fault, Place
from mcx.text import scalars
from mcx.text.located import Mapping, Scalar, Sequence

PLACE = Place("f.yaml", 3, 7)


def plain(text: str) -> Scalar:
    return Scalar(text, PLACE)


def fault(value: object) -> str:
    assert isinstance(value, Fault)
    assert value.place == PLACE
    return value.text


@pytest.mark.parametrize(
    ("text", "value"),
    [("100", 100.0), ("-3.5", -3.5), ("+1", 1.0), (".5", 0.5), ("1.", 1.0), ("1e-4", 1e-4), ("2E3", 2000.0), ("0", 0.0),
     ("70%", 0.7), ("1.9 %", 0.019), ("25 bp", 0.0025), ("25bp", 0.0025), ("0.1%", 0.001), ("-20%", -0.2)],
)
def test_numbers(text, value):
    """A number is the double nearest to what was written, its unit included: 1.9% is 0.019 itself."""
    assert scalars.number(plain(text)) == value


@given(st.integers(-10**6, 10**6), st.integers(0, 6), st.sampled_from(["", "%", " bp"]))
def test_units_round_once(whole, places, unit):
    """Digits and unit together are rounded once, whatever the digits are."""
    text = f"{Fraction(whole, 10**places).numerator / Fraction(whole, 10**places).denominator:.{places}f}"
    scale = {"": 1, "%": 100, " bp": 10_000}[unit]
    assert scalars.number(plain(text + unit)) == float(Fraction(text) / scale)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("abc", "expected a number, found 'abc'"),
        ("", "expected a number, found nothing"),
        (".nan", "expected a finite number, found '.nan'"),
        ("inf", "expected a finite number, found 'inf'"),
        ("1e999", "expected a finite number, found '1e999'; it is too large"),
        ("1_000", "expected a number, found '1_000'; write '1000'"),
        ("1,000.50", "expected a number, found '1,000.50'; write '1000.50'"),
        ("1,000", "expected a number, found '1,000'; write '1000'"),
        ("250,000", "expected a number, found '250,000'; write '250000'"),
        ("1,125", "expected a number, found '1,125'; write '1125' or '1.125'"),
        ("2,500%", "expected a number, found '2,500%'; write '2500%' or '2.500%'"),
        ("4210,50", "expected a number, found '4210,50'; write '4210.50'"),
        ("-,5 %", "expected a number, found '-,5 %'; write '-0.5 %'"),
        ("1,00,00", "expected a number, found '1,00,00'"),
        ("80bps", "expected a number, found '80bps'; write '80 bp'"),
        ("12.5 basis points", "expected a number, found '12.5 basis points'; write '12.5 bp'"),
        ("010", "expected a number, found '010'; write it without the leading zero"),
        ("0x1f", "expected a number, found '0x1f'"),
        ("12:30", "expected a number, found '12:30'"),
        ("٣", "expected a number, found '٣'"),
        ("1e9999999", "expected a number, found '1e9999999'"),
        ("9" * 500, "expected a number, found '" + "9" * 59 + "…'"),
    ],
)
def test_what_is_no_number(text, words):
    """Everything that some reader might take for another number is refused."""
    assert fault(scalars.number(plain(text))) == words


def test_quoted_texts_are_no_numbers():
    """A quoted number is a text, and the fault says how to write it."""
    words = fault(scalars.number(Scalar("100", PLACE, quoted=True)))
    assert words == "expected a number, found '100'; write it without quotes"


def test_lists_and_mappings_are_no_scalars():
    """Every function takes any node and says what it found."""
    for parse in (scalars.number, scalars.percent, scalars.flag, scalars.date, scalars.time, scalars.tenor,
                  scalars.period, scalars.word):
        assert fault(parse(Sequence((), PLACE))).endswith("found a list")
        assert fault(parse(Mapping((), PLACE))).endswith("found a mapping")


@pytest.mark.parametrize(("text", "value"), [("70%", 0.7), ("25 bp", 0.0025), ("0", 0.0), ("0.0", 0.0), ("-5%", -0.05)])
def test_percentages(text, value):
    """A percentage carries its unit; a bare zero needs none."""
    assert scalars.percent(plain(text)) == value


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("70", "expected a percentage with its unit, found '70'; write '70%'"),
        ("0.7", "expected a percentage with its unit, found '0.7'; write '70%' or '0.7%'"),
        ("x", "expected a percentage such as '70%' or '25 bp', found 'x'"),
    ],
)
def test_bare_percentages_are_refused(text, words):
    """A bare 70 or 0.7 is not guessed at."""
    assert fault(scalars.percent(plain(text))) == words


def test_flags():
    """Only true and false are flags; what other readers take for them is named."""
    assert scalars.flag(plain("true")) is True
    assert scalars.flag(plain("false")) is False
    assert fault(scalars.flag(plain("yes"))) == "expected true or false, found 'yes'; write true"
    assert fault(scalars.flag(plain("Off"))) == "expected true or false, found 'Off'; write false"
    assert fault(scalars.flag(plain("TRUE"))) == "expected true or false, found 'TRUE'; write true"
    assert fault(scalars.flag(plain("1"))) == "expected true or false, found '1'"
    assert fault(scalars.flag(Scalar("true", PLACE, quoted=True))) == "expected true or false, found 'true'"


def test_dates():
    """ISO dates that exist."""
    assert scalars.date(plain("2028-02-29")) == datetime.date(2028, 2, 29)
    assert fault(scalars.date(plain("2026-02-29"))) == "expected a day of the calendar, found '2026-02-29'"
    assert fault(scalars.date(plain("16.11.2026"))) == (
        "expected a date such as '2026-11-16', found '16.11.2026'; write '2026-11-16'")
    assert fault(scalars.date(plain("20261116"))) == "expected a date such as '2026-11-16', found '20261116'"


def test_times_tenors_and_periods():
    """Times are years; tenors and periods are a count and a unit."""
    assert scalars.time(plain("0.25y")) == 0.25
    assert scalars.time(plain("3m")) == 0.25
    assert scalars.time(plain("0y")) == 0.0
    assert fault(scalars.time(plain("2w"))).startswith("expected a time in years or months")
    assert scalars.tenor(plain("18m")) == (18.0, "month")
    assert scalars.tenor(plain("1.5y")) == (1.5, "year")
    assert scalars.tenor(plain("2w")) == (2.0, "week")
    assert fault(scalars.tenor(plain("1q"))) == "expected a tenor such as '2w', '3m' or '1y', found '1q'"
    assert scalars.period(plain("3 months")) == (3, "month")
    assert scalars.period(plain("1 business day")) == (1, "business day")
    assert fault(scalars.period(plain("3m"))).startswith("expected a period such as '3 months'")


def test_words():
    """Words come on one line; an empty text is none."""
    assert scalars.word(plain("a \n  b")) == "a b"
    assert fault(scalars.word(Scalar(" ", PLACE, quoted=True))).startswith("expected a word or a line of text")


@given(st.text(max_size=60), st.booleans())
def test_no_text_raises(text, quoted):
    """Every function gives a value or a fault for whatever text."""
    node = Scalar(text, PLACE, quoted)
    for parse in (scalars.number, scalars.percent, scalars.flag, scalars.date, scalars.time, scalars.tenor,
                  scalars.period, scalars.word):
        value = parse(node)
        assert not isinstance(value, Fault) or "\n" not in value.text
