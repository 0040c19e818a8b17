"""How much of the period that runs on the valuation date has passed, for the interest that has accrued in it."""

from __future__ import annotations

from mcx.dates.dated_contract import DatedContract, Day, Occasion
from mcx.dates.day_counts import ICMA, year_fraction


def part_passed(dated: DatedContract, occasion: Occasion, since: Day) -> float:
    """The part, from 0 to 1, of the period from `since` to the occasion that has passed on the valuation date: the year
    fraction that has passed over that of the period, by the contract's day count.

    Actual/Actual (ICMA) measures from one date of the rule to the next before they roll (Rule 251: the days that have
    passed over those of the regular period). Calendar days count where nothing else can, which `by_calendar_days` says.
    """
    today, contract = dated.valuation, dated.contract
    if by_calendar_days(dated, occasion):
        return (today - since.date).days / (occasion.day.date - since.date).days
    opens, regular = since.date, None
    if contract.day_count == ICMA:
        regular, skipped = dated.regular[occasion.schedule]
        number = skipped + occasion.nth - 1
        opens = regular.step(number - 1) if occasion.nth > 1 else contract.start.date
        today = min(today, regular.step(number))  # a date that rolls leaves days after its period
    return year_fraction(contract.day_count, opens, today, regular=regular) / occasion.period


def by_calendar_days(dated: DatedContract, occasion: Occasion) -> str:
    """Why a period passes by calendar days; '' where it goes by the contract's day count."""
    if not dated.contract.day_count:
        return "the contract states no day count"
    if dated.contract.day_count == ICMA and occasion.schedule not in dated.regular:
        return f"{ICMA} measures by regular periods, and the coupon dates follow no rule of months that divide a year"
    return ""
