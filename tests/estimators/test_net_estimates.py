"""Estimates from scrambled points: unbiased, with errors that mean what they say, and shrinking faster than plain ones.

The truths and the rule of the calibration are those of `test_calibration.py`: over 400 seeds 92 to 98 % of the
intervals cover.
"""

from __future__ import annotations

from dataclasses import replace
from math import sqrt
from pathlib import Path

import numpy as np
import pytest
from helpers import Ready, check, estimate_of, ready_of
from scipy import stats
from test_calibration import KNOWN, RUNS

from mcx.checked.load import load
from mcx.estimators.estimate import Estimate, estimates
from mcx.estimators.nets import SCRAMBLES, Net, Order, clock, moves, net_draws, net_estimates, net_for, on_net
from mcx.faults import RequestError
from mcx.leaves.market_map import MarketMap
from mcx.machine.draw_plan import DrawPlan
from mcx.machine.run import ScrambleSums, draws
from mcx.tape.program import Program
from mcx.tape.steps import Grid

SEED = 0x510E527FADE682D1
EXAMPLES = sorted((Path(__file__).resolve().parents[2] / "payoffs" / "examples").glob("*.yaml"))


def variances(ready: Ready) -> np.ndarray:
    """The clock of a contract."""
    return clock(MarketMap(ready.market, ready.dated.contract), ready.unrolled.grid)


def laid_out(ready: Ready) -> tuple[MarketMap, Grid]:
    """What the plan of draws of a contract hangs on."""
    return MarketMap(ready.market, ready.dated.contract), ready.unrolled.grid


def price_only(ready: Ready) -> Program:
    """The program without the other outputs."""
    return replace(ready.program, outputs=ready.program.outputs[[ready.names.index("price")]])


def on_points(program: Program, how: tuple[MarketMap, Grid], net: Net, order: Order, seed: int) -> tuple[Estimate, ...]:
    """The estimates of a program over a net."""
    return net_estimates(on_net(program, net, net_draws(net, order, *how), seed=seed))


@pytest.mark.parametrize(("name", "order"), [*((name, Order.BRIDGE) for name in KNOWN),
                                              ("geometric average", Order.COMPONENTS)])
def test_intervals_cover(name: str, order: Order):
    """32 scrambles of 128 points: intervals cover, and the runs together are unbiased."""
    known = KNOWN[name]
    ready = known.ready()
    program, how = price_only(ready), laid_out(ready)
    seeds = np.random.default_rng(SEED).integers(1, 2**63, RUNS)
    found = [on_points(program, how, Net(128), order, int(seed))[0] for seed in seeds]
    hits = [low <= known.truth <= high for low, high in (estimate.interval95 for estimate in found)]
    assert 0.92 <= np.mean(hits) <= 0.98
    error = sqrt(sum(estimate.standard_error**2 for estimate in found)) / RUNS
    assert abs(np.mean([estimate.value for estimate in found]) - known.truth) < 4 * error


@pytest.mark.parametrize("example", EXAMPLES, ids=lambda path: path.stem)
@pytest.mark.parametrize("order", [Order.BRIDGE, Order.COMPONENTS])
def test_every_output_of_every_example_is_unbiased(example: Path, order: Order):
    """Each output is that of pseudo-random paths, |z| < 4.5 for some 20 outputs of each of 50 runs; and the price has
    the smaller error."""
    request, net = load([example]), Net(256)
    for number in range(len(request.contracts)):
        ready = ready_of(request, number)
        found = on_points(ready.program, laid_out(ready), net, order, SEED)
        plain = ready.estimates(1 << 15, SEED)
        for name, estimate in zip(ready.names, found, strict=True):
            error = sqrt(estimate.standard_error**2 + plain[name].error ** 2)
            assert abs(estimate.value - plain[name].mean) <= 4.5 * error + 1e-12
        assert found[0].standard_error < plain["price"].error * sqrt((1 << 15) / net.paths)


@pytest.mark.parametrize("order", [Order.BRIDGE, Order.COMPONENTS])
def test_errors_shrink_faster_than_for_random_numbers(order: Order):
    """A geometric average over 12 dates against its closed form: on the way from 2^6 to 2^13 points the root mean
    square error of a scramble falls with a power of the points steeper than -0.75, plain sampling's being -0.5."""
    known = KNOWN["geometric average"]
    ready = known.ready()
    program, how, sizes = price_only(ready), laid_out(ready), 1 << np.arange(6, 14)
    errors = []
    for points in sizes.tolist():
        net = Net(points, 48)
        means = on_net(program, net, net_draws(net, order, *how), seed=SEED).means[:, 0]
        errors.append(np.sqrt(np.mean((means - known.truth) ** 2)))
    assert np.polyfit(np.log(sizes), np.log(errors), 1)[0] < -0.75
    check(estimate_of(means), known.truth)


def test_the_error_is_students():
    """Mean, standard error and interval of a few independent means, each output for itself."""
    means = np.random.default_rng(SEED).normal(3.0, 1.0, size=(7, 2))
    for k, estimate in enumerate(net_estimates(ScrambleSums(64, means, np.ones((7, 2))))):
        expected = stats.t(6, means[:, k].mean(), stats.sem(means[:, k])).interval(0.95)
        assert estimate.interval95 == pytest.approx(expected, rel=1e-12)
        assert estimate.paths == 7 * 64
        assert estimate.times(-2.0).interval95 == pytest.approx((-2 * expected[1], -2 * expected[0]), rel=1e-12)
    first = net_estimates(ScrambleSums(64, means, np.ones((7, 2))), 3)[0]
    assert first.value == pytest.approx(means[:3, 0].mean()) and first.paths == 3 * 64


@pytest.mark.parametrize("odd", [0, 1, 3])
def test_points_too_even_to_differ_promise_nothing_exact(odd: int):
    """16 scrambles of 128 points, of which each has 40 or, a few, 41 points where 1 is paid: the error is that of a
    proportion with two more of either kind."""
    hits = np.array([41.0] * odd + [40.0] * (16 - odd))[:, None] / 128
    (found,) = net_estimates(ScrambleSums(128, hits, 128 * hits * (1.0 - hits)))
    share, jump = (odd + 2) / 20, 1.0 / 128
    assert 0.9 < found.standard_error / (jump * sqrt(share * (1.0 - share) / 16)) < 1.1


def test_what_is_the_same_on_every_path_is_exact():
    """No spread on the paths, no error."""
    (found,) = net_estimates(ScrambleSums(64, np.full((16, 1), 0.7), np.zeros((16, 1))))
    assert found == replace(found, value=0.7, standard_error=0.0)


@pytest.mark.parametrize(("paths", "points"), [(2048, 64), (2049, 128), (4096, 128), (1 << 20, 1 << 15), (100_000, 4096)])
def test_a_net_has_a_power_of_two_of_points(paths: int, points: int):
    """The smallest that has the paths asked for."""
    net = net_for(paths)
    assert (net.points, net.scrambles) == (points, SCRAMBLES) and net.paths >= paths


@pytest.mark.parametrize("paths", [2, 2047, (1 << 37) + 1])
def test_a_net_of_too_few_or_many_is_refused(paths: int):
    """What can be had is said."""
    with pytest.raises(RequestError, match=r"from 2,048 paths .* to 137,438,953,472, not"):
        net_for(paths)


def test_more_draws_than_coordinates_are_refused():
    """Before anything is drawn."""
    made = Program(np.empty((0, 6), np.int32), np.empty(0), np.zeros(1, np.int32), 21202, 0, 21202)
    with pytest.raises(RequestError, match="draws 21,202 numbers .* at most 21,201 coordinates"):
        on_net(made, Net(64), DrawPlan(64), seed=SEED)


def test_the_clock_is_the_variance_of_each_step():
    """Two assets: what the steps add up to is the total variance to the last date."""
    ready = KNOWN["exchange"].ready()
    np.testing.assert_allclose(variances(ready).sum(axis=0), [0.22**2, 0.30**2], rtol=1e-12)


def test_components_are_of_what_assets_do_together():
    """Two assets over one step: the matrix that moves their logs has their covariance, and the first coordinate moves
    them along its larger eigenvector, by numpy."""
    ready = KNOWN["exchange"].ready()
    (moved,) = moves(*laid_out(ready))
    covariance = moved @ moved.T
    np.testing.assert_allclose(np.diag(covariance), [0.22**2, 0.30**2], rtol=1e-12)
    assert abs(covariance[0, 1]) > 0.01
    plain, mixed = (draws(ready.program, seed=SEED, numbers=range(64), plan=net_draws(Net(64, 1), order, *laid_out(ready)))
                    for order in (Order.STEPS, Order.COMPONENTS))
    along = np.linalg.eigh(covariance)[1]  # the larger one last
    sizes = np.abs(mixed[:, :2] @ moved.T @ along[:, ::-1])
    np.testing.assert_allclose(sizes, np.abs(plain[:, :2]) * np.sqrt(np.linalg.eigvalsh(covariance)[::-1]), atol=1e-9)


def test_random_paths_keep_the_normal_quantile():
    """What is no net has the interval it had."""
    (plain,) = estimates(100, [1.0], [99.0])
    assert plain.half_width == pytest.approx(stats.norm.ppf(0.975) * 0.1, rel=1e-12)
