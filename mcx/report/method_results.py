"""The result of `mcx methods`, and the keys of its JSON.

Prices and errors are in the unit of `mcx price`; times are seconds of this machine as busy as it was, so that they, and
with them the numbers of paths, differ from run to run.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from mcx.report.results import Result


@dataclass(frozen=True, slots=True)
class Convergence(Result):
    """The standard error of a run of so many paths, and the seconds it took."""

    paths: int
    seconds: float
    standard_error: float


@dataclass(frozen=True, slots=True)
class MethodLine(Result):
    """One choice of methods.

    `variance_ratio` is plain sampling's variance over this one's at equal paths, with its own standard error;
    `cost_ratio` this one's processor time for a path over plain sampling's, the median of runs in pairs; `efficiency`
    the first over the second: how much longer plain sampling takes to the same error. `z` is the distance from all
    others pooled, `z_closed_form` from the closed form, None where there is none, both in standard errors.
    `paths_to_1bp` and `seconds_to_1bp` bring the 95 % half-width to 1 bp of the notional (of the price, for units), if
    the error shrinks as the root of the paths grows.
    Ratios are None for an exact result, which needs 0 paths.
    """

    method: str
    price: float
    standard_error: float
    paths: int
    seconds: float
    variance_ratio: float | None
    variance_ratio_error: float | None
    cost_ratio: float
    efficiency: float | None
    z: float
    z_closed_form: float | None
    paths_to_1bp: float
    seconds_to_1bp: float
    notes: tuple[str, ...]
    convergence: tuple[Convergence, ...]


@dataclass(frozen=True, slots=True)
class NotApplied(Result):
    """A choice of methods that has nothing to offer on this contract."""

    method: str
    reason: str


@dataclass(frozen=True, slots=True)
class MethodsResult(Result):
    """Which variance reduction pays on a contract: `mcx methods`. `methods` are sorted by efficiency."""

    MAIN: ClassVar[str] = "methods"
    contract: str
    payoff: str
    currency: str
    notional: float | None
    unit: str
    seed: int
    each: str
    closed_form: float | None
    methods: tuple[MethodLine, ...]
    not_applied: tuple[NotApplied, ...]
    assumptions: tuple[str, ...]
    limits: tuple[str, ...]
    cautions: tuple[str, ...]
    interrupted: bool
    calendar_version: str


@dataclass(frozen=True, slots=True)
class MethodsTable(Result):
    """Several contracts; after an interruption `not_compared` are the titles of those that were not reached."""

    contracts: tuple[MethodsResult, ...]
    not_compared: tuple[str, ...] = ()

    @property
    def interrupted(self) -> bool:
        return bool(self.not_compared) or any(each.interrupted for each in self.contracts)

    def rows(self) -> list[dict]:
        """The choices of all contracts."""
        return [{"contract": each.contract, **row} for each in self.contracts for row in each.rows()]
