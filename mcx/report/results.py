"""The results of every verb, and the keys of their JSON: `to_dict()` gives one key for each field, in this order.

Units. `price`, `standard_error` and `interval95` are in the unit that `unit` names: 'notional' (1.0 is par) or
'currency per unit'. `value...` is in the contract's currency for the whole notional or number of units. Probabilities
and discount factors are plain numbers (0.25 is 25 %), times are years (Actual/365 Fixed), vols are per year, dates are
ISO dates, or times such as '0.25y' in textbook contracts. Errors are standard errors of the sampling alone.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields, is_dataclass
from importlib import import_module
from typing import TYPE_CHECKING, ClassVar

if TYPE_CHECKING:
    from pandas import DataFrame

SHOWN_BY = "mcx.report.page.render"  # by name: it knows the results, so they cannot import it


class Result:
    """A frozen record that can say itself as plain data, as a table and, in a notebook, with pictures.

    `MAIN` names the field whose entries are the rows of its table; '' makes one row of the record itself.
    """

    __slots__ = ()
    MAIN: ClassVar[str] = ""

    def to_dict(self) -> dict:
        """Plain dicts, lists, texts and numbers, ready for `json.dumps`; what is not a finite number becomes None."""
        return {field.name: plain(getattr(self, field.name)) for field in fields(self)}

    def rows(self) -> list[dict]:
        """One row for each entry of the main list, of what is no list itself."""
        found = getattr(self, self.MAIN) if self.MAIN else (self,)
        rows = map(plain, found)
        return [{key: value for key, value in row.items() if not isinstance(value, dict | list)} for row in rows]

    def to_frame(self) -> DataFrame:
        """The rows as a pandas DataFrame; raises ImportError where pandas is not installed."""
        try:
            from pandas import DataFrame
        except ImportError:
            raise ImportError("a frame needs the package 'pandas', which is not installed; rows() gives the same as "
                              "plain dicts") from None
        return DataFrame(self.rows())

    def _repr_html_(self) -> str | None:
        """What a notebook shows; None leaves it to `repr`."""
        return import_module(SHOWN_BY).piece(self)


def plain(value: object) -> object:
    """A value as JSON holds it."""
    if is_dataclass(value):
        return {field.name: plain(getattr(value, field.name)) for field in fields(value)}
    if isinstance(value, dict):
        return {key: plain(inner) for key, inner in value.items()}
    if isinstance(value, tuple | list):
        return [plain(inner) for inner in value]
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    return value


@dataclass(frozen=True, slots=True)
class Amount(Result):
    """A leg (`as:`) or a part (`part:`) of the price. The legs add up to the price, and so do the parts."""

    name: str
    price: float
    standard_error: float
    value: float


@dataclass(frozen=True, slots=True)
class Owed(Result):
    """An amount that is fixed and not yet paid, in the unit of the price and in currency; `present_value` is part of
    the price's value."""

    date: str
    leg: str
    observed: str
    amount: float
    value: float
    present_value: float


@dataclass(frozen=True, slots=True)
class Likelihood(Result):
    """How often something happened: on `date` (a date, a year or a span of years), or ever where it is ''."""

    date: str
    probability: float
    standard_error: float


@dataclass(frozen=True, slots=True)
class Condition(Result):
    """A named event: how often its condition held at all, and on each date (an empty list beyond 64 dates)."""

    name: str
    probability: float
    standard_error: float
    dates: tuple[Likelihood, ...]


@dataclass(frozen=True, slots=True)
class Martingale(Result):
    """The mean simulated level of an asset at its last observed time over its forward; z is its distance from 1 in
    standard errors."""

    asset: str
    date: str
    mean_over_forward: float
    standard_error: float
    z: float


@dataclass(frozen=True, slots=True)
class Stage(Result):
    """The price of the first `paths` paths."""

    paths: int
    price: float
    standard_error: float


@dataclass(frozen=True, slots=True)
class Checks(Result):
    """What a result says about itself: a martingale test for each asset, and the price at a quarter, half and all of
    the paths."""

    martingale: tuple[Martingale, ...]
    convergence: tuple[Stage, ...]


@dataclass(frozen=True, slots=True)
class Planned(Result):
    """How the number of paths came about.

    `asked` repeats the request ('131072 paths', 'within 2 bp', '3 seconds'); `target` is the 95 % half-width asked for
    with `within`, in the unit of the price, else None; `met` whether the result keeps it, None without a target;
    `pilot_paths` were drawn from a stream of their own and are not part of the result.
    """

    asked: str
    paths: int
    pilot_paths: int
    target: float | None
    met: bool | None


@dataclass(frozen=True, slots=True)
class Width(Result):
    """By how much the upper bound of another result (a leg, a probability) lies above the lower one."""

    name: str
    width: float


@dataclass(frozen=True, slots=True)
class Bracket(Result):
    """The bounds of a price where several assets are watched together, so that their joint law within a step is not
    known: `price` is the middle, and so are legs and probabilities.

    lower, upper  bounds of the price, on the same paths; `width` is their distance, with its sampling error
    target        how close they should be: the 95 % half-width that was asked for, or that of the paths asked for
    reached       whether the pilot run found them so close
    pieces        into how many parts at least the time that is watched was cut; `steps` and `unrefined` are the steps
                  of the simulation with and without that, `cost` the cost of a path over one without
    others        the widths of legs, parts and probabilities
    """

    lower: float
    upper: float
    width: float
    width_standard_error: float
    target: float
    reached: bool
    pieces: int
    steps: int
    unrefined: int
    cost: float
    others: tuple[Width, ...]


@dataclass(frozen=True, slots=True)
class HedgeLine(Result):
    """What a hedger is left with who trades on `dates` dates, today included (0: without a hedge): the standard
    deviation of the discounted value less the hedge's gains, in the unit of the price, and its standard error."""

    dates: int
    deviation: float
    standard_error: float


@dataclass(frozen=True, slots=True)
class PriceResult(Result):
    """What a contract is worth: `mcx price`.

    `notional` or `units` is None. `bracket` is None but where the price is the middle of two bounds; `interval95` is
    about sampling alone. `model_bracket` (a `ModelBracketResult`) is None but where vols are given by strike.
    `valuation` is None for textbook markets. `ends` holds how often the contract ended early on each date,
    `reached_maturity` how often it did not, and `expected_life` the years to the payment that ends it. `reduction`
    lists the methods of variance reduction, 'none' without, `reduction_notes` what they found;
    `paths` counts both paths of a pair. `hedge` is empty unless gains of a hedge are among the methods. `owed` are
    amounts that fixings have settled and that are not yet paid; they are part of the price, which is dirty: `accrued` is
    the interest of certain coupons in their running period, and `clean` the price less that. `ended` is the date on which
    the contract has ended already, '' where it lives. `warnings` are about this run and about what looks like a slip,
    `assumptions` what was taken as given, `limits` what the model leaves out, `cautions` how the number may be used.
    """

    MAIN: ClassVar[str] = "legs"
    contract: str
    payoff: str
    valuation: str | None
    currency: str
    notional: float | None
    units: float | None
    unit: str
    price: float
    standard_error: float
    interval95: tuple[float, float]
    bracket: Bracket | None
    model_bracket: Result | None
    value: float
    value_standard_error: float
    paths: int
    seconds: float
    seed: int
    reduction: str
    reduction_notes: tuple[str, ...]
    hedge: tuple[HedgeLine, ...]
    interrupted: bool
    planned: Planned
    legs: tuple[Amount, ...]
    parts: tuple[Amount, ...]
    conditions: tuple[Condition, ...]
    ends: tuple[Likelihood, ...]
    reached_maturity: Likelihood
    expected_life: float
    expected_life_standard_error: float
    owed: tuple[Owed, ...]
    accrued: float
    clean: float
    ended: str
    checks: Checks
    warnings: tuple[str, ...]
    assumptions: tuple[str, ...]
    limits: tuple[str, ...]
    cautions: tuple[str, ...]
    calendar_version: str


@dataclass(frozen=True, slots=True)
class PriceTable(Result):
    """Several contracts on one market, in the order of the files; after an interruption `not_valued` are the titles
    of those that were not reached."""

    MAIN: ClassVar[str] = "prices"
    prices: tuple[PriceResult, ...]
    not_valued: tuple[str, ...] = ()

    @property
    def interrupted(self) -> bool:
        return bool(self.not_valued) or any(price.interrupted for price in self.prices)


@dataclass(frozen=True, slots=True)
class TermLine(Result):
    """A term of the contract: its value as words."""

    name: str
    type: str
    value: str
    about: str


@dataclass(frozen=True, slots=True)
class Sentence(Result):
    """What a name means: a `let` name, a running value, a quote of the market."""

    name: str
    text: str


@dataclass(frozen=True, slots=True)
class EventLine(Result):
    """What happens: `ends_here` says of a date on which the contract ends whether this event still happens on it."""

    name: str
    text: str
    ends_here: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class DateLine(Result):
    """One thing that happens on one date. `nth` counts in its schedule; `terms` are the numbers of that date; `paid`
    when an amount would be paid, '' where nothing is."""

    date: str
    nth: int
    what: str
    terms: str
    paid: str


@dataclass(frozen=True, slots=True)
class WatchLine(Result):
    """How something is watched. `law`: 'exact', 'bracketed' (several assets: between two bounds), 'refused' or 'unread'
    (nothing depends on it)."""

    name: str
    when: str
    law: str
    reason: str


@dataclass(frozen=True, slots=True)
class AssetDate(Result):
    """An asset on a date: its forward, and its Black vol from the valuation date to it."""

    asset: str
    forward: float
    vol: float


@dataclass(frozen=True, slots=True)
class MarketDate(Result):
    """The market on one date; `assets` is empty where nothing is observed (a payment day)."""

    date: str
    discount_factor: float
    funded_discount_factor: float
    assets: tuple[AssetDate, ...]


@dataclass(frozen=True, slots=True)
class Payment(Result):
    """An amount paid on a given path, undiscounted, in the unit of the price (`amount`) and in currency (`value`)."""

    date: str
    leg: str
    amount: float
    value: float


@dataclass(frozen=True, slots=True)
class Met(Result):
    """Whether a named condition held on a given path, and on which dates (not listed beyond 64 dates)."""

    name: str
    held: bool
    dates: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class PathResult(Result):
    """Given levels run through the contract: every payment that is not 0, every named condition, and the date (or
    year) in which the contract ended early, '' if it did not. `notes` say how the levels were taken."""

    MAIN: ClassVar[str] = "payments"
    payments: tuple[Payment, ...]
    total: float
    conditions: tuple[Met, ...]
    ended: str
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Readback(Result):
    """What a contract says: `mcx readback`. `warnings` are about what looks like a slip; `quotes` (spots, correlations,
    funding) and `market` are empty without a market, `path` None without given levels, `state` (a `StateView`) None
    without a dated market."""

    MAIN: ClassVar[str] = "dates"
    contract: str
    payoff: str
    about: str
    facts: tuple[Sentence, ...]
    terms: tuple[TermLine, ...]
    lets: tuple[Sentence, ...]
    running: tuple[Sentence, ...]
    events: tuple[EventLine, ...]
    watches: tuple[WatchLine, ...]
    dates: tuple[DateLine, ...]
    warnings: tuple[str, ...]
    assumptions: tuple[str, ...]
    quotes: tuple[Sentence, ...]
    market: tuple[MarketDate, ...]
    path: PathResult | None
    state: Result | None


@dataclass(frozen=True, slots=True)
class ReadbackTable(Result):
    """Several contracts."""

    readbacks: tuple[Readback, ...]

    def rows(self) -> list[dict]:
        """The dates of all contracts."""
        return [{"contract": each.contract, **row} for each in self.readbacks for row in each.rows()]


@dataclass(frozen=True, slots=True)
class Definition(Result):
    """A payoff definition of the library; `assets` is how many it takes."""

    name: str
    about: str
    assets: str
    text: str


@dataclass(frozen=True, slots=True)
class Library(Result):
    """The definitions there are: `mcx payoffs`."""

    MAIN: ClassVar[str] = "payoffs"
    payoffs: tuple[Definition, ...]


@dataclass(frozen=True, slots=True)
class Replay(Result):
    """Whether a stored valuation reproduces: `mcx replay`.

    `identical`: every number, name and date is the same, to the last bit on the same type of processor, within 1e-12
    elsewhere. `largest_difference` is the largest of |difference| / max(1, |stored|); `first_difference` names the
    first result that differs ('' where none does), with what was stored and found. `changed` lists what is not as it
    was when the record was written: versions, source and processor.
    """

    identical: bool
    largest_difference: float
    first_difference: str
    stored: float | str | None
    found: float | str | None
    changed: tuple[str, ...]
