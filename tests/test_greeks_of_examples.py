"""Every shipped example: its sensitivities against revaluation on the same random numbers."""

from __future__ import annotations

from functools import cache
from math import hypot
from pathlib import Path

import pytest

from greek_tools import by_name
from mcx.checked.load import Request, load
from mcx.dates.dating import date_on
from mcx.estimators.greeks import Wish, sensitivities
from mcx.estimators.plan import Precision
from mcx.estimators.ready import prepare
from mcx.estimators.sensitivities import ALL

EXAMPLES = sorted((Path(__file__).resolve().parent.parent / "payoffs" / "examples").glob("*.yaml"))
SEED, DRAWS = 0x428A2F98D728AE22, 1 << 21
SIZES = (0.005, 0.01)
ALMOST = 1e-9  # of the value of the contract: rounding
DAILY = {"autocall-1", "barrier_reverse_convertible-1", "barrier_reverse_convertible-3", "bonus-1", "range_accrual-0",
         "snowball_autocall-1", "variance_swap-0"}  # hundreds of dates: a minute and more together
AT_A_KINK = {"lookback-0": "gamma"}  # its strike is the spot, where the second derivatives of the two sides differ


@cache
def request_of(example: Path) -> Request:
    return load([example])


def contracts() -> list:
    found = []
    for example in EXAMPLES:
        for number in range(len(request_of(example).contracts)):
            name = f"{example.stem}-{number}"
            found.append(pytest.param(example, number, id=name, marks=[pytest.mark.slow] if name in DAILY else []))
    return found


@pytest.mark.parametrize(("example", "number"), contracts())
def test_estimators_agree_with_revaluation(example: Path, number: int):
    """Within four errors, and what the revaluation's bias may be: how far two sizes of its moves are apart. The nodes
    of a curve of rates are left to their sum: they shift a drift so little that no path may cross a jump."""
    request = request_of(example)
    dated, _ = date_on(request.contracts[number], request.market)
    made, _ = prepare(dated, request.market)
    paths = min(max(DRAWS // max(made.program.draws, 1), 1 << 12), 1 << 16)
    runs = [sensitivities(made, request.market, Wish(bump=size), Precision(paths=paths), seed=SEED) for size in SIZES]
    found, (near, far) = by_name(runs[0].values), (by_name(run.comparison) for run in runs)
    assert len(found) + len(runs[0].refused) == len(near) + 1, "each is given or refused, and theta comes on top"
    rounding = ALMOST * abs(runs[0].price.value) * dated.contract.size
    for key, estimate in found.items():
        name, _, tenor = key
        node_of_rates = name == "rho" and tenor not in ("", ALL)
        if name == "theta" or node_of_rates or AT_A_KINK.get(f"{example.stem}-{number}") == name:
            continue
        allowed = 4 * hypot(estimate.error, near[key].error) + abs(near[key].mean - far[key].mean)
        assert abs(estimate.mean - near[key].mean) <= allowed + rounding, key
    for (name, asset, tenor), whole in found.items():
        if tenor == ALL:
            nodes = [value.mean for key, value in found.items() if key[:2] == (name, asset) and key[2] != ALL]
            assert sum(nodes) == pytest.approx(whole.mean, rel=1e-10, abs=rounding), "the nodes add up to the whole"
