"""How far one vol for each asset and tenor lets a price be where vols differ by strike: the model bracket.

Lognormal levels have one vol; a contract that refers to several levels has a price for the vol of each. All are taken
on the same paths. Two answers to what one vol leaves out join them:

- a jump at the last date is a digital, and under vols by strike it is worth Black's term plus the vega of its put times
  the slope of vol in strike (`tape/jump_put.py`), to first order, on each side of a strike where vols are quoted;
- payments that depend on one level of one date are sums of puts and digitals, each at the vol of its own strike: where
  the whole price is such, that needs no model at all. It lies beyond every single vol where a contract buys one strike
  and sells another, as a capped gain does.

The lowest and the highest of them are the bracket. No lognormal model can do better.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from mcx.checked.market import Curve, Market
from mcx.estimators.batches import FEWEST_PATHS, Batches, Sampling
from mcx.estimators.estimate import Estimate
from mcx.estimators.ready import Ready
from mcx.estimators.revalue import Revaluer
from mcx.leaves.market_map import MarketMap
from mcx.leaves.smile import LevelLaw, at_strikes, laws
from mcx.tape.jump_put import jump_put
from mcx.tape.pieces import Piece, pieces
from mcx.tape.program import Tape
from mcx.tape.registers import uniform_values
from mcx.tape.strikes import READ, Strike, price_alone, strikes

MOST_PATHS = 1 << 17  # differences on the same paths are known better than a price
SLOPE = 1e-3  # share of a level over which the slope of vol in strike is taken
SIDES = (-1.0, 1.0)
ENDS = (min, max)


@dataclass(frozen=True, slots=True)
class AtStrike:
    """The price at the vol of one level: `levels` and `vols` by asset (levels as the contract reads them, vols to its
    last observation), `change` the price less the headline price; `skewed`: the same with the jump there corrected for
    the slope of vol, below and above the level, empty without a jump."""

    levels: tuple[tuple[str, float], ...]
    vols: tuple[tuple[str, float], ...]
    forward_start: bool
    change: Estimate
    skewed: tuple[Estimate, ...]


@dataclass(frozen=True, slots=True)
class ModelBracket:
    """Prices less the headline price: at each strike, and `strip`, with every payment that depends on one level at the
    vols of its own strikes (the lowest and the highest by the slopes of vol on both sides of each; empty where there is
    none). `exact`: these are all payments that differ from path to path, of levels in the contract's own currency.
    `headline_vols`: those of the headline price, to its last observation.
    """

    strikes: tuple[AtStrike, ...]
    strip: tuple[float, ...]
    exact: bool
    headline_vols: tuple[tuple[str, float], ...]
    paths: int

    @property
    def settled(self) -> tuple[float, float] | None:
        """Where the strip is the price, the lowest and the highest that it is less the headline price."""
        return (self.strip[0], self.strip[-1]) if self.exact else None

    @property
    def changes(self) -> tuple[Estimate, ...]:
        """Everything that the bracket spans."""
        every = [each for at in self.strikes for each in (at.change, *at.skewed)]
        return (*every, *(Estimate(change, 0.0, self.paths) for change in self.strip))

    @property
    def low(self) -> Estimate | None:
        """The lowest of all, less the headline price; None where the price refers to no level."""
        return min(self.changes, key=lambda each: each.value, default=None)

    @property
    def high(self) -> Estimate | None:
        return max(self.changes, key=lambda each: each.value, default=None)


def model_bracket(ready: Ready, market: Market, sampling: Sampling) -> ModelBracket | None:
    """The bracket of a contract's price on a market, None where no asset of it has vols by strike or nothing is to be
    observed any more. Errors are those of differences on the first 2^17 of the paths. Raises KeyboardInterrupt after an
    interruption."""
    contract = ready.dated.contract
    if not any(market.assets[name].by_strike for name in contract.assets):
        return None
    tape = price_alone(ready.unrolled.observed)
    end = max((step.payload.time for step in tape.instructions if step.op in READ), default=None)
    if end is None:
        return None
    here = MarketMap.of(market, ready.dated)
    spots = [here.forward(name, 0.0) for name in contract.assets]
    known = uniform_values(tape, here.values(tape.leaves))
    found = strikes(tape, known, spots)
    sampling = replace(sampling, paths=max(min(sampling.paths, MOST_PATHS), FEWEST_PATHS), progress=None, notice=None)
    revaluer = Revaluer.of(ready.unrolled.tape, contract)
    runs = _Runs(ready, market, revaluer, sampling)
    at = tuple(_at_strike(runs, strike, None if ready.dated.hits else jump_put(tape, known, strike, end, spots), end)
               for strike in found)
    strip, whole = pieces(tape, known, found)
    apart = {contract.assets[piece.asset] for piece in strip} & set(contract.conversion)  # that of its rate is not said
    return ModelBracket(at, _strip(market, ready, here, strip), whole and not apart,
                        tuple((name, here.vol_to(name, end)) for name in contract.assets), sampling.paths)


class _Runs:
    """One contract under many vols on the same paths; equal markets are run once."""

    def __init__(self, ready: Ready, market: Market, revaluer: Revaluer, sampling: Sampling):
        self.ready, self.market, self.revaluer, self.sampling = ready, market, revaluer, sampling
        self.names = ready.dated.contract.assets
        self.base = revaluer.price(market, sampling)[0]
        self.known = {self._vols(market): self.base.means}

    def market_at(self, levels: Sequence[tuple[int, float]], scale: float = 1.0) -> Market:
        return at_strikes(self.market, self.ready.dated.contract,
                          {self.names[number]: level * scale for number, level in levels})

    def parts(self, market: Market) -> np.ndarray:
        """The price by parts of the run."""
        key = self._vols(market)
        if key not in self.known:
            self.known[key] = self.revaluer.by_parts(market, self.sampling)
        return self.known[key]

    def _vols(self, market: Market) -> tuple[Curve, ...]:
        return tuple(market.assets[name].vol for name in self.names)

    def estimate(self, means: np.ndarray) -> Estimate:
        return Batches(self.base.paths, means).estimates()[0]


def _at_strike(runs: _Runs, strike: Strike, put: Tape | None, end: float) -> AtStrike:
    there = runs.market_at(strike.levels)
    change = runs.parts(there) - runs.base.means
    skewed: tuple[Estimate, ...] = ()
    if put is not None:
        puts = Revaluer.of(runs.ready.expanded(put), runs.ready.dated.contract)
        at = puts.by_parts(there, runs.sampling)
        beside = (puts.by_parts(runs.market_at(strike.levels, 1.0 + side * SLOPE), runs.sampling) for side in SIDES)
        skewed = tuple(runs.estimate(change + (moved - at) / (side * SLOPE))
                       for side, moved in zip(SIDES, beside, strict=True))
    seen = MarketMap.of(there, runs.ready.dated)
    levels = tuple((runs.names[number], level) for number, level in strike.levels)
    return AtStrike(levels, tuple((name, seen.vol_to(name, end)) for name, _ in levels), strike.forward_start,
                    runs.estimate(change), skewed)


def _strip(market: Market, ready: Ready, here: MarketMap, strip: Sequence[Piece]) -> tuple[float, ...]:
    """What the payments of one level each are worth at the vols of their own strikes, less what they are at one vol."""
    if not strip:
        return ()
    contract = ready.dated.contract
    by_vols = {asset: [laws(market, contract, here, contract.assets[asset], smile) for smile in (False, True)]
               for asset in {piece.asset for piece in strip}}
    changes = [0.0 for _ in ENDS]
    for piece in strip:
        flat, smile = (worth(piece, law(piece.time)) for law in by_vols[piece.asset])
        changes = [change + at - before for change, at, before in zip(changes, smile, flat, strict=True)]
    return tuple(changes)


def worth(piece: Piece, under: LevelLaw) -> tuple[float, ...]:
    """The mean of a function of a level that is straight between its breaks: a line, puts and digitals; the lowest and
    the highest by the slopes of vol beside each strike, which go apart at the two ends of a range."""
    terms = [piece.above[-1], piece.slopes[-1] * (under.forward - piece.breaks[-1])]  # the call less the put
    digitals = []
    for k, level in enumerate(piece.breaks):
        terms.append((piece.slopes[k + 1] - piece.slopes[k]) * under.put(level))
        jump = piece.below[k] - piece.above[k]
        digitals.append([jump * under.below(level, side) for side in SIDES] if jump else [0.0])
    return tuple(math.fsum((*terms, *map(end, digitals))) for end in ENDS)
