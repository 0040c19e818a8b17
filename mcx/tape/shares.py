"""Shares that are delivered, as values of the tape."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from mcx.checked.contract import Contract
from mcx.checked.payoff import Deliver
from mcx.dates.dated_contract import Day
from mcx.tape.formulas import Formulas, Scene, Unreadable, Values
from mcx.tape.observations import Observations
from mcx.tape.ops import Op
from mcx.tape.state import Delivery

NOT_QUANTO = "is delivered: a share is worth its level at the rate of exchange of the day, which 'quanto' denies"


@dataclass(frozen=True, slots=True)
class Shares:
    """What deliveries of one contract are worth.

    A share is worth its level on the delivery date. Of each note whole ones are delivered, and the fraction is paid in
    cash, at the level of the day on which it was decided, as far as their number is fixed.
    """

    contract: Contract
    formulas: Formulas
    observations: Observations

    def worth(
        self, action: Deliver, day: Day, due: Day, scene: Scene, settled: Callable[[int], int]
    ) -> tuple[int | None, list[Delivery], bool]:
        """The value on `due` (None where that is past) of what is decided on `day`, for each unit of the notional, the
        deliveries that are certain, and whether all numbers of shares that may be delivered are fixed. `settled` gives
        a flag as far as the past has decided it. Raises Unreadable."""
        builder, emit = self.formulas.builder, self.formulas.builder.emit
        worth: list[int] = []
        certain: list[Delivery] = []
        counted = True
        for asset, (shares, chosen) in enumerate(self._each(action, scene)):
            if self.contract.conversion.get(self.contract.assets[asset]) == "quanto":
                raise Unreadable(action.place, f"'{self.contract.assets[asset]}' {NOT_QUANTO}")
            taken, number = settled(chosen), self.formulas.fixed(shares)
            whole, fraction = self._parted(number)
            if number is not None and builder.number(taken) == 1.0:
                certain.append(Delivery(action, asset, day, due, whole, fraction))
            if due.time < 0.0:
                continue
            if number is None:
                counted &= builder.number(taken) == 0.0
                value = emit(Op.MUL, shares, self.observations.level(asset, due), place=action.place)
            else:
                count, rest = (builder.constant(each / self.contract.lot) for each in (whole, fraction))
                value = emit(Op.ADD, emit(Op.MUL, count, self.observations.level(asset, due)),
                             emit(Op.MUL, rest, self.observations.level(asset, day)))
            worth.append(emit(Op.SELECT, taken, value, builder.constant(0.0), place=action.place))
        return (builder.fold(Op.ADD, worth, action.place) if worth else None), certain, counted

    def _each(self, action: Deliver, scene: Scene) -> list[tuple[int, int]]:
        """For each asset the number of shares, and the flag whether they are delivered."""
        shares = self.formulas.read(action.amount, scene)
        everything: Values = (self.formulas.builder.constant(1.0),)
        chosen = everything if action.which is None else self.formulas.read(action.which, scene)
        count = len(self.contract.assets)
        rows = [values if len(values) > 1 else values * count for values in (shares, chosen)]
        return list(zip(*rows, strict=True))

    def _parted(self, number: float | None) -> tuple[float, float]:
        """Whole shares of one note, and the fraction that is left."""
        if number is None:
            return 0.0, 0.0
        one_note = number * self.contract.lot
        whole = math.floor(one_note * (1.0 + 1e-12))  # 10 that came out as 9.999999999999998
        return float(whole), max(one_note - whole, 0.0)
