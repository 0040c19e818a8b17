"""Do the error bars mean what they say? Over many seeds, 95 % intervals must cover the truth about 95 % of the time.

An estimator can be unbiased with a wrong error, or right on average and biased on small samples; a table of prices
shows neither. 400 runs of 4,096 paths each: the share of hits has a standard deviation of 1.1 points.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import exp, sqrt

import closed_forms as forms
import numpy as np
import pytest
from helpers import Ready, prepare

RUNS, PATHS = 400, 4096
FLAT = {"spot": 100.0, "maturity": 1.0, "rate": 0.04, "dividend_yield": 0.015, "vol": 0.22}
MARKET = """market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
correlation: {harbour/lantern: 40%}
"""


@dataclass(frozen=True)
class Known:
    """A contract whose value is known: its payoff, its terms as written, the truth."""

    payoff: str
    terms: str
    truth: float
    assets: str = "[harbour]"

    def ready(self) -> Ready:
        head = f"contract: known value\ncurrency: EUR\nunits: 1\nassets: {self.assets}\n"
        terms = "".join(f"  {line.strip()}\n" for line in self.terms.split(";"))
        return prepare(f"{head}payoff: {self.payoff}\nterms:\n{terms}  expiry: 1y\n---\n{MARKET}")


KNOWN = {
    "european": Known("european", "side: put; strike: 90", forms.european("put", strike=90.0, **FLAT)),
    "digital": Known("digital", "side: call; pays: cash; amount: 1; strike: 120",
                     forms.cash_or_nothing("call", 120.0, 1.0, **FLAT)),
    "geometric average": Known(
        "asian", "side: call; average_type: geometric; strike_type: fixed; strike: 100; "
                 "averaging: {count: 12, until: 1y}",
        forms.asian_geometric("call", strike=100.0, times=[k / 12 for k in range(1, 13)], **FLAT)),
    "continuous barrier": Known(
        "barrier", "side: put; direction: down; knock: in; strike: 100; barrier: 80; "
                   "watched: {continuous: [0y, 1y]}",
        forms.barrier_option("put", "down", "in", 100.0, 80.0, **FLAT)),
    "no touch": Known(
        "touch", "kind: no touch; direction: up; barrier: 110; cash: 1; watched: {continuous: [0y, 1y]}",
        forms.touch_at_expiry("up", "out", "cash", 110.0, 1.0, **FLAT)),
    "double no touch": Known(
        "double_touch", "kind: no touch; lower_barrier: 80; upper_barrier: 125; cash: 1; "
                        "watched: {continuous: [0y, 1y]}",
        exp(-0.04) * forms.double_no_touch(80.0, 125.0, **FLAT)),
    "rebate at the hit": Known(
        "barrier", "side: call; direction: down; knock: out; strike: 1000; barrier: 85; rebate_at_hit: 3; "
                   "watched: {continuous: [0y, 1y]}",
        forms.cash_at_hit("down", 85.0, 3.0, **FLAT)),
    "continuous lookback": Known(
        "lookback", "side: call; strike_type: fixed; strike: 105; watched: {continuous: [0y, 1y]}",
        forms.lookback_fixed("call", strike=105.0, **FLAT)),
    "exchange": Known(
        "exchange_option", "receive: harbour; give: lantern; receive_units: 1; give_units: 1",
        forms.exchange(100.0, 95.0, 0.015, 0.03, 0.22, 0.30, 0.40, 1.0), "[harbour, lantern]"),
}


@pytest.mark.parametrize("name", KNOWN)
def test_intervals_cover(name: str):
    """95 % intervals cover the closed form in 92 % to 98 % of the runs, and the runs together are unbiased."""
    known = KNOWN[name]
    ready = known.ready()
    seeds = np.random.default_rng(0x6A09E667F3BCC908).integers(1, 2**63, RUNS)
    estimates = [ready.price(PATHS, int(seed)) for seed in seeds]
    z = np.array([(estimate.mean - known.truth) / estimate.error for estimate in estimates])
    assert 0.92 <= np.mean(np.abs(z) < 1.96) <= 0.98
    pooled = np.mean([estimate.mean for estimate in estimates])
    error = sqrt(sum(estimate.error**2 for estimate in estimates)) / RUNS
    assert abs(pooled - known.truth) < 4 * error


def test_the_check_would_see_a_wrong_error():
    """Errors a fifth too small on the same runs fall out of the range: the test above can fail."""
    known = KNOWN["european"]
    ready = known.ready()
    seeds = np.random.default_rng(0x6A09E667F3BCC908).integers(1, 2**63, RUNS)
    estimates = [ready.price(PATHS, int(seed)) for seed in seeds]
    z = np.array([(estimate.mean - known.truth) / (0.8 * estimate.error) for estimate in estimates])
    assert not 0.92 <= np.mean(np.abs(z) < 1.96) <= 0.98
