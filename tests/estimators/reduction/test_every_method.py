"""What holds for every method of variance reduction, one class for each: the same tests, inherited.

The truths and the rule of the calibration are those of `test_calibration.py`: over 400 seeds 92 to 98 % of the
intervals cover.
"""

from __future__ import annotations

from functools import cache
from math import sqrt
from pathlib import Path

import numpy as np
import pytest
from test_calibration import KNOWN, RUNS

from mcx.checked.load import load
from mcx.dates.dating import date_on
from mcx.estimators.ready import Ready, prepare
from mcx.estimators.reduction.catalogue import BY_NAME, METHODS, scheme_of
from mcx.estimators.reduction.names import NAMES
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case
from mcx.faults import Refusal
from mcx.machine.run import run, run_scrambles

SEED = 0x3C6EF372FE94F82B
EXAMPLES = sorted((Path(__file__).resolve().parents[3] / "payoffs" / "examples").glob("*.yaml"))
PLAIN_PATHS, PATHS = 1 << 15, 1 << 13


@cache
def shipped() -> dict[str, Ready]:
    """The first contract of every file of examples."""
    found = {}
    for file in EXAMPLES:
        request = load([file])
        dated, _ = date_on(request.contracts[0], request.market)
        found[file.stem] = prepare(dated, request.market)[0]
    return found


@cache
def plainly(name: str) -> tuple[np.ndarray, np.ndarray]:
    """Means and errors of every output by plain sampling."""
    sums = run(shipped()[name].program, seed=SEED, paths=PLAIN_PATHS)
    return sums.mean, sums.standard_error


def known(name: str) -> tuple[Ready, float]:
    """A contract of the calibration and its value."""
    ready, truth = KNOWN[name].ready(), KNOWN[name].truth
    return prepare(ready.dated, ready.market)[0], truth


class EveryMethod:
    """A method's tests; `calibrated` names the contract of the calibration, on which it is not exact, `every` which
    of the examples are taken: all, or every so-many-th where a method takes long to fit."""

    names: tuple[str, ...]
    calibrated = "european"
    calibration_paths = 4096
    every = 1

    def scheme(self, ready: Ready):
        return scheme_of(Case(ready, SEED), self.names)

    def test_every_output_of_every_example_is_unbiased(self):
        """Each output is that of plain paths, |z| < 4.7 for some 20 outputs of each of 24 runs."""
        applied = 0
        for name, ready in list(shipped().items())[:: self.every]:
            try:
                scheme = self.scheme(ready)
            except Refusal as reason:
                assert "since" in str(reason)
                continue
            applied += 1
            found = Sampler(scheme, SEED).sample(PATHS)
            for estimate, mean, error in zip(found.results, *plainly(name), strict=True):
                assert abs(estimate.value - mean) <= 4.7 * np.hypot(estimate.standard_error, error) + 1e-10, name
            legs = [estimate.value for estimate, output in zip(found.results, ready.unrolled.tape.outputs, strict=True)
                    if output.kind == "leg"]
            assert sum(legs) == pytest.approx(found.results[0].value, abs=1e-12 * max(map(abs, legs)))
        assert applied >= 5

    def test_intervals_cover(self):
        """The method is fitted once; its intervals cover over 400 seeds, and all runs together are unbiased."""
        ready, truth = known(self.calibrated)
        scheme = self.scheme(ready)
        seeds = np.random.default_rng(SEED).integers(1, 2**63, RUNS)
        found = [Sampler(scheme, int(seed)).sample(self.calibration_paths, first_output_only=True).results[0]
                 for seed in seeds]
        assert all(estimate.paths <= 4096 for estimate in found)
        hits = [low <= truth <= high for low, high in (estimate.interval95 for estimate in found)]
        assert 0.92 <= np.mean(hits) <= 0.98
        error = sqrt(sum(estimate.standard_error**2 for estimate in found)) / RUNS
        assert abs(np.mean([estimate.value for estimate in found]) - truth) < 4 * error

    def test_threads_change_nothing(self):
        """The coefficients and the estimates are the same, to the last bit."""
        ready = shipped()["barrier_reverse_convertible"]
        try:
            found = [Sampler(scheme_of(Case(ready, SEED, threads), self.names), SEED, threads).sample(5000)
                     for threads in (1, 2)]
        except Refusal:
            ready, _ = known(self.calibrated)
            found = [Sampler(scheme_of(Case(ready, SEED, threads), self.names), SEED, threads).sample(5000)
                     for threads in (1, 2)]
        assert found[0] == found[1]

    def test_blocks_change_nothing(self):
        """However many lanes the kernel takes at once, means and squares are the same, to the last bit."""
        ready, _ = known(self.calibrated)
        scheme = self.scheme(ready)

        def digits(lanes: int) -> tuple[bytes, bytes]:
            how = {"seed": SEED, "plan": scheme.plan, "lanes": lanes, "threads": 1}
            if scheme.plan.scrambles:
                sums = run_scrambles(scheme.program, points=192, **how)
                return sums.means.tobytes(), sums.squares.tobytes()
            sums = run(scheme.program, paths=100 * 64, **how)
            return sums.mean.tobytes(), sums.m2.tobytes()

        assert digits(64) == digits(192) == digits(1024)

    def test_combines_with_antithetic(self):
        """Unbiased together, or refused with a reason."""
        if "antithetic" in self.names:
            return
        ready, truth = known(self.calibrated)
        try:
            scheme = scheme_of(Case(ready, SEED), (*self.names, "antithetic"))
        except Refusal as reason:
            assert "since" in str(reason)
            return
        (estimate,) = Sampler(scheme, SEED).sample(1 << 14, first_output_only=True).results
        assert abs(estimate.z(truth)) < 4.0
        assert estimate.paths >= 1 << 14 and scheme.each == 2


class TestAntithetic(EveryMethod):
    names = ("antithetic",)
    calibrated = "european"


class TestControls(EveryMethod):
    names = ("controls",)
    calibrated = "continuous lookback"


class TestHedge(EveryMethod):
    names = ("hedge",)
    every = 3
    calibrated = "geometric average"


class TestImportance(EveryMethod):
    names = ("importance",)
    calibrated = "digital"


class TestStratified(EveryMethod):
    names = ("stratified",)
    calibrated = "geometric average"


class TestBridge(EveryMethod):
    names = ("sobol-bridge",)
    calibrated = "continuous barrier"


class TestComponents(EveryMethod):
    names = ("sobol-components",)
    calibrated = "geometric average"


class TestControlsOnPoints(EveryMethod):
    names = ("controls", "sobol-bridge")
    calibrated = "continuous lookback"


class TestControlsAndImportance(EveryMethod):
    names = ("controls", "importance")
    calibrated = "continuous barrier"
    every = 2


def test_every_method_is_tested():
    """Each name of the catalogue has its class, and the light list of names is the catalogue's."""
    tested = {name for kind in EveryMethod.__subclasses__() for name in kind.names}
    assert tested == set(BY_NAME) == set(NAMES)
    assert [method.name for method in METHODS] == list(NAMES)
