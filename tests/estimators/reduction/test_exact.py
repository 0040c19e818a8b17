"""Exact means of controls against closed forms to the last digits, where a simulation would not see a small mistake;
and which places of a contract they are taken at."""

from __future__ import annotations

import math
from dataclasses import replace
from math import exp, sqrt
from pathlib import Path

import closed_forms as forms
import numpy as np
import pytest
from scipy.special import ndtr, ndtri
from test_laws import FLAT, SEED, made

from mcx.checked.load import load
from mcx.dates.dating import date_on
from mcx.estimators.estimate import Estimate
from mcx.estimators.plan import Independent
from mcx.estimators.ready import prepare
from mcx.estimators.reduction.candidates import Market, _exchange, candidates, evenly
from mcx.estimators.reduction.catalogue import scheme_of
from mcx.estimators.reduction.comparison import Compared, _doubt, closed_form, z_scores
from mcx.estimators.reduction.controls import change
from mcx.estimators.reduction.fit import PILOT_PATHS
from mcx.estimators.reduction.hedge import change as hedge
from mcx.estimators.reduction.laws import Lognormal, Walk, above_mean, call_mean, exchange_mean
from mcx.estimators.reduction.residual import residuals
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case, Draft, Scheme
from mcx.estimators.reduction.turning import Terms, Turn, turns
from mcx.estimators.reduction.watched import Watched
from mcx.machine.run import Stream, draws, run, values_by_path
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import LevelKey, Output

ONE, OTHER = (0, 1.0), (1, 1.0)  # both assets after a year
FORWARDS = {ONE: 100.0 * exp(0.025), OTHER: 95.0 * exp(0.01)}
DEVIATION = sqrt(0.22**2 + 0.3**2 - 2.0 * 0.4 * 0.22 * 0.3)  # of the log of one over the other


@pytest.fixture(scope="module")
def market() -> Market:
    return Market(made("exchange", FLAT))


def still(mean: float) -> Lognormal:
    return Lognormal((), 0.0, math.log(mean), np.zeros(1), np.zeros(1))


def test_options_on_lognormals(market: Market):
    """A level is a lognormal with its forward as mean; so is a product of powers."""
    one, other = (market.law.lognormal(((day, 1.0),)) for day in (ONE, OTHER))
    assert one.mean == pytest.approx(FORWARDS[ONE], rel=1e-13)
    assert exchange_mean(one, other) == pytest.approx(
        forms.exchange_of_forwards(FORWARDS[ONE], FORWARDS[OTHER], DEVIATION), rel=1e-12)
    for strike in (80.0, 104.0, 130.0):
        expected = forms.exchange_of_forwards(FORWARDS[ONE], strike, 0.22)
        assert call_mean(one, strike) == pytest.approx(expected, rel=1e-12)
        assert above_mean(one, strike) == pytest.approx(
            ndtr((math.log(FORWARDS[ONE] / strike) - 0.5 * 0.22**2) / 0.22), rel=1e-12)
    ratio = market.law.lognormal(((ONE, 2.0), (OTHER, -1.0)), 3.0)
    covariance = 0.4 * 0.22 * 0.3
    expected = 3.0 * FORWARDS[ONE] ** 2 / FORWARDS[OTHER] * exp(0.22**2 + 0.3**2 - 2.0 * covariance)
    assert ratio.mean == pytest.approx(expected, rel=1e-12)


def test_nothing_random_is_worth_what_it_is():
    assert exchange_mean(still(3.0), still(2.0)) == pytest.approx(1.0)
    assert exchange_mean(still(2.0), still(3.0)) == 0.0
    assert call_mean(still(3.0), 2.0) == pytest.approx(1.0) and call_mean(still(2.0), 3.0) == 0.0
    assert (above_mean(still(3.0), 2.0), above_mean(still(2.0), 3.0)) == (1.0, 0.0)


def test_a_digital_on_one_asset_above_another(market: Market):
    one, other = (market.law.lognormal(((day, 1.0),)) for day in (ONE, OTHER))
    found = {each.control.name: each.control.mean for each in _exchange(market, one, other, True, "both")}
    chance = ndtr((math.log(FORWARDS[ONE] / FORWARDS[OTHER]) - 0.5 * (0.22**2 - 0.3**2)) / DEVIATION)
    assert found["digital on both"] == pytest.approx(chance, rel=1e-12)


@pytest.mark.parametrize(("up", "barrier"), [(True, 95.0), (False, 105.0), (True, 100.0), (False, 100.0)])
def test_a_walk_that_starts_beyond_its_barrier_has_touched_it(up: bool, barrier: float):
    walk = Walk(math.log(100.0), 0.2, 0.04, math.log(barrier), up)
    assert walk.untouched(1.0, 1.0, -math.inf, math.inf) == 0.0


def test_options_on_a_geometric_average_are_moved_to_where_the_sum_turns():
    """By the difference of both means: 100 less what the sum lies above the product of its parts to the powers of their
    shares of the mean."""
    ready, times = made("average", FLAT), np.arange(1, 13) / 12
    forwards = 100.0 * np.exp(0.025 * times)
    shares = forwards / forwards.sum()
    variance = 0.22**2 * (shares @ np.minimum.outer(times, times) @ shares)
    above = forwards.mean() * (1.0 - exp(0.5 * (variance - 0.22**2 * (shares @ times))))
    names = [each.control.name for each in candidates(Market(ready))]
    strikes = [float(name.rpartition(" at ")[2]) for name in names if name.startswith("call on geometric")]
    assert strikes == pytest.approx([100.0 - above], abs=1e-4)


def test_a_return_over_an_earlier_level_is_a_control():
    """Its value on each path is the quotient of both levels: the mean is exact for the quotient."""
    market = Market(made("average", FLAT))
    early, late = market.days[0], market.days[-1]
    quotient = market.law.lognormal(((early, -1.0), (late, 1.0)))
    tape = market.ready.expanded(market.builder.tape([Output.of("control", market.value(quotient), "return")]))
    sums = run(market.ready.lowered(tape), seed=SEED, paths=1 << 14)
    assert quotient.mean == pytest.approx(exp(0.025 * (late[1] - early[1])), rel=1e-12)
    assert abs(sums.mean[0] - quotient.mean) < 4.0 * sums.standard_error[0] < 0.01


@pytest.mark.parametrize(("values", "most"), [(50, 32), (32, 32), (7, 3), (100, 1), (3, 8)])
def test_some_of_many_are_spread_evenly(values: int, most: int):
    found = evenly(range(values), most)
    assert len(found) == min(values, most) and found[-1] == values - 1
    gaps = np.diff([-1, *found])
    assert gaps.min() >= 1 and gaps.max() - gaps.min() <= 1


def found_by(compare: Op, build) -> tuple[Turn, ...]:
    """What `turns` finds at a comparison of two values made of the levels x and y."""
    builder = Builder()
    x, y = (builder.input(Op.LEVEL, LevelKey(asset, 1.0)) for asset in (0, 1))
    one, other = build(builder, x, y)
    tape = builder.tape([Output.of("price", builder.emit(compare, one, other))])
    known = [step.payload if step.op is Op.CONSTANT else None for step in tape.instructions]
    return turns(tape, known, lambda key: Terms({(((key.asset, key.time), 1.0),): 1.0}))


def test_where_formulas_turn():
    """Scaled or turned about, a formula turns at the same place; what cancels is gone; what is no product is
    not followed."""
    x, y = (((asset, 1.0), 1.0) for asset in (0, 1))
    at_100 = (Turn(((((x,)), 1.0),), (), 100.0, True),)
    assert found_by(Op.LT, lambda b, x, y: (b.constant(100.0), x)) == at_100
    assert found_by(Op.LT, lambda b, x, y: (b.emit(Op.MUL, b.constant(0.5), x), b.constant(50.0))) == at_100
    assert found_by(Op.LT, lambda b, x, y: (b.constant(-100.0), b.emit(Op.NEG, x))) == at_100
    (of_logs,) = found_by(Op.LE, lambda b, x, y: (b.emit(Op.LOG, x), b.constant(math.log(100.0))))
    assert of_logs.strike == pytest.approx(100.0)
    (both,) = found_by(Op.MAX, lambda b, x, y: (x, y))
    assert not both.jumps and both.strike == 0.0 and {both.above, both.below} == {(((x,), 1.0),), (((y,), 1.0),)}

    def cancelled(b: Builder, x: int, y: int) -> tuple[int, int]:
        rest = b.emit(Op.SUB, b.emit(Op.ADD, y, x), y)
        return b.emit(Op.LOG, rest), b.constant(math.log(100.0))

    assert found_by(Op.LT, cancelled)[0].above == at_100[0].above
    assert found_by(Op.LT, lambda b, x, y: (b.emit(Op.ADD, b.emit(Op.LOG, x), y), b.constant(3.0))) == ()


def test_strata_are_of_a_path_s_end():
    """The 64 paths of a group end in the 64 parts of the end's law, whatever the number of steps."""
    ready = made("average", FLAT)
    plan = scheme_of(Case(ready, SEED), ("stratified",)).plan
    normals = draws(ready.program, seed=SEED, numbers=range(256), plan=plan)[:, :12]
    parts = np.floor(64 * ndtr(normals.sum(axis=1) / sqrt(12.0))).astype(int).reshape(-1, 64)
    assert (np.sort(parts, axis=1) == np.arange(64)).all()


def test_a_residual_is_measured_on_paths_that_fitted_nothing():
    """Without a hedge it is the deviation of the contract's value on the paths of that stream, with the error of a
    deviation."""
    ready = made("digital", FLAT)
    plain = residuals(Case(ready, SEED))[0]
    program = replace(ready.program, outputs=ready.program.outputs[:1])
    values = values_by_path(program, seed=SEED, paths=1 << 14, stream=Stream.CHOICE)[0]
    assert plain.dates == 0 and plain.deviation == pytest.approx(values.std(), rel=1e-12)
    squares = (values - values.mean()) ** 2
    assert plain.standard_error == pytest.approx(squares.std() / sqrt(len(values)) / (2.0 * values.std()), rel=1e-9)


def test_the_draft_keeps_the_contract_s_outputs_first():
    ready = made("average", FLAT)
    draft = change(Case(ready, SEED), Draft(ready.unrolled.observed))
    count = len(ready.unrolled.observed.outputs)
    assert draft.tape.outputs[:count] == ready.unrolled.observed.outputs
    assert len(draft.tape.outputs) == count + len(draft.controls)


@pytest.mark.parametrize(("level", "out"), [(90.0, -1.0), (115.0, 1.0)])
def test_a_barrier_watched_on_dates_is_moved_away_from_the_spot(level: float, out: float):
    """By 0.5826 deviations of a step, Broadie, Glasserman & Kou (1997), from memory: -zeta(1/2) / sqrt(2 pi)."""
    steps = np.full(12, 0.22**2 / 12)
    watched = Watched(0, level, (), steps, np.zeros(12), 100.0, 0.1)
    assert watched.moved == pytest.approx(math.log(level) + out * 0.5826 * 0.22 / sqrt(12.0), abs=1e-6)


def test_nothing_is_held_after_the_end():
    """On paths that an autocall ended the gains of every later holding are 0, from that day on; on others they are not.
    Nobody knows on the day before that it will end, so that each gain's mean is 0: |z| < 4.7."""
    request = load([Path(__file__).resolve().parents[3] / "payoffs" / "examples" / "autocall.yaml"])
    dated, _ = date_on(request.contracts[0], request.market)
    ready = prepare(dated, request.market)[0]
    draft = hedge(Case(ready, SEED), Draft(ready.unrolled.observed))
    outputs = draft.tape.outputs
    ends = [(number, output.day) for number, output in enumerate(outputs) if output.kind == "end"]
    times = {str(moment.day): moment.day.time for moment in dated.moments}
    values = values_by_path(ready.lowered(ready.expanded(draft.tape)), seed=SEED, paths=4096)
    day, first = min((times[day], number) for number, day in ends if day in times)
    later = [number for number, output in enumerate(outputs) if output.kind == "control"
             and float(output.subject.partition("held from ")[2].partition("y")[0]) > day - 1e-3]
    ended = values[first] == 1.0
    assert later and 100 < ended.sum() < 4000
    gains = values[[number for number, output in enumerate(outputs) if output.kind == "control"]]
    assert np.all(np.abs(gains.mean(axis=1)) <= 4.7 * gains.std(axis=1) / 64.0 + 1e-12)
    assert np.all(values[later][:, ended] == 0.0) and np.mean(values[later][:, ~ended].std(axis=1) > 0.01) > 0.5


def test_a_pilot_grows_with_the_candidates(monkeypatch: pytest.MonkeyPatch):
    """So many paths for each, else coefficients would fit the pilot."""
    case = Case(made("average", FLAT), SEED)
    candidates_of = len(change(case, Draft(case.ready.unrolled.observed)).controls)
    assert scheme_of(case, ("controls",)).fit_paths == PILOT_PATHS
    monkeypatch.setattr("mcx.estimators.reduction.fit.PATHS_EACH", 2000)
    assert 2000 * candidates_of <= scheme_of(case, ("controls",)).fit_paths < 4000 * candidates_of


def compared(values: list[float], errors: list[float]) -> list[Compared]:
    """Choices with these prices and errors."""
    return [Compared(Scheme((), None), Estimate(value, error, 100), 1.0, 0.0, 1.0, ())
            for value, error in zip(values, errors, strict=True)]


def test_each_choice_is_held_against_all_others():
    """By their variances, and never against itself; errors of exactly 0 are taken as rounding."""
    found = list(z_scores(compared([1.0, 1.2, 1.2], [0.1, 0.1, 0.2])))
    assert found[0] == pytest.approx(-0.2 / sqrt(0.01 + 1.0 / (1.0 / 0.01 + 1.0 / 0.04)), rel=1e-9)
    assert list(z_scores(compared([1.0], [0.1]))) == [0.0]
    exact = list(z_scores(compared([1.0, 1.1, 1.0], [0.0, 0.1, 0.0])))
    assert np.isfinite(exact).all() and exact[1] == pytest.approx(1.0, rel=1e-6)
    assert closed_form(compared([1.0, 1.1], [0.0, 0.1])) == 1.0 and closed_form(compared([1.1], [0.1])) is None


@pytest.mark.parametrize(("count", "spread"), [(32, sqrt(2.0 / 31)), (4096, sqrt(2.0 / 4096))])
def test_how_well_a_variance_is_known(count: int, spread: float):
    """By the chi-squared law for the means of scrambles, from the fourth moment of many normal ones."""
    values = ndtri((np.arange(count) + 0.5) / count)
    assert _doubt(Independent(values)) == pytest.approx(spread, rel=0.05)


def test_a_run_has_at_least_two_of_what_is_independent():
    """Two strata of pairs are 256 paths; stages of points are at a quarter and at half of the scrambles."""
    case = Case(made("average", FLAT), SEED)
    sampler = Sampler(scheme_of(case, ("antithetic", "stratified")), SEED)
    assert (sampler.paths(1), sampler.paths(257)) == (256, 384)
    stages = Sampler(scheme_of(case, ("sobol-bridge",)), SEED).sample(1 << 13, first_output_only=True).stages
    assert [each.paths for each in stages] == [1 << 11, 1 << 12, 1 << 13]
