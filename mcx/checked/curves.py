"""Quoted numbers and curves of a market document, and what makes them implausible.

A number may stand alone or as `{value:, uncertain:, source:, as_of:}`; a curve is a flat number or numbers by
tenor or date. Limits are there to catch slips of the pen (17 for 17%), not to judge markets.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace

from mcx.checked.day_count_names import day_count_name
from mcx.checked.market import Curve, Node as Point, Quoted, RateConvention
from mcx.checked.reading import check_keys, one_of, read, text_of, value_of
from mcx.checked.values import amount
from mcx.faults import Fault
from mcx.text.located import Mapping, Node, Scalar
from mcx.text.scalars import DATE, date, date_meant, expected, number, percent, tenor

MONTHS = {"month": 1, "year": 12}
DAYS = {"day": 1, "week": 7}
LEAST_RATE, MOST_RATE = -0.5, 1.0
MOST_VOL = 3.0
MOST_DISCOUNT = 1.5
STRIKES_WRITTEN = "'{strikes: {80%: {1y: 21%}, 100%: {1y: 18%}}, priced_at: 100%}'"
COMPOUNDING = ("continuous", "annual", "simple")
UNSAID = RateConvention()  # how rates are meant about which nothing is said
FLAT_DAY_COUNTS = ("Actual/365 (Fixed)", "Actual/360")  # those by which a year is always as long

Number = Callable[[Node], float | Fault]


def rate(node: Node) -> float | Fault:
    """A rate, spread or yield with its unit."""
    value = percent(node)
    if not isinstance(value, Fault) and not LEAST_RATE <= value <= MOST_RATE:
        return expected(f"a rate from {LEAST_RATE:.0%} to {MOST_RATE:.0%}", node, "is the unit right?")
    return value


def vol(node: Node) -> float | Fault:
    """A Black vol with its unit."""
    value = percent(node)
    if not isinstance(value, Fault) and not 0 < value <= MOST_VOL:
        return expected(f"a vol above 0% and up to {MOST_VOL:.0%}", node,
                        "is the unit right?" if value > 0 else "")
    return value


def correlation(node: Node) -> float | Fault:
    """A correlation with its unit."""
    value = percent(node)
    if not isinstance(value, Fault) and not -1 <= value <= 1:
        return expected("a correlation from -100% to 100%", node)
    return value


def discount_factor(node: Node) -> float | Fault:
    """A discount factor, a plain number."""
    value = number(node)
    if not isinstance(value, Fault) and not 0 < value <= MOST_DISCOUNT:
        return expected(f"a discount factor above 0 and up to {MOST_DISCOUNT}", node)
    return value


FORMS: dict[str, Number] = {"zero": rate, "vol": vol, "discount": discount_factor, "forward": amount}


@dataclass(slots=True)
class MarketReader:
    """Reads numbers and curves as seen from one valuation date (None in textbook markets); collects
    faults."""

    valuation: datetime.date | None
    textbook: bool
    faults: list[Fault] = field(default_factory=list)

    def quoted(self, node: Node, parse: Number) -> Quoted | None:
        """A number, alone or with what is said about it."""
        if not isinstance(node, Mapping):
            value = value_of(node, parse, self.faults)
            return None if value is None else Quoted(value, node.place)
        before = len(self.faults)
        check_keys(node, ("uncertain", "source", "as_of"), ("value",), self.faults, "a quoted number")
        value = read(node, "value", parse, self.faults)
        uncertain = read(node, "uncertain", half_width(parse), self.faults)
        source, as_of = (text_of(node, key, self.faults) for key in ("source", "as_of"))
        if len(self.faults) > before:
            return None
        return Quoted(value, node.get("value").place, uncertain, source, as_of)

    def curve(self, node: Node, form: str, factors: bool = False) -> Curve | None:
        """A flat number, or numbers by tenor or date; with `factors` also `{discount_factors: {...}}`."""
        if not isinstance(node, Mapping) or "value" in node:
            if form == "forward":
                self.faults.append(expected("forwards by tenor or date, as '{1y: 4260.5}'", node))
                return None
            flat = self.quoted(node, FORMS[form])
            return None if flat is None else Curve(form, (Point(0.0, "", flat),), node.place)
        if "discount_factors" in node:
            return self._factors(node, factors)
        if "zero_rates" in node:
            return self._zero_rates(node, factors)
        beside = [key for key in ("compounding", "day_count") if key in node] if factors else []
        if beside:
            text = (f"'{beside[0]}' stands beside the rates, not among them: '{{zero_rates: {{1y: 2.1%}}, compounding: "
                    "annual}'")
            self.faults.append(Fault(node.key(beside[0]).place, text))
            return None
        return self.curve_of(node, form)

    def _factors(self, node: Mapping, factors: bool) -> Curve | None:
        inner = node.get("discount_factors")
        if not factors:
            self.faults.append(Fault(node.key("discount_factors").place,
                                     "discount factors stand for rates only"))
        elif not check_keys(node, (), ("discount_factors",), self.faults, "the curve"):
            pass
        elif isinstance(inner, Mapping):
            return self.curve_of(inner, "discount")
        else:
            self.faults.append(expected("discount factors by tenor or date, as '{1y: 0.979}'", inner))
        return None

    def _zero_rates(self, node: Mapping, allowed: bool) -> Curve | None:
        """`{zero_rates:, compounding:, day_count:}`: zero rates with the convention that they are quoted by."""
        if not allowed:
            self.faults.append(Fault(node.key("zero_rates").place, "a compounding can be stated for rates only"))
            return None
        if not check_keys(node, ("day_count",), ("zero_rates", "compounding"), self.faults, "the curve"):
            return None
        before = len(self.faults)
        compounding = one_of(node.get("compounding"), COMPOUNDING, self.faults, "a compounding")
        day_count = read(node, "day_count", day_count_name, self.faults) or UNSAID.day_count
        if "day_count" in node:
            self._check_curve_day_count(node.get("day_count"), day_count)
        curve = self.curve(node.get("zero_rates"), "zero")
        if curve is None or len(self.faults) > before:
            return None
        if curve.flat and compounding == "simple":
            self.faults.append(expected("simple rates by tenor or date, as '{3m: 2.0%}'", node.get("zero_rates"),
                                        "a simple rate belongs to one tenor"))
        elif curve.flat and day_count not in FLAT_DAY_COUNTS:
            self.faults.append(expected(f"rates by tenor or date with {day_count}", node.get("zero_rates")))
        for point in curve.nodes if compounding == "simple" else ():
            if 1.0 + point.quoted.value * point.time * 366 / 360 <= 0.0:
                self.faults.append(Fault(point.quoted.place, f"a simple rate as low as this to '{point.label}' leaves "
                                                             "no discount factor above 0"))
        return replace(curve, convention=RateConvention(compounding, day_count, self.valuation))

    def _check_curve_day_count(self, node: Node, name: str) -> None:
        if self.textbook and name != UNSAID.day_count:
            self.faults.append(expected(UNSAID.day_count, node, "a textbook market has no dates"))
        elif name == "Actual/Actual (ICMA)":
            self.faults.append(expected("a day count of curves", node, f"{name} needs coupon periods"))

    def curve_of(self, node: Mapping, form: str, where: str = "") -> Curve | None:
        """Numbers by tenor or date, in order of time; `where` (" of the strike '80%'") is for messages."""
        before = len(self.faults)
        points: list[Point] = []
        for label, value in node.entries:
            if form == "vol" and isinstance(value, Mapping) and "value" not in value and label.text != "strikes":
                self.faults.append(expected("a vol", value, f"vols by strike go under {STRIKES_WRITTEN}"))
                continue
            if form == "vol" and label.text in ("strikes", "priced_at"):
                text = "vols by strike are for assets; a rate of exchange has one vol for each tenor"
                self.faults.append(Fault(label.place, text))
                continue
            time, quoted = self.time(label), self.quoted(value, FORMS[form])
            if time is None or quoted is None:
                continue
            if points and time <= points[-1].time:
                text = f"'{label}' is not later than '{points[-1].label}'; a curve goes forward in time"
                self.faults.append(Fault(label.place, text))
                continue
            points.append(Point(time, label.text, quoted))
        if not node.entries:
            self.faults.append(expected("a number, or numbers by tenor or date", node, "the curve is empty"))
        if form == "vol":
            self._check_variance(points, where)
        return Curve(form, tuple(points), node.place) if len(self.faults) == before else None

    def time(self, label: Scalar) -> float | None:
        """Years from the valuation date to a tenor or date, Actual/365 (Fixed)."""
        if DATE.fullmatch(label.text):
            day = value_of(label, date, self.faults)
            if self.textbook:
                self.faults.append(expected("a tenor in years or months", label,
                                            "a textbook market has no dates"))
                return None
        else:
            span = value_of(label, tenor, self.faults)
            if span is None or self.textbook:
                return None if span is None else self._plain_time(label, *span)
            day = self._day_of(label, *span)
        if day is None or self.valuation is None:
            return None
        if day <= self.valuation:
            self.faults.append(expected(f"a date after the valuation date {self.valuation}", label))
            return None
        return (day - self.valuation).days / 365

    def _plain_time(self, label: Scalar, count: float, unit: str) -> float | None:
        if unit not in MONTHS:
            self.faults.append(expected("a tenor in years or months", label,
                                        "a textbook market has no dates"))
        elif count == 0:
            self.faults.append(expected("a tenor above 0", label))
        else:
            return count * MONTHS[unit] / 12
        return None

    def _day_of(self, label: Scalar, count: float, unit: str) -> datetime.date | None:
        from dateutil.relativedelta import relativedelta

        steps = count * (MONTHS.get(unit) or DAYS[unit])
        if steps != int(steps):
            self.faults.append(expected("a whole number of months or days", label))
            return None
        step = relativedelta(months=int(steps)) if unit in MONTHS else relativedelta(days=int(steps))
        try:
            return None if self.valuation is None else self.valuation + step
        except (OverflowError, ValueError):
            self.faults.append(expected("a tenor within the calendar's years", label))
            return None

    def _check_variance(self, points: list[Point], where: str) -> None:
        """Total variance must not fall from one node to the next; `where` is for the message."""
        for before, point in zip(points, points[1:], strict=False):
            held, total = (one.quoted.value**2 * one.time for one in (before, point))
            if total < held * (1 - 1e-12):
                least = math.ceil(1e6 * math.sqrt(held / point.time)) / 1e4  # percent, rounded up
                text = (f"total variance{where} falls from {held:.6g} at '{before.label}' to {total:.6g} at "
                        f"'{point.label}'; a vol of {least:.4f}% is the least that '{point.label}' can have")
                self.faults.append(Fault(point.quoted.place, text))


def half_width(parse: Number) -> Number:
    """How a half-width is read that stands beside a value read by `parse`: in the same unit, not negative."""
    def read_width(node: Node) -> float | Fault:
        with_unit = parse not in (amount, discount_factor)
        value = percent(node) if with_unit else number(node)
        if isinstance(value, Fault):
            return value
        if not with_unit and node.text.endswith(("%", "bp")):
            return expected("a half-width in the unit of the value", node)
        return value if value >= 0 else expected("a half-width of 0 or more", node)

    return read_width


def valuation_of(node: Node, faults: list[Fault]) -> tuple[datetime.date | None, bool]:
    """The valuation date and whether the market is a textbook one (`market: 0y`)."""
    if isinstance(node, Scalar) and node.text == "0y":
        return None, True
    if isinstance(node, Scalar) and not DATE.fullmatch(node.text):
        faults.append(expected("the valuation date, or '0y' for textbook contracts", node, date_meant(node)))
        return None, False
    return value_of(node, date, faults), False
