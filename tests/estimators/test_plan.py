"""Planning: which requests are taken, and how many paths they lead to."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from mcx.estimators.plan import (
    DEFAULT_PATHS,
    FEWEST_PLANNED,
    FIRST_PILOT,
    LARGEST_PILOT,
    MOST_PATHS,
    Independent,
    Plan,
    check_fits,
    plan,
    precision,
    unlike,
    upper_variance,
)
from mcx.faults import RequestError

SEED = 0xE9B5DBA58189DBBC


def never(paths: int) -> float:
    raise AssertionError(f"a pilot of {paths} paths was run")


def test_nothing_asked():
    """2^20 paths, without a pilot, and said so."""
    planned = plan(precision(None, None, None), never, never)
    assert (planned.paths, planned.pilot_paths, planned.target) == (1 << 20, 0, None)
    assert planned.asked == "1,048,576 paths, the number used where nothing is asked" and DEFAULT_PATHS == 1 << 20


@pytest.mark.parametrize("paths", [2, 1000, 4097, MOST_PATHS])
def test_paths_are_taken_as_they_are(paths: int):
    """Not rounded to groups."""
    assert plan(precision(paths, None, None), never, never) == Plan(paths, 0, f"{paths:,} paths")
    assert plan(precision(np.int64(paths), None, None), never, never).paths == paths


@pytest.mark.parametrize("paths", [0, 1, -5, MOST_PATHS + 1, 1e6, "1000", True, math.nan])
def test_wrong_numbers_of_paths(paths: object):
    """One path has no error, and a number of paths is whole."""
    with pytest.raises(RequestError, match="'paths' is"):
        precision(paths, None, None)


@pytest.mark.parametrize(("within", "number", "relative"), [
    ("2bp", 2e-4, True), ("2 bp", 2e-4, True), (" 0.02% ", 2e-4, True), (".5%", 5e-3, True), ("1e-1 bp", 1e-5, True),
    ("0.01", 0.01, False), (0.01, 0.01, False), (1, 1.0, False),
])
def test_half_widths(within: object, number: float, relative: bool):
    """Basis points and percent are of the notional, a bare number is money per unit."""
    asked = precision(None, within, None)
    assert (asked.within, asked.relative) == (pytest.approx(number, rel=1e-15), relative)
    assert asked.words.startswith("within ")


@pytest.mark.parametrize("within", [
    "", "bp", "0bp", "0", "-1bp", "1 BP", "1e999", "1e-999", "nan", "inf", "2bps", "1,5bp", "1 bp 2", True, False, [],
    math.nan, math.inf, -0.1, "1" * 400,
])
def test_wrong_half_widths(within: object):
    """Anything but a number above 0, alone or with bp or %."""
    with pytest.raises(RequestError, match="'within' is a half-width above 0"):
        precision(None, within, None)


@pytest.mark.parametrize("seconds", [0, -1.0, math.nan, math.inf, 1e9, "3", True])
def test_wrong_times(seconds: object):
    """A time above 0 and of at most a week."""
    with pytest.raises(RequestError, match="'seconds' is a time above 0"):
        precision(None, None, seconds)


@pytest.mark.parametrize("wishes", [(1000, "1bp", None), (1000, None, 1.0), (None, "1bp", 1.0), (1000, "1bp", 1.0)])
def test_one_wish_only(wishes: tuple):
    """Two of them cannot both decide."""
    with pytest.raises(RequestError, match="cannot both decide the number of paths"):
        precision(*wishes)


def test_units_must_fit_the_contract():
    """Basis points go with a notional, money with units; without a half-width anything fits."""
    relative, money = precision(None, "2bp", None), precision(None, "0.01", None)
    check_fits(relative, notional=True, title="note")
    check_fits(money, notional=False, title="option")
    check_fits(precision(100, None, None), notional=False, title="option")
    with pytest.raises(RequestError, match="'note' is priced in parts of its notional; ask .* as '2bp'"):
        check_fits(money, notional=True, title="note")
    with pytest.raises(RequestError, match="'option' has no notional .* as '0.01'"):
        check_fits(relative, notional=False, title="option")


def lognormal(paths: int) -> Independent:
    return Independent(np.random.default_rng(SEED).lognormal(0.0, 0.5, paths))


def test_half_width_is_reached():
    """The planned number is enough for the true variance, and not wastefully more: the margin is the pilot's own."""
    target = 0.002
    planned = plan(precision(None, str(target), None), lognormal, never)
    needed = stats.norm.ppf(0.975) ** 2 * stats.lognorm(0.5).var() / target**2
    assert needed < planned.paths < 1.2 * needed
    assert planned.paths % 64 == 0
    assert (planned.target, planned.pilot_paths, planned.warnings) == (target, FIRST_PILOT, ())


def test_upper_variance_covers():
    """Two errors above the sample's variance: below the truth in about one pilot of forty, 2.3 % by the normal law."""
    draws = np.random.default_rng(SEED)
    low = [upper_variance(draws.normal(0.0, 3.0, 2000)) < 9.0 for _ in range(1000)]
    assert 0.005 < np.mean(low) < 0.045


def test_means_of_points_are_planned_by_their_own_spread():
    """32 means whose spread falls faster than the root of the paths: the pilot grows until what it asks for is near."""
    def means(paths: int) -> Independent:
        size = paths // 32
        return Independent(np.random.default_rng(paths).normal(1.0, 10.0 / size, 32), size, 2.04)

    planned = plan(precision(None, "0.001", None), means, never)
    assert FIRST_PILOT < planned.pilot_paths <= planned.paths
    assert planned.paths <= 16 * planned.pilot_paths
    assert 2.04 * 10.0 / (planned.paths / 32) / math.sqrt(32) < 0.001


def test_an_easy_target_still_gets_a_decent_run():
    """Never fewer than the smallest planned run."""
    assert plan(precision(None, "50%", None), lognormal, never).paths == FEWEST_PLANNED


@pytest.mark.parametrize(("within", "said", "reached"), [
    ("1e-12", "'within 1e-12' needs about 1.5e+24 paths, which would take about 2,300,000,000 years; at most "
              "1,099,511,627,776 are run, which reach about 1.2e-06", "1.2e-6"),
    ("0.001bp", "'within 0.001 bp' needs about 1.5e+14 paths, which would take about 84 days; at most "
                "1,099,511,627,776 are run, which reach about 0.012 bp", "0.012bp"),
])
def test_an_impossible_target_is_refused(within: str, said: str, reached: str):
    """With the paths and the time that it would need, and what can be reached."""
    with pytest.raises(RequestError) as trouble:
        plan(precision(None, within, None), lognormal, never, pace=5e-8)
    assert str(trouble.value) == said
    assert 0.5 * MOST_PATHS < plan(precision(None, reached, None), lognormal, never).paths <= MOST_PATHS


def test_an_exact_price_needs_no_pilot():
    """Where the price is the same on every path nothing is drawn to plan."""
    planned = plan(precision(None, "1bp", None), never, never, exact=True)
    assert (planned.paths, planned.pilot_paths, planned.target) == (FEWEST_PLANNED, 0, 1e-4)


def rare(every: int):
    """Prices that are 1 on every so-many-th path, else 0."""
    return lambda paths: Independent((np.arange(paths) % every == every - 1).astype(float))


def test_a_rare_payment_enlarges_the_pilot():
    """Until a hundred paths differ from the commonest price."""
    planned = plan(precision(None, "0.1%", None), rare(1000), never)
    assert planned.pilot_paths == 1 << 18 and planned.warnings == ()  # 16 of 2^14, 65 of 2^16, 262 of 2^18
    variance = 0.001 * 0.999
    assert planned.paths > stats.norm.ppf(0.975) ** 2 * variance / 1e-6


@pytest.mark.parametrize("every", [20_000, 1 << 40])
def test_too_rare_to_plan(every: int):
    """The pilot stops at its largest, says so, and the run is no smaller than the pilot was."""
    planned = plan(precision(None, "1%", None), rare(every), never)
    seen = LARGEST_PILOT // every
    assert planned.pilot_paths == LARGEST_PILOT <= planned.paths
    assert planned.warnings[0].startswith(f"of 1,048,576 pilot paths only {seen} differed from the rest")


def test_unlike_counts_from_the_commonest():
    """Not from zero: a bond with a rare loss is rare too."""
    assert unlike(np.array([1.0] * 97 + [0.4, 0.4, 0.0])) == 3
    assert unlike(np.arange(10.0)) == 9


class Clock:
    """A machine that runs `speed` paths a second, `first` seconds slower at the first call (compiling)."""

    def __init__(self, speed: float, first: float = 0.0):
        self.speed, self.first, self.asked = speed, first, []

    def seconds_for(self, paths: int) -> float:
        self.asked.append(paths)
        return paths / self.speed + (self.first if len(self.asked) == 1 else 0.0)


@pytest.mark.parametrize("speed", [1e4, 1e6, 1e8])
@pytest.mark.parametrize("seconds", [0.5, 10.0])
def test_seconds_by_the_speed_of_a_pilot(speed: float, seconds: float):
    """The paths that the time allows, whatever the first run took; the pilots are counted."""
    clock = Clock(speed, first=30.0)
    planned = plan(precision(None, None, seconds), never, clock.seconds_for)
    assert planned.paths == math.ceil(speed * seconds / 64) * 64
    assert planned.pilot_paths == sum(clock.asked)
    assert planned.asked == f"{seconds:g} seconds" and planned.target is None


def test_a_fast_machine_gets_a_longer_pilot():
    """Until the pilot's time can be read off a clock, but no longer than the largest."""
    slow, fast = Clock(1e4), Clock(1e12)
    plan(precision(None, None, 1.0), never, slow.seconds_for)
    plan(precision(None, None, 1.0), never, fast.seconds_for)
    assert slow.asked == [FIRST_PILOT] * 2
    assert fast.asked[-1] == LARGEST_PILOT


def test_hardly_any_time_still_draws_a_group():
    """A plan is a whole number of groups, at least one, at most what can be counted."""
    assert plan(precision(None, None, 1e-9), never, Clock(1e3).seconds_for).paths == 64
    assert plan(precision(None, None, 86400.0), never, Clock(1e30).seconds_for).paths == MOST_PATHS
