"""Small tools that the tests share: contracts from text, runs from contracts, and the one way to judge an estimate.

`prepare` goes from the text of documents to a `Ready`, on which `price` runs the machine again and again without
reading anything anew. `check` judges.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import sqrt

import numpy as np

from mcx.checked.load import Request, checked_request
from mcx.checked.market import Market
from mcx.dates.dated_contract import DatedContract
from mcx.dates.dating import date_on
from mcx.leaves.market_map import MarketMap
from mcx.machine.run import run, values_by_path
from mcx.tape.program import Program
from mcx.tape.registers import lower
from mcx.tape.unroll import Unrolled, unroll
from mcx.text.documents import parse_documents


@dataclass(frozen=True)
class Estimate:
    """A mean and its standard error."""

    mean: float
    error: float


def check(estimate: Estimate, truth: float, sharp: float = 2e-3) -> None:
    """The estimate is within four standard errors of the truth, and its error is at most `sharp` of the truth's
    size: small enough that a mistake in the third digit or so would be seen."""
    assert estimate.error <= sharp * abs(truth), f"error {estimate.error:.3g} of {truth:.6g} shows too little"
    z = (estimate.mean - truth) / estimate.error if estimate.error else 0.0 if estimate.mean == truth else np.inf
    assert abs(z) < 4, f"{estimate.mean:.8g} +- {estimate.error:.2g} against {truth:.8g}: z = {z:.2f}"


def estimate_of(values: np.ndarray) -> Estimate:
    """Mean and standard error of independent values."""
    return Estimate(float(values.mean()), float(values.std(ddof=1) / sqrt(len(values))))


def document(payoff: str, assets: str = "[harbour]", size: str = "units: 1", currency: str = "EUR",
             **terms: object) -> str:
    """A textbook contract, its terms as they would be written."""
    head = f"contract: {payoff}\ncurrency: {currency}\n{size}\nassets: {assets}\npayoff: {payoff}\nterms:\n"
    return head + "".join(f"  {name}: {value}\n" for name, value in terms.items())


def request_of(text: str, file: str = "case.yaml") -> Request:
    """The checked documents of a text that is expected to be right."""
    documents, faults = parse_documents(text.encode(), file)
    made, faults = checked_request(documents, faults)
    assert not faults, "\n".join(map(str, faults))
    return made


@dataclass(frozen=True)
class Ready:
    """One contract under one market, ready to run."""

    dated: DatedContract
    market: Market
    unrolled: Unrolled
    program: Program

    @property
    def names(self) -> list[str]:
        """The names of the outputs, in the program's order."""
        return [output.name for output in self.unrolled.tape.outputs]

    def estimates(self, paths: int, seed: int) -> dict[str, Estimate]:
        """Every output by its name: price, 'leg: …', 'condition: …'."""
        sums = run(self.program, seed=seed, paths=paths)
        return {name: Estimate(float(mean), float(error))
                for name, mean, error in zip(self.names, sums.mean, sums.standard_error, strict=True)}

    def price(self, paths: int, seed: int) -> Estimate:
        """The price alone."""
        number = self.names.index("price")
        sums = run(replace(self.program, outputs=self.program.outputs[[number]]), seed=seed, paths=paths)
        return Estimate(float(sums.mean[0]), float(sums.standard_error[0]))

    def by_path(self, paths: int, seed: int) -> dict[str, np.ndarray]:
        """Every output on each of the first paths, by its name."""
        values = values_by_path(self.program, seed=seed, paths=paths)
        return dict(zip(self.names, values, strict=True))


def ready_of(request: Request, number: int = 0) -> Ready:
    """One contract of a request, made ready."""
    contract, market = request.contracts[number], request.market
    dated, faults = date_on(contract, market)
    assert dated is not None, "\n".join(map(str, faults))
    leaves = MarketMap.of(market, dated)
    assert not leaves.faults(), "\n".join(map(str, leaves.faults()))
    unrolled = unroll(dated, nodes=leaves.nodes(), makeup=leaves.makeup())
    assert not unrolled.faults, "\n".join(map(str, unrolled.faults))
    return Ready(dated, market, unrolled, lower(unrolled.tape, leaves.values(unrolled.tape.leaves)))


def prepare(text: str) -> Ready:
    """The only contract of a text, made ready."""
    return ready_of(request_of(text))


def price_of(text: str, paths: int, seed: int) -> Estimate:
    """The price of the only contract of a text."""
    return prepare(text).price(paths, seed)


def payments(text: str, paths: int, seed: int) -> dict[str, np.ndarray]:
    """Every output on each path."""
    return prepare(text).by_path(paths, seed)
