"""Valuations: outputs that belong together, stages, interruption, and one answer whatever the threads."""

from __future__ import annotations

import signal
import time
from functools import cache

import pytest
from front_door import CALL, EXAMPLES, MARKET, SEED
from helpers import request_of

from mcx.checked.load import load
from mcx.dates.dating import date_on
from mcx.estimators.estimate import Estimate
from mcx.estimators.plan import FEWEST_PLANNED, FIRST_PILOT, precision
from mcx.estimators.price import Valuation, value
from mcx.estimators.ready import Ready, prepare
from mcx.machine.run import NonFinitePath, Stream, levels

THOUSAND = precision(1000, None, None)
DIVIDES = """payoff: divides
about: pays one over what an asset is above a level
terms:
  level: {type: number}
  expiry: {type: date}
events:
  - at: expiry
    pay: 1 / max(spot - level, 0)
"""


def ready_of(request, number: int = 0) -> Ready:
    dated, faults = date_on(request.contracts[number], request.market)
    assert not faults
    found, faults = prepare(dated, request.market)
    assert not faults
    return found


@cache
def autocall() -> Ready:
    """A worst-of autocall on two assets, with coupons, ends and a knock-in."""
    return ready_of(load([EXAMPLES / "harbour_lantern.yaml"]))


def digits(valuation: Valuation) -> tuple:
    """Everything that may not depend on threads or time."""
    return valuation.outputs, valuation.results, valuation.stages, valuation.plan


def test_legs_and_parts_add_up():
    """To the price, in rounding; each with an error of its own."""
    valuation = value(autocall(), THOUSAND, seed=SEED)
    for kind in ("leg", "part"):
        found = [estimate for _, estimate in valuation.of(kind)]
        assert len(found) > 1 and all(each.standard_error > 0.0 for each in found)
        assert sum(each.value for each in found) == pytest.approx(valuation.price.value, rel=1e-13)


def test_ends_exclude_one_another():
    """The chances of ending on the dates add up to that of the condition that ends it, and life lies within."""
    valuation = value(autocall(), THOUSAND, seed=SEED)
    ends = sum(estimate.value for _, estimate in valuation.of("end"))
    (called,) = (estimate.value for output, estimate in valuation.of("condition")
                 if output.subject == "called" and not output.day)
    assert ends == pytest.approx(called, rel=1e-13) and 0.0 < ends < 1.0
    (life,) = (estimate.value for _, estimate in valuation.of("life"))
    assert 0.9 < life < 3.0


def test_levels_have_their_forwards():
    """The mean level of each asset at its last date is its forward, in errors."""
    made = autocall()
    valuation = value(made, precision(20_000, None, None), seed=SEED)
    found = list(valuation.of("level"))
    assert [output.subject for output, _ in found] == ["harbour", "lantern"]
    for output, estimate in found:
        assert abs(estimate.z(made.market.forward(output.subject, made.unrolled.levels[output.name][1]))) < 4


def test_stages_are_shorter_runs():
    """A quarter and a half of the paths, each rounded up to groups of 64, as runs of that length found alone."""
    valuation = value(autocall(), THOUSAND, seed=SEED)
    assert [stage.paths for stage in valuation.stages] == [256, 512, 1000]
    for stage in valuation.stages:
        assert value(autocall(), precision(stage.paths, None, None), seed=SEED).price == stage
    assert valuation.stages[-1] == valuation.price


@pytest.mark.parametrize(("paths", "stages"), [
    (2, [2]), (64, [64]), (65, [64, 65]), (129, [64, 129]), (200, [64, 128, 200])])
def test_stages_of_short_runs(paths: int, stages: list[int]):
    """None twice, none of a single path."""
    valuation = value(autocall(), precision(paths, None, None), seed=SEED)
    assert [stage.paths for stage in valuation.stages] == stages


@pytest.mark.parametrize("wish", [THOUSAND, precision(None, "200bp", None)])
def test_threads_change_no_bit(wish):
    """Nor the plan: a pilot too is the same on any number of threads."""
    one = value(autocall(), wish, seed=SEED, threads=1)
    assert digits(one) == digits(value(autocall(), wish, seed=SEED, threads=2)) == digits(
        value(autocall(), wish, seed=SEED))


def test_pilot_and_run_share_no_path():
    """The run that counts is the one that `--paths` gives for that number: the pilot is no part of it."""
    planned = value(autocall(), precision(None, "1%", None), seed=SEED)
    assert planned.plan.pilot_paths >= FIRST_PILOT
    alone = value(autocall(), precision(planned.plan.paths, None, None), seed=SEED)
    assert planned.results == alone.results
    assert planned.price.half_width <= 0.01


@pytest.mark.parametrize("wish", [precision(None, "1%", None), precision(None, None, 0.01)])
def test_pilots_draw_from_a_stream_of_their_own(wish, monkeypatch: pytest.MonkeyPatch):
    """Every run before the one that counts, which alone draws from the main stream."""
    from mcx.estimators.reduction import sample as module

    streams = []
    for name in ("run", "values_by_path"):
        original = getattr(module, name)
        monkeypatch.setattr(module, name, lambda *given, call=original, stream=Stream.MAIN, **more:
                            streams.append(stream) or call(*given, stream=stream, **more))
    value(autocall(), wish, seed=SEED)
    assert len(streams) >= 2 and streams[-1] == Stream.MAIN and set(streams[:-1]) == {Stream.PILOT}


def test_seeds_differ():
    """Another seed gives other numbers, the same one the same."""
    first, second = (value(autocall(), THOUSAND, seed=seed) for seed in (SEED, SEED + 1))
    assert first.price != second.price == value(autocall(), THOUSAND, seed=SEED + 1).price


def test_seconds_fix_a_number_of_paths():
    """A time becomes a number, which is then all that counts."""
    planned = value(autocall(), precision(None, None, 0.02), seed=SEED)
    assert planned.price.paths == planned.plan.paths and planned.plan.paths % 64 == 0
    assert planned.plan.pilot_paths >= 2 * FIRST_PILOT
    again = value(autocall(), precision(planned.plan.paths, None, None), seed=SEED)
    assert again.results == planned.results


def test_progress_counts_up(monkeypatch: pytest.MonkeyPatch):
    """Paths done, paths planned, and the error so far, of which the last is the answer's."""
    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: 256)
    told = []
    valuation = value(autocall(), THOUSAND, seed=SEED, progress=lambda *news: told.append(news))
    assert [news[:2] for news in told] == [(256, 1000), (512, 1000), (768, 1000), (1000, 1000)]
    assert told[-1][2] == pytest.approx(valuation.price.standard_error, rel=1e-12)


def test_interruption_gives_the_estimate_so_far(monkeypatch: pytest.MonkeyPatch):
    """Marked, and the same as a run of the paths done; stages only as far as it came."""
    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: 256)
    stop = lambda done, *_: signal.raise_signal(signal.SIGINT) if done == 512 else None  # noqa: E731
    found = value(autocall(), precision(1600, None, None), seed=SEED, progress=stop)
    assert found.interrupted and found.plan.paths == 1600 and found.price.paths == 512
    assert found.results == value(autocall(), precision(512, None, None), seed=SEED).results
    assert [stage.paths for stage in found.stages] == [448, 512]


def test_no_clock_runs_while_kernels_are_loaded(monkeypatch: pytest.MonkeyPatch):
    """Compiling them, or reading them from a file, is no time of the paths."""
    from mcx.estimators import price

    told, clock = [], time.perf_counter
    monkeypatch.setattr(price, "load_kernels", lambda program, notice: told.append("loaded"))
    monkeypatch.setattr(price.time, "perf_counter", lambda: told.append("clock read") or clock())
    for asked in (THOUSAND, precision(None, None, 0.001)):
        told.clear()
        value(ready_of(request_of(CALL + MARKET)), asked, seed=SEED)
        assert told[0] == "loaded" and told.count("loaded") == 1 and "clock read" in told


def test_an_exact_price_is_not_piloted():
    """A bond is the same on every path: the smallest planned run, no error, nothing drawn before."""
    text = CALL.replace("european", "bond").replace("{side: call, strike: 100, expiry: 1y}", "{due: 1y}")
    bond = "---\npayoff: bond\nabout: pays one\nterms: {due: {type: date}}\nevents:\n  - at: due\n    pay: 1\n"
    valuation = value(ready_of(request_of(text + bond + MARKET)), precision(None, "0.01", None), seed=SEED)
    assert (valuation.plan.paths, valuation.plan.pilot_paths) == (FEWEST_PLANNED, 0)
    assert valuation.price == Estimate(pytest.approx(0.960789439152323, rel=1e-14), 0.0, FEWEST_PLANNED)  # exp(-0.04)


def test_a_path_that_is_not_finite_is_named():
    """The first such path; run alone it is not finite either, and the paths before it are."""
    text = DIVIDES + "---\n" + CALL.replace("payoff: european", "payoff: divides").replace(
        "{side: call, strike: 100, expiry: 1y}", "{level: 70, expiry: 1y}") + MARKET
    made = ready_of(request_of(text))
    with pytest.raises(NonFinitePath) as trouble:
        value(made, THOUSAND, seed=SEED)
    bad = trouble.value
    assert (bad.seed, bad.stream) == (SEED, 0)
    assert made.unrolled.tape.outputs[bad.output].kind == "price"
    prices = levels(made.program, seed=SEED, numbers=range(bad.path + 1))[:, 0]
    assert [bool(abs(price) < float("inf")) for price in prices] == [True] * bad.path + [False]
