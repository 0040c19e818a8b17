"""The model bracket of every shipped example whose assets are given vols by strike: it comes, flat smiles have no width."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from mcx.checked.contract import Contract
from mcx.checked.load import load
from mcx.checked.market import AssetMarket, Curve, Market, StrikeVols
from mcx.checked.strike_vols import priced_curve
from mcx.dates.dating import date_on
from mcx.estimators.batches import FEWEST_PATHS, Sampling
from mcx.estimators.model_bracket import ModelBracket, model_bracket
from mcx.estimators.ready import prepare
from mcx.estimators.revalue import Revaluer

EXAMPLES = sorted((Path(__file__).resolve().parents[2] / "payoffs" / "examples").glob("*.yaml"))
STRIKES = (0.5, 0.8, 1.0, 1.25)
SEED = 0xC67178F2E372532B


def with_smile(market: Market, slope: float) -> Market:
    """Each asset with its vols at the spot, higher below and lower above."""
    def at(curve: Curve, strike: float) -> Curve:
        return replace(curve, nodes=tuple(
            replace(node, quoted=replace(node.quoted, value=node.quoted.value * (1.0 + slope * (1.0 - strike))))
            for node in curve.nodes))

    def made(asset: AssetMarket) -> AssetMarket:
        vols = StrikeVols(STRIKES, tuple(at(asset.vol, strike) for strike in STRIKES), True, 1.0, asset.place)
        return replace(asset, by_strike=vols, vol=priced_curve(vols))

    return replace(market, assets={name: made(asset) for name, asset in market.assets.items()})


def brackets(file: Path, slope: float) -> list[tuple[Contract, ModelBracket | None]]:
    request, found = load([file]), []
    market = with_smile(request.market, slope)
    for contract in request.contracts:
        dated, faults = date_on(contract, market)
        assert not faults
        ready, faults = prepare(dated, market)
        assert not faults
        found.append((contract, model_bracket(ready, market, Sampling(SEED, FEWEST_PATHS))))
    return found


@pytest.mark.parametrize("file", EXAMPLES, ids=lambda file: file.stem)
def test_flat(file: Path):
    """Exactly no width, whatever the contract."""
    for contract, found in brackets(file, 0.0):
        assert found is not None, contract.title
        assert {(each.value, each.standard_error) for each in found.changes} <= {(0.0, 0.0)}, contract.title


@pytest.mark.parametrize("file", EXAMPLES, ids=lambda file: file.stem)
def test_skewed(file: Path):
    """Every level has its vol; the strip of what depends on single levels is near the corrected jump where both are all
    that there is."""
    for contract, found in brackets(file, 0.6):
        for one in found.strikes:
            for name, vol in one.vols:
                assert 0.0 < vol < 1.0
            assert all(name in contract.assets for name, _ in one.levels)
        assert found.exact <= bool(found.strip)
        if found.exact and len(found.strikes) == 1 and found.strikes[0].skewed:
            skewed = found.strikes[0].skewed[0]
            assert abs(skewed.value - found.strip[0]) < 4.0 * skewed.standard_error + 0.02 * abs(found.strip[0])
