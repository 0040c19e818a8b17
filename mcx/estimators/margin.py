"""The day-one margin: what an issue price asks beyond the value, once and for each year that the money is tied up."""

from __future__ import annotations

from dataclasses import dataclass

from mcx.estimators.estimate import Estimate


@dataclass(frozen=True, slots=True)
class Margin:
    """Issue price less value.

    amount    in the unit of the price: of the notional, or money per unit
    share     of the issue price
    currency  of the whole trade, in the contract's currency
    per_year  `amount` for one year of expected life; its error takes price and life to err together, so it is not too
              small whatever their correlation
    """

    amount: Estimate
    share: Estimate
    currency: Estimate
    per_year: Estimate


def day_one_margin(issue_price: float, price: Estimate, life: Estimate, size: float) -> Margin:
    """The margin in an issue price above 0, in the unit of the price; `life` is the expected life in years, above 0,
    from the same paths; `size` the notional or the number of units."""
    amount = Estimate(issue_price - price.value, price.standard_error, price.paths)
    error = (amount.standard_error + abs(amount.value) * life.standard_error / life.value) / life.value
    return Margin(amount, amount.times(1.0 / issue_price), amount.times(size),
                  Estimate(amount.value / life.value, error, price.paths))
