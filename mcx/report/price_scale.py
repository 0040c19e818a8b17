"""How prices are shown: percent of the notional, or money per unit."""

from __future__ import annotations

from mcx.report.greek_results import GreeksResult
from mcx.report.results import PriceResult
from mcx.report.terminal import decimals, fixed

ROUNDING = 1e-9  # an error below it is that of floating point: the value is certain


class Scale:
    """How prices are shown: percent of the notional, or money per unit."""

    def __init__(self, result: PriceResult | GreeksResult):
        self.percent = result.notional is not None
        self.factor = 100.0 if self.percent else 1.0
        self.sign = " %" if self.percent else ""
        self.unit = "%" if self.percent else f"{result.currency} per unit"
        self.fewest = 2 if self.percent else 4

    def show(self, number: float, places: int) -> str:
        return fixed(number * self.factor, places)

    def places(self, error: float, digits: int = 2) -> int:
        error *= self.factor
        return decimals(error if error > ROUNDING else 0.0, digits, self.fewest)
