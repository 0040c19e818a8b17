"""The result of `mcx greeks`, and the keys of its JSON.

Units are those of the trade, and each number's is stated beside it in `unit`: delta per 1 of spot, and for a move of
1 % in percent of the notional (in currency where there is none); gamma as the change of delta for a move of 1 %; vega
and correlation per point (1 %), rho, yield and funding per basis point of a zero rate, theta for one calendar day. What
is not in percent of the notional is in the contract's currency, for the whole notional or number of units.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from mcx.report.results import Bracket, Planned, Result


@dataclass(frozen=True, slots=True)
class Greek(Result):
    """One sensitivity. `asset` is the asset, the pair ('harbour/quarry') or, for rho and funding, the currency; `tenor`
    the node of the curve as written, 'all' for all its nodes at once, '' where there is one number only. `interval95`
    is by Student's t for the number of independent parts that the error comes from. `resolved`: the value is at least
    twice its error. `note` says what is known of a bias."""

    name: str
    asset: str
    tenor: str
    value: float
    standard_error: float
    interval95: tuple[float, float]
    unit: str
    estimator: str
    resolved: bool
    note: str


@dataclass(frozen=True, slots=True)
class Refused(Result):
    """A sensitivity that is not given, and why."""

    name: str
    asset: str
    tenor: str
    reason: str


@dataclass(frozen=True, slots=True)
class Jump(Result):
    """What makes a payment jump: a 'condition', a 'division' by what may be 0, or a 'root' (also a log) of what may be
    0, which has no bounded slope there; and where in which file it stands."""

    kind: str
    place: str


@dataclass(frozen=True, slots=True)
class AssetDelta(Result):
    """Delta of an asset, currency per 1 of spot."""

    asset: str
    value: float
    standard_error: float


@dataclass(frozen=True, slots=True)
class Rung(Result):
    """The contract with all spots moved by `spot_move` (0.01 is 1 %): price and error in the unit of the price, value
    in currency, `change` of the value from where the spots stand with the error of that difference, deltas by asset.
    `jumps` are the places of conditions on today's levels that turn between this rung and the next."""

    spot_move: float
    price: float
    standard_error: float
    value: float
    change: float
    change_standard_error: float
    deltas: tuple[AssetDelta, ...]
    jumps: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class GridPoint(Result):
    """As a rung, with all vols moved by `vol_move` (0.01 is one point) as well. `refused` says why there is no
    value."""

    spot_move: float
    vol_move: float
    price: float
    standard_error: float
    value: float
    change: float
    change_standard_error: float
    refused: str


@dataclass(frozen=True, slots=True)
class GreeksResult(Result):
    """How a contract's value moves: `mcx greeks`.

    `greeks` are the estimates, `comparison` the same ones by revaluation with common random numbers where that was asked
    for. `estimator` is what was asked for; each Greek names its own, and `choices` says why. `jumps` are the conditions
    that forbid pathwise estimates. `bracket` is None but where the price is the middle of two bounds: then every number is
    that of the middle. `bump`, `assets`, `spot_moves` and `vol_moves` repeat the request.
    """

    MAIN: ClassVar[str] = "greeks"
    contract: str
    payoff: str
    valuation: str | None
    currency: str
    notional: float | None
    units: float | None
    unit: str
    price: float
    standard_error: float
    bracket: Bracket | None
    paths: int
    seconds: float
    seed: int
    reduction: str
    interrupted: bool
    estimator: str
    bump: float | None
    assets: tuple[str, ...]
    spot_moves: tuple[float, ...]
    vol_moves: tuple[float, ...]
    planned: Planned
    greeks: tuple[Greek, ...]
    refused: tuple[Refused, ...]
    comparison: tuple[Greek, ...]
    choices: tuple[str, ...]
    jumps: tuple[Jump, ...]
    ladder: tuple[Rung, ...]
    grid: tuple[GridPoint, ...]
    warnings: tuple[str, ...]
    assumptions: tuple[str, ...]
    limits: tuple[str, ...]
    cautions: tuple[str, ...]
    calendar_version: str


@dataclass(frozen=True, slots=True)
class GreeksTable(Result):
    """Several contracts on one market, in the order of the files. `not_valued` are the titles of those that an
    interruption left out."""

    contracts: tuple[GreeksResult, ...]
    not_valued: tuple[str, ...] = ()

    @property
    def interrupted(self) -> bool:
        return bool(self.not_valued) or any(result.interrupted for result in self.contracts)

    def rows(self) -> list[dict]:
        """The sensitivities of all contracts."""
        return [{"contract": each.contract, **row} for each in self.contracts for row in each.rows()]
