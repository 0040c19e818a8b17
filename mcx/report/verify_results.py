"""The result of `mcx verify`, and the keys of its JSON.

Units. What is a price, a gap, a half-width or a change is in the unit that `unit` names: 'notional' (1.0 is par) or
'currency per unit'; `value...` in the contract's currency. Inputs are plain numbers (0.18 is 18 %), levels of forwards
in the asset's currency. A gap is the quote less our price: below 0 the dealer says less. Errors are standard errors of
the sampling alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from mcx.report.results import Amount, Planned, Result

NONE_THERE, NO_EFFECT = "none in the range", "the price does not depend on it"  # why there is no value


@dataclass(frozen=True, slots=True)
class QuoteSaid(Result):
    """The quote as it was said; `price` is None for a two-way one, whose `bid` and `ask` are given, in its own unit."""

    dealer: str
    at: str
    side: str
    unit: str
    accrual: str
    commitment: str
    price: float | None
    bid: float | None
    ask: float | None
    size: float | None
    source: str
    place: str


@dataclass(frozen=True, slots=True)
class FootingLine(Result):
    """A step that brings the quote on our footing, and the quote after it: in its own unit until 'unit', then in ours.
    `standard_error` is 0 where nothing was simulated."""

    step: str
    text: str
    quote: float
    standard_error: float


@dataclass(frozen=True, slots=True)
class Gap(Result):
    """The quote on our footing less our price; `z` in standard errors. `rest`: what each strike at its own vol leaves
    of `price` where that needs no model (with the same standard error), held against the bands; None elsewhere."""

    price: float
    standard_error: float
    z: float | None
    value: float
    rest: float | None


@dataclass(frozen=True, slots=True)
class BandLine(Result):
    """'sampling error' (half of the 95 % interval), 'half the bid-offer', 'input band' (90 %, root of squares),
    'tolerance' or, where the market has vols by strike, 'model bracket' (its `half_width` is how far it reaches towards
    the quote). `half_width` and `holds` are None where nothing was stated."""

    name: str
    half_width: float | None
    holds: bool | None


@dataclass(frozen=True, slots=True)
class InputEffect(Result):
    """What an input does to the price that moves up by its stated 90 % half-width, to first order. `half_width` is in
    the unit of the input: a share for spots and forwards."""

    input: str
    asset: str
    half_width: float
    change: float
    standard_error: float
    note: str


@dataclass(frozen=True, slots=True)
class WorstCorner(Result):
    """The price with every input at the end of its half-width towards the quote (at `share` of it, where there is no
    such market further out), and whether the quote lies on this side of it. It is never the band."""

    price: float
    standard_error: float
    reaches: bool
    share: float


@dataclass(frozen=True, slots=True)
class ImpliedInput(Result):
    """Where one input alone makes the model meet the quote: one entry for each solution, or one with `value` None and
    the reason in `note`. `asset` is the asset, pair or currency, 'all' for a parallel move of all of them.

    `value` is the level of the input's last node; for 'all' it is the move itself (`measure` is 'level' or 'move'); for
    forwards `move` is a share. `standard_error` is in the unit of `value`. `plausible`: inside the stated half-width,
    None where there is none. `low` and `high` are the moves between which solutions were looked for. `fresh_z` is the
    distance from the quote of a repricing with fresh numbers, in errors of both.
    """

    input: str
    asset: str
    value: float | None
    standard_error: float | None
    plausible: bool | None
    measure: str
    move: float | None
    tenor: str
    low: float
    high: float
    fresh_z: float | None
    note: str


@dataclass(frozen=True, slots=True)
class JointInput(Result):
    """An input's part of the joint move: `half_widths` of it, and the move itself."""

    input: str
    asset: str
    half_widths: float
    move: float


@dataclass(frozen=True, slots=True)
class JointMove(Result):
    """The smallest joint move that meets the quote; `half_widths` is the root of squares: 1 is the edge of the band."""

    half_widths: float
    moves: tuple[JointInput, ...]
    fresh_z: float


@dataclass(frozen=True, slots=True)
class ReadingLine(Result):
    """The contract read otherwise. `difference` is to our price, path by path; `left` the gap that would be left, its
    error that of `price`. A reading that has no price has None, and `note` says why."""

    reading: str
    about: str
    price: float | None
    standard_error: float | None
    difference: float | None
    difference_standard_error: float | None
    left: float | None
    closes_gap: bool
    note: str


@dataclass(frozen=True, slots=True)
class PaymentBounds(Result):
    """What a payment is at least and at most, undiscounted, in the unit of the price; `most` None where there is no
    bound. 0 where it may not be owed."""

    leg: str
    part: str
    decided: str
    paid: str
    least: float | None
    most: float | None


@dataclass(frozen=True, slots=True)
class MarginResult(Result):
    """Issue price less our price: in the unit of the price, as a share of the issue price, in currency for the whole
    trade, and (in the unit of the price) for each year of expected life. Where the contract has `begun` it is no
    day-one margin: it holds what happened since."""

    issue_price: float
    begun: bool
    price: float
    standard_error: float
    share: float
    value: float
    value_standard_error: float
    per_year: float
    per_year_standard_error: float


@dataclass(frozen=True, slots=True)
class Money(Result):
    """Where the value lies. `bond_floor` is what all payments are worth at least on the issuer's curve, whatever happens,
    `ceiling` what at most; None where there is none. `parts` and `legs` add up to the price each. `funding` is what the
    issuer's spread takes off the price, None without one."""

    bond_floor: float | None
    ceiling: float | None
    parts: tuple[Amount, ...]
    legs: tuple[Amount, ...]
    funding: float | None
    funding_standard_error: float | None
    payments: tuple[PaymentBounds, ...]


@dataclass(frozen=True, slots=True)
class SolvedTerm(Result):
    """A value of the term at which the contract is worth `target`: one entry for each, or one with `value` None.
    `slope` is the price for 1 of the term; `together`: its other numbers move along. Values are numbers, 0.019 where
    the contract writes 1.9 %; `percent` says that it does."""

    term: str
    target: float
    stated: float
    value: float | None
    standard_error: float | None
    slope: float | None
    fresh_z: float | None
    low: float
    high: float
    together: bool
    percent: bool
    note: str


@dataclass(frozen=True, slots=True)
class VerifyResult(Result):
    """Whether a dealer's quote can be right: `mcx verify`.

    `price` is our price at our spots, `compared` that at the spots of the quote; `mid`, `bid` and `ask` are the quote
    on our footing. `model_bracket` (a `ModelBracketResult`, about `compared`) is None but where the market has vols by
    strike. `explained`: some band holds the gap, or what is left of it (`gap.rest`). `leads` say what closes it:
    readings, and single inputs inside their stated uncertainty. `solve` and `target` repeat the request.
    """

    interrupted: ClassVar[bool] = False  # a verdict comes whole or not at all
    contract: str
    payoff: str
    valuation: str | None
    currency: str
    notional: float | None
    units: float | None
    unit: str
    quote: QuoteSaid
    footing: tuple[FootingLine, ...]
    mid: float
    bid: float | None
    ask: float | None
    price: float
    standard_error: float
    compared: float
    compared_standard_error: float
    gap: Gap
    bands: tuple[BandLine, ...]
    model_bracket: Result | None
    verdict: str
    leads: tuple[str, ...]
    explained: bool
    inputs: tuple[InputEffect, ...]
    worst_corner: WorstCorner | None
    implied: tuple[ImpliedInput, ...]
    joint: JointMove | None
    readings: tuple[ReadingLine, ...]
    money: Money
    margin: MarginResult | None
    solved: tuple[SolvedTerm, ...]
    expected_life: float
    paths: int
    seconds: float
    seed: int
    reduction: str
    solve: str
    target: float | None
    planned: Planned
    warnings: tuple[str, ...]
    assumptions: tuple[str, ...]
    limits: tuple[str, ...]
    cautions: tuple[str, ...]
    calendar_version: str


@dataclass(frozen=True, slots=True)
class Ranked(Result):
    """A quote among all for its contract, on one footing, the highest middle first; `funding` is the issuer's spread at
    which our price is the quote (None where there is none, or not just one). `explained`: whether some band holds the
    gap, or the `rest` of it (`gap.rest` of a `VerifyResult`)."""

    rank: int
    contract: str
    dealer: str
    mid: float
    bid: float | None
    ask: float | None
    gap: float
    rest: float | None
    explained: bool
    funding: float | None
    funding_standard_error: float | None


@dataclass(frozen=True, slots=True)
class VerifyTable(Result):
    """Several quotes, in the order of the files, and ranked for each contract. `not_verified` are those that an
    interruption left without a verdict, as 'DEALER on CONTRACT'."""

    MAIN: ClassVar[str] = "ranking"
    quotes: tuple[VerifyResult, ...]
    ranking: tuple[Ranked, ...]
    not_verified: tuple[str, ...] = ()

    @property
    def interrupted(self) -> bool:
        return bool(self.not_verified)

    @property
    def explained(self) -> bool:
        return all(quote.explained for quote in self.quotes)
