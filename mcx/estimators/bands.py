"""How far the inputs' stated doubt lets a price be: first-order effects, their root of squares, the worst corner."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from mcx.checked.market import Market
from mcx.estimators.batches import Batches, Sampling
from mcx.estimators.estimate import Estimate
from mcx.estimators.levers import Lever
from mcx.estimators.revalue import Revaluer, impossible
from mcx.leaves.jacobian import Input, moved

HALVINGS = 6


@dataclass(frozen=True, slots=True)
class Effect:
    """What a move of an input up by its 90 % half-width does to the price, to first order: half the difference of the
    prices at both ends, on the same paths. `note` says how it was taken where both ends are no market."""

    lever: Lever
    change: Estimate
    note: str = ""


@dataclass(frozen=True, slots=True)
class Corner:
    """The price with every input at that end of its half-width which takes it towards a quote; `share` of the
    half-widths where no market is further out."""

    price: Estimate
    shares: tuple[tuple[Lever, float], ...]
    share: float


def effects(
    revaluer: Revaluer, market: Market, levers: Sequence[Lever], sampling: Sampling, base: Batches
) -> tuple[Effect, ...]:
    """The effect of every lever of which some half-width is stated and not 0. `base` is the price as the market
    stands."""
    return tuple(_effect(revaluer, market, lever, sampling, base) for lever in levers if any(lever.doubt(1.0).values()))


def _effect(revaluer: Revaluer, market: Market, lever: Lever, sampling: Sampling, base: Batches) -> Effect:
    size = 1.0
    for _ in range(HALVINGS):
        fits = {side: not impossible(market, revaluer.contract, lever.doubt(side * size)) for side in (1.0, -1.0)}
        if any(fits.values()):
            break
        size *= 0.5
    if not any(fits.values()):
        return Effect(lever, Estimate(0.0, 0.0, sampling.paths), "cannot move either way; not in the band")
    ends = {side: revaluer.by_parts(moved(market, lever.doubt(side * size)), sampling) if fits[side] else base.means
            for side in (1.0, -1.0)}
    distance = size * sum(fits.values())
    change = Batches(base.paths, (ends[1.0] - ends[-1.0]) / distance).estimates()[0]
    only = next((word for side, word in ((1.0, "down"), (-1.0, "up")) if not fits[side]), "")
    return Effect(lever, change, f"taken from a move {only} only: the other way is no market" if only else "")


def root_of_squares(found: Sequence[Effect]) -> float:
    """The 90 % half-width of the price where the inputs are independent and normal, to first order."""
    return math.hypot(*(effect.change.value for effect in found))


def corner(revaluer: Revaluer, market: Market, found: Sequence[Effect], gap: float, sampling: Sampling) -> Corner:
    """The price where every input is at the end of its half-width that narrows a gap (quote less price)."""
    sides = [(effect.lever, math.copysign(1.0, gap * effect.change.value)) for effect in found if effect.change.value]
    share = 1.0
    while impossible(market, revaluer.contract, joint_shifts(sides, share)) and share > 2.0**-HALVINGS:
        share *= 0.5
    price = revaluer.price(moved(market, joint_shifts(sides, share)), sampling)[1]
    return Corner(price, tuple(sides), share)


def joint_shifts(shares: Sequence[tuple[Lever, float]], scale: float = 1.0) -> dict[Input, float]:
    """Each lever by its own share of its half-widths, all scaled."""
    found: dict[Input, float] = {}
    for lever, share in shares:
        for number, shift in lever.doubt(scale * share).items():
            found[number] = found.get(number, 0.0) + shift
    return found


def direction(found: Sequence[Effect], gap: float) -> np.ndarray:
    """The joint move that closes a gap with the least root of squares of half-widths, to first order, (effects,)."""
    slopes = np.array([effect.change.value for effect in found])
    total = float(slopes @ slopes)
    return slopes * (gap / total) if total > 0.0 else np.zeros(len(slopes))
