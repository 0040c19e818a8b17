"""What the tape reports: legs, parts, conditions, ends and the life, gathered while the contract is unrolled."""

from __future__ import annotations

from dataclasses import dataclass, field

from mcx.checked.payoff import Pay, Payoff
from mcx.dates.dated_contract import Day
from mcx.faults import Place
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import Output

MOST_DAYS = 64  # dates listed one by one; more ends are grouped by year, more conditions are not listed by date
UNSORTED = "unsorted"


@dataclass(frozen=True, slots=True)
class Payment:
    """One amount that may be owed: `amount`, not discounted, is paid on `due` where `flag`; both are values of the
    tape. `decided` is the day of the event that stands at `event` in the definition."""

    leg: str
    part: str
    event: Place
    decided: Day
    due: Day
    flag: int
    amount: int


@dataclass(slots=True)
class Ledger:
    """Sums and flags by name, as values of the tape."""

    builder: Builder
    legs: dict[str, int] = field(default_factory=dict)
    parts: dict[str, int] = field(default_factory=dict)
    conditions: dict[str, dict[Day, int]] = field(default_factory=dict)
    ends: dict[Day, int] = field(default_factory=dict)
    lives: list[tuple[int, float]] = field(default_factory=list)  # flag of the ending, time of its payment
    last_payment: float = 0.0
    payments: list[Payment] = field(default_factory=list)
    owed: int | None = None  # what is fixed already and not yet paid

    @staticmethod
    def opened(builder: Builder, payoff: Payoff) -> Ledger:
        """A ledger with every leg and named event of the payoff, in file order, at nothing."""
        nothing = builder.constant(0.0)
        actions = [action for event in payoff.events for action in (*event.then, *event.otherwise)]
        pays = [action for action in actions if isinstance(action, Pay)]
        ledger = Ledger(builder, legs={pay.leg: nothing for pay in pays})
        if any(pay.part for pay in pays):
            ledger.parts = {pay.part or UNSORTED: nothing for pay in pays}
        ledger.conditions = {event.name: {} for event in payoff.events if event.name}
        return ledger

    def pay(self, pay: Pay, present_value: int, payment: Payment, settled: bool = False) -> None:
        """Enter a payment; `settled`: it is fixed already."""
        add, due = self.builder.emit, payment.due
        self.payments.append(payment)
        if settled:
            self.owed = present_value if self.owed is None else add(Op.ADD, self.owed, present_value, place=pay.place)
        self.legs[pay.leg] = add(Op.ADD, self.legs[pay.leg], present_value, place=pay.place)
        if self.parts:
            part = pay.part or UNSORTED
            self.parts[part] = add(Op.ADD, self.parts[part], present_value, place=pay.place)
        self.last_payment = max(self.last_payment, due.time)

    def happened(self, name: str, day: Day, flag: int) -> None:
        self._join(self.conditions[name], day, flag)

    def ended(self, day: Day, flag: int, payment: float) -> None:
        """The contract ended on `day` where `flag`; `payment` is when the amount due for it is paid."""
        self._join(self.ends, day, flag)
        self.lives.append((flag, max(payment, 0.0)))

    def _join(self, flags: dict[Day, int], day: Day, flag: int) -> None:
        flags[day] = self.builder.emit(Op.OR, flags[day], flag) if day in flags else flag

    def outputs(self) -> list[Output]:
        """All named results but the levels: price first, then legs, parts, conditions, ends, life."""
        fold, nothing = self.builder.fold, self.builder.constant(0.0)
        made = [Output.of("price", fold(Op.ADD, self.legs.values()) if self.legs else nothing)]
        made += [Output.of("leg", value, name) for name, value in self.legs.items()]
        made += [Output.of("part", value, name) for name, value in self.parts.items()]
        made += [Output.of("owed", self.owed)] if self.owed is not None else []
        for name, flags in self.conditions.items():
            ever = fold(Op.OR, flags.values()) if flags else nothing
            made.append(Output.of("condition", ever, name, flag=True))
            if len(flags) <= MOST_DAYS:
                made += [Output.of("condition", flag, name, str(day), flag=True) for day, flag in flags.items()]
        spans = self.ends if len(self.ends) <= MOST_DAYS else self._by_year()
        made += [Output.of("end", flag, day=str(span), flag=True) for span, flag in spans.items()]
        made.append(Output.of("life", self._life()))
        return made

    def _by_year(self) -> dict[str, int]:
        """Ends by calendar year, or by whole year of time where there are no dates."""
        years: dict[str, int] = {}
        for day, flag in self.ends.items():
            span = f"{day.date.year}" if day.date else f"{int(day.time)}y to {int(day.time) + 1}y"
            self._join(years, span, flag)
        return years

    def _life(self) -> int:
        """Years to the payment due for the ending, or to the last payment where the contract never ends early."""
        life = self.builder.constant(self.last_payment)
        for flag, payment in self.lives:
            life = self.builder.emit(Op.SELECT, flag, self.builder.constant(payment), life)
        return life
