"""What a text can mean: numbers, flags, dates, times, tenors, periods and words.

Every function takes the node found and gives its value, or a `Fault` that says what was found and what was expected.
"""

from __future__ import annotations

import datetime
import math
import re

from mcx.faults import Fault
from mcx.text.located import Mapping, Node, Scalar, Sequence

DIGITS = r"(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)"
NUMBER = re.compile(rf"([+-]?)({DIGITS})(?:[eE]([+-]?[0-9]{{1,5}}))?(?:\s*(%|bp))?")
NOT_FINITE = re.compile(r"[+-]?\.?(nan|inf|infinity)", re.IGNORECASE)
SPLIT_THOUSANDS = re.compile(r"[+-]?[0-9]+(?:[_,' ][0-9]{3})+(?:\.[0-9]*)?\s*(?:%|bp)?")
DECIMAL_COMMA = re.compile(r"([+-]?[0-9]*),([0-9]+)(\s*(?:%|bp)?)")
BASIS_POINTS = re.compile(rf"([+-]?{DIGITS})\s*(?:bps|bip|basis points?)", re.IGNORECASE)
DOTTED_DATE = re.compile(r"([0-9]{1,2})\.([0-9]{1,2})\.([0-9]{4})")
DATE = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}")
SPAN = re.compile(rf"({DIGITS})([dwmy])")
PERIOD = re.compile(r"([0-9]{1,5}) +(business day|day|week|month|year)s?")

SHIFT = {None: 0, "%": -2, "bp": -4}
UNITS = {"d": "day", "w": "week", "m": "month", "y": "year"}
YES_NO = {"yes": "true", "on": "true", "y": "true", "no": "false", "off": "false", "n": "false"}
MOST_SHOWN = 60


def shown(node: Node) -> str:
    """How a message calls what was found: the text in quotes, 'a list', 'a mapping' or 'nothing'."""
    match node:
        case Sequence():
            return "a list"
        case Mapping():
            return "a mapping"
        case Scalar() if node.absent:
            return "nothing"
    return f"'{shortened(node.text)}'"


def shortened(text: str) -> str:
    """The text on one line, cut when it is long."""
    line = " ".join(text.split())
    return line if len(line) <= MOST_SHOWN else line[: MOST_SHOWN - 1] + "…"


def expected(what: str, node: Node, hint: str = "") -> Fault:
    """The fault 'expected WHAT, found …' at a node, with an optional hint."""
    return Fault(node.place, f"expected {what}, found {shown(node)}" + (f"; {hint}" if hint else ""))


def scaled(digits: str, exponent: int, unit: str | None) -> float:
    """The double nearest to a decimal number with its unit ('%', 'bp' or none), so that 1.9% is 0.019 itself."""
    return float(f"{digits}e{exponent + SHIFT[unit]}")


def number(node: Node) -> float | Fault:
    """A number: `1.5`, `-2e3`, `70%`, `25 bp`."""
    return _number(node, "a number")[0]


def percent(node: Node) -> float | Fault:
    """A number written with its unit, `70%` or `25 bp`; a bare 0 needs none."""
    value, unit = _number(node, "a percentage such as '70%' or '25 bp'")
    if isinstance(value, Fault) or unit or value == 0:
        return value
    hint = f"write '{node}%'" if abs(value) > 2 else f"write '{100 * value:.12g}%' or '{node}%'"
    return expected("a percentage with its unit", node, hint)


def _number(node: Node, what: str) -> tuple[float | Fault, str]:
    if not isinstance(node, Scalar) or node.absent:
        return expected(what, node), ""
    text = node.text
    if node.quoted:
        bare = NUMBER.fullmatch(text)
        return expected(what, node, "write it without quotes" if bare else ""), ""
    found = NUMBER.fullmatch(text) if len(text) < 400 else None
    if not found:
        if NOT_FINITE.fullmatch(text):
            return expected("a finite number", node), ""
        return expected(what, node, _meant(text)), ""
    sign, digits, exponent, unit = found.groups()
    if re.match("0[0-9]", digits):
        return expected(what, node, "write it without the leading zero"), ""
    value = scaled(sign + digits, int(exponent or 0), unit)
    if not math.isfinite(value):
        return expected("a finite number", node, "it is too large"), ""
    return value, unit or ""


def _meant(text: str) -> str:
    """What to write instead of a number as termsheets print it, or ''."""
    meant = []
    if SPLIT_THOUSANDS.fullmatch(text):
        meant.append(re.sub("[_,' ]", "", text))
    comma = DECIMAL_COMMA.fullmatch(text)
    if comma and not (meant and not comma[3] and comma[2].endswith("0")):  # nobody writes 250 as '250,000'
        whole = comma[1] if comma[1][-1:].isdigit() else f"{comma[1]}0"
        meant.append(f"{whole}.{comma[2]}{comma[3]}")
    if points := BASIS_POINTS.fullmatch(text):
        meant.append(f"{points[1]} bp")
    return f"write {' or '.join(map(repr, meant))}" if meant else ""


def flag(node: Node) -> bool | Fault:
    """`true` or `false`."""
    if isinstance(node, Scalar) and not node.quoted:
        if node.text in ("true", "false"):
            return node.text == "true"
        lower = node.text.lower()
        meant = lower if lower in ("true", "false") else YES_NO.get(lower)
        if meant:
            return expected("true or false", node, f"write {meant}")
    return expected("true or false", node)


def date(node: Node) -> datetime.date | Fault:
    """A calendar date, `2026-11-16`."""
    what = "a date such as '2026-11-16'"
    if not isinstance(node, Scalar) or not DATE.fullmatch(node.text):
        return expected(what, node, date_meant(node))
    try:
        return datetime.date.fromisoformat(node.text)
    except ValueError:
        return expected("a day of the calendar", node)


def date_meant(node: Node) -> str:
    """How to write a date whose day and month come first, parted by points, or ''."""
    found = DOTTED_DATE.fullmatch(node.text) if isinstance(node, Scalar) else None
    return f"write '{found[3]}-{found[2]:0>2}-{found[1]:0>2}'" if found else ""


def time(node: Node) -> float | Fault:
    """A time in years: `0.25y`, `3m`, `0y`."""
    found = SPAN.fullmatch(node.text) if isinstance(node, Scalar) and len(node.text) < 40 else None
    if not found or found[2] not in "my":
        return expected("a time in years or months such as '0.25y' or '3m'", node)
    return float(found[1]) / (12 if found[2] == "m" else 1)


def tenor(node: Node) -> tuple[float, str] | Fault:
    """A tenor as count and unit (day, week, month, year): `1d`, `2w`, `18m`, `1.5y`."""
    found = SPAN.fullmatch(node.text) if isinstance(node, Scalar) and len(node.text) < 40 else None
    if not found:
        return expected("a tenor such as '2w', '3m' or '1y'", node)
    return float(found[1]), UNITS[found[2]]


def period(node: Node) -> tuple[int, str] | Fault:
    """A period as count and unit (business day, day, week, month, year): `3 months`, `1 business day`."""
    found = PERIOD.fullmatch(node.text) if isinstance(node, Scalar) else None
    if not found:
        return expected("a period such as '3 months' or '1 business day'", node)
    return int(found[1]), found[2]


def word(node: Node) -> str | Fault:
    """A text that is not empty, on one line."""
    if not isinstance(node, Scalar) or not node.text.strip():
        return expected("a word or a line of text", node)
    return " ".join(node.text.split())
