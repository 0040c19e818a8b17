"""What the past has settled, gathered while the tape is built: events, payments, running values, an end."""

from __future__ import annotations

from dataclasses import dataclass, field

from mcx.checked.payoff import Deliver, Event, Pay
from mcx.dates.dated_contract import Day, Occasion
from mcx.tape.stated import Claim


@dataclass(frozen=True, slots=True)
class PastEvent:
    """An event up to the valuation date, and whether its condition held (None: not settled by what is fixed)."""

    event: Event
    day: Day
    held: bool | None


@dataclass(frozen=True, slots=True)
class FixedAmount:
    """An amount that is fixed, in the unit of the price: observed on `day`, paid on `due`. It is owed where `due` is
    the valuation date or later."""

    pay: Pay
    day: Day
    due: Day
    amount: float

    @property
    def owed(self) -> bool:
        return self.due.time >= 0.0


@dataclass(frozen=True, slots=True)
class Delivery:
    """Shares of an asset that are certain: how many whole ones for each note, and the fraction that is paid in cash."""

    pay: Deliver
    asset: int
    day: Day
    due: Day
    whole: float
    fraction: float


@dataclass(frozen=True, slots=True)
class Accruing:
    """A coupon of the running period that is paid whatever happens; `since` is where its period begins."""

    pay: Pay
    occasion: Occasion
    since: Day
    amount: float


@dataclass(slots=True)
class State:
    """The state of a contract on the valuation date. `running` holds values that are known, one or one for each
    asset, `terms` level terms that were observed, `fixings` the levels that were read, by day and asset, as they count;
    `ended` the day on which it ended, None where it has not; `uncounted` deliveries of which it is not fixed how many
    shares they are, so that whole ones cannot be told from fractions; `denied` what is stated not to have been reached
    by the end of the valuation date."""

    events: list[PastEvent] = field(default_factory=list)
    payments: list[FixedAmount] = field(default_factory=list)
    deliveries: list[Delivery] = field(default_factory=list)
    accruing: list[Accruing] = field(default_factory=list)
    running: dict[str, tuple[float, ...]] = field(default_factory=dict)
    ended: Day | None = None
    terms: dict[str, tuple[float, ...]] = field(default_factory=dict)
    fixings: dict[tuple[Day, int], float] = field(default_factory=dict)
    uncounted: dict[Deliver, None] = field(default_factory=dict)
    denied: list[Claim] = field(default_factory=list)

    @property
    def seasoned(self) -> bool:
        """Whether anything has happened yet."""
        return bool(self.events or self.running)
