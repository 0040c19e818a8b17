"""Several assets watched together: the truth lies between the bounds, and terms are solved on steps as fine."""

from __future__ import annotations

from math import exp, sqrt

import numpy as np
from helpers import document, request_of
from test_watching import ALWAYS, COUNTED, TWO, bounds

from mcx.dates.dating import date_contract
from mcx.estimators.batches import Sampling
from mcx.estimators.bracket import PIECES, refine
from mcx.estimators.ready import made, prepare
from mcx.estimators.term import solve_term
from mcx.machine.run import Stream

SEED = 0x06CA6351E003826F
OVERSHOOT = 0.5826  # deviations of a step (Broadie, Glasserman & Kou 1997)


def survival_on_a_grid(rho: float, steps: int, paths: int) -> tuple[float, float]:
    """How often two assets stay above 85 % for a year, looked at so many times with the barrier moved by the overshoot
    of a step, and the error; every walk beside its mirror image."""
    vol, drift, dt = 0.22, 0.04 - 0.015 - 0.5 * 0.22**2, 1.0 / steps
    rng, level = np.random.default_rng(SEED), np.log(0.85) + OVERSHOOT * vol * sqrt(dt)
    walks, alive = np.zeros((2, 2, paths)), np.ones((2, paths), dtype=bool)  # mirrored or not, asset, path
    for _ in range(steps):
        one, other = rng.standard_normal((2, paths))
        moved = vol * sqrt(dt) * np.stack([one, rho * one + sqrt(1.0 - rho**2) * other])
        walks += drift * dt + np.stack([moved, -moved])
        alive &= walks.min(axis=1) > level
    found = alive.mean(axis=0)
    return found.mean(), found.std() / sqrt(paths)


def test_partly_correlated_assets_lie_between_the_bounds():
    """Two assets with a correlation of 60 % on a fine grid: between the bounds of one step, far from either, and
    between those of many steps, which are closer than the grid's error."""
    chance, error = survival_on_a_grid(0.6, 1 << 9, 1 << 14)
    truth, error = exp(-0.04) * chance, exp(-0.04) * error
    for pieces, paths in ((1, 2**15), (32, 2**14)):
        low, high = bounds("60%", pieces, paths, count=1)
        below, above = (np.hypot(error, each.std() / sqrt(paths)) for each in (low, high))
        assert low.mean() - 4 * below < truth < high.mean() + 4 * above
        if pieces == 1:
            assert low.mean() + 3 * below < truth < high.mean() - 3 * above
    assert 0.0 < high.mean() - low.mean() < error < 2e-3


def test_a_term_is_solved_with_the_steps_of_the_price():
    """The barrier at which a worst-of no-touch is worth what it is worth between bounds that were refined is its own;
    the middle of bounds that were not is another price."""
    request = request_of(COUNTED + document("counted", assets="[harbour, lantern]", lower=85, upper=1e9, watched=ALWAYS,
                                            dates="1y", expiry="1y") + TWO.replace("RHO", "30%"))
    dated, _ = date_contract(request.contracts[0], None)
    sampling = Sampling(SEED, 2**12, Stream.MAIN, 1)
    coarse, fine = (prepare(dated, request.market, pieces=pieces)[0] for pieces in (1, 16))
    assert (coarse.pieces, fine.pieces) == (1, 16)
    prices = [sampling.sums(ready.program)[1].value for ready in (coarse, fine)]
    assert abs(prices[0] - prices[1]) > 1e-3
    (found,) = solve_term(fine, request.market, "lower", prices[1], sampling).solutions.found
    assert abs(found.move - 85.0) < 1e-3


def test_steps_are_as_fine_as_a_target_asks_and_no_finer():
    """The bounds are closer than the target by the pilot, and were not with the steps tried before."""
    request = request_of(COUNTED + document("counted", assets="[harbour, lantern]", lower=85, upper=1e9, watched=ALWAYS,
                                            dates="1y", expiry="1y") + TWO.replace("RHO", "30%"))
    dated, _ = date_contract(request.contracts[0], None)
    here = prepare(dated, request.market)[0].market
    widths = [refine(lambda number: made(dated, here, number), 1.0, seed=SEED, pieces=number)[2].width
              for number in PIECES[:4]]
    found = []
    for target in (0.2, *(0.9 * (width.value + 2.0 * width.standard_error) for width in widths[:3])):
        refinement = refine(lambda number: made(dated, here, number), target, seed=SEED)[2]
        assert refinement.reached and refinement.width.value < refinement.target == target
        found.append(refinement.pieces)
    assert tuple(found) == PIECES[:4]
