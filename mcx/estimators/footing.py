"""A quote on one footing with our own value: side, unit, accrued coupon, reference spot and fees, in that order."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from mcx.checked.contract import Contract
from mcx.checked.dealer_quote import CASH, PER_DENOMINATION, PERCENT, DealerQuote
from mcx.checked.market import Market
from mcx.estimators.estimate import Estimate
from mcx.leaves.jacobian import Input, inputs


@dataclass(frozen=True, slots=True)
class FootingStep:
    """One step: what was done, and the quote after it, in the quote's own unit before the unit is changed and in that
    of the price from then on. `error` is that of a step which was simulated."""

    name: str
    text: str
    value: float
    error: float = 0.0


@dataclass(frozen=True, slots=True)
class Footing:
    """A quote in the unit of the contract's price, dirty, at our spot, without fees. `mid` is what is compared; `bid`
    and `ask` are None where the quote does not tell them. `at_reference` is the same at the reference spot."""

    steps: tuple[FootingStep, ...]
    mid: float
    bid: float | None
    ask: float | None
    at_reference: float

    @property
    def half_width(self) -> float | None:
        """Half the bid-offer."""
        return None if self.bid is None or self.ask is None else 0.5 * (self.ask - self.bid)


def reference_shifts(quote: DealerQuote, market: Market, contract: Contract) -> dict[Input, float]:
    """How far our spots are from those that the quote was made at."""
    spots = [number for number in inputs(market, contract) if number.kind == "spot" and number.subject in quote.spot]
    return {number: quote.spot[number.subject] - number.value for number in spots
            if quote.spot[number.subject] != number.value}


def unit_factor(quote: DealerQuote, contract: Contract) -> float:
    """What a number in the quote's unit is multiplied by to be in the unit of the contract's price."""
    if quote.unit == PER_DENOMINATION:
        return 1.0 / quote.denomination
    return 1.0 / (quote.size or contract.size) if quote.unit == CASH else 1.0


def footing(quote: DealerQuote, contract: Contract, moved_by: Estimate) -> Footing:
    """`moved_by` is how much more the contract is worth at our spots than at the quote's, in the unit of the price."""
    factor = unit_factor(quote, contract)
    steps = tuple(_steps(quote, contract, moved_by, factor))
    half = None if quote.width is None else 0.5 * quote.width * factor
    mid = steps[-1].value
    bid = mid - half if half is not None else mid if quote.side == "bid" else None
    ask = mid + half if half is not None else mid if quote.side == "ask" else None
    return Footing(steps, mid, bid, ask, mid - moved_by.value)


def _steps(quote: DealerQuote, contract: Contract, moved_by: Estimate, factor: float) -> Iterator[FootingStep]:
    def step(name: str, change: float, text: str, error: float = 0.0) -> FootingStep:
        nonlocal value
        value += change
        return FootingStep(name, text, value, error)

    value = quote.mid
    if quote.side == "two-way":
        yield step("side", 0.0, "the middle of bid and ask")
    elif quote.side == "mid":
        yield step("side", 0.0, "a mid, as it stands")
    elif quote.bid_offer is None:
        yield step("side", 0.0, f"{'a bid' if quote.side == 'bid' else 'an ask'}, compared as it stands: the bid-offer "
                                f"was not said, so the dealer's mid is not known")
    else:
        half = 0.5 * quote.bid_offer
        yield step("side", half if quote.side == "bid" else -half,
                   f"{'a bid: half the bid-offer on top' if quote.side == 'bid' else 'an ask: half the bid-offer off'}")
    value *= factor
    amount = quote.size or contract.size
    words = {PERCENT: "percent of the notional, as we price",
             PER_DENOMINATION: f"from money for a denomination of {quote.denomination or 0:,.15g} {contract.currency}",
             CASH: f"from money for {amount:,.15g} {contract.currency + ' notional' if contract.notional else 'units'}"}
    yield step("unit", 0.0, words.get(quote.unit, f"{contract.currency} per unit, as we price"))
    accrued = (quote.accrued or 0.0) * factor
    yield step("accrued coupon", accrued,
               "clean: what has accrued is put on top" if quote.clean else "dirty, as we price")
    yield step("spot", moved_by.value, _spot_words(quote, contract), moved_by.standard_error)
    fees = (quote.fees or 0.0) * factor
    change = {"bid": fees, "ask": -fees}.get(quote.side, 0.0)
    if quote.fees is None:
        yield step("fees", 0.0, "none stated")
    else:
        yield step("fees", change, {"bid": "put back on the bid", "ask": "taken off the ask"}.get(
            quote.side, "the same on both sides: they leave the middle where it is"))


def _spot_words(quote: DealerQuote, contract: Contract) -> str:
    if not quote.spot:
        return "no reference spot was said: taken to be made at ours"
    levels = ", ".join(f"{name} {level:,.10g}" for name, level in quote.spot.items())
    missing = [name for name in contract.assets if name not in quote.spot]
    tail = f"; {', '.join(missing)} at ours" if missing else ""
    return f"from {levels} to our spot, by revaluation on the same paths{tail}"

