"""Scores: against differences of the density path by path, closed forms of jumping payoffs, and path-wise
derivatives."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from closed_forms import barrier_option, cash_or_nothing, two_asset_digital
from helpers import document, prepare
from scipy import stats

from mcx.leaves.market_map import MarketMap
from mcx.machine.run import run
from mcx.tape.adjoint import finished, leaf_sums, sums_of, sweep, with_adjoint
from mcx.tape.builder import Builder
from mcx.tape.interpret import interpret
from mcx.tape.ops import Op
from mcx.tape.program import Leaf, LeafKind, Sum, Tape
from mcx.tape.registers import lower
from mcx.tape.scores import Scores, scores, singular
from mcx.tape.smooth import payments
from mcx.tape.verify import problems

ONE = """
---
market: 0y
rates: {EUR: 3%}
funding: {EUR: 0 bp}
assets:
  harbour: {spot: 100, yield: 1%, vol: 20%}
"""
TWO = """
---
market: 0y
rates: {EUR: 3%}
funding: {EUR: 0 bp}
assets:
  harbour: {spot: 100, yield: 1%, vol: 20%}
  lantern: {spot: 90, yield: 2%, vol: 30%}
correlation: {harbour/lantern: 40%}
"""
FLAT = {"rate": 0.03, "dividend_yield": 0.01}
PAYOFF = """
payoff: made
about: Whatever a test asks for.
assets: {assets}
terms:
  middle:  {{type: date}}
  expiry:  {{type: date}}
  watched: {{type: watch}}
running:
{running}
events:
  - at: middle
    pay: {middle}
  - at: expiry
    pay: {expiry}
---
"""


@dataclass(frozen=True)
class Case:
    """A contract ready to be differentiated."""

    tape: Tape
    leaves: np.ndarray

    @property
    def price(self) -> int:
        return self.tape.outputs[0].value

    def column(self, kind: LeafKind, **which: float) -> int:
        """The number of the only leaf of a kind, and with these numbers."""
        found = [number for number, leaf in enumerate(self.tape.leaves)
                 if leaf.kind is kind and all(getattr(leaf, name) == value for name, value in which.items())]
        assert len(found) == 1
        return found[0]


def case(text: str) -> Case:
    ready = prepare(text)
    tape = ready.unrolled.tape
    return Case(tape, MarketMap(ready.market, ready.dated.contract).values(tape.leaves))


def made_up(expiry: str, middle: str = "0", running: str = "  unread: {total: mean(spot), at: expiry}",
            assets: int = 1) -> Case:
    names = "[harbour]" if assets == 1 else "[harbour, lantern]"
    payoff = PAYOFF.format(assets=assets, running=running, middle=middle, expiry=expiry)
    terms = {"middle": "0.4y", "expiry": "1y", "watched": "{continuous: [0y, 1y]}"}
    return case(payoff + document("made", assets=names, **terms) + (ONE if assets == 1 else TWO))


@dataclass(frozen=True)
class Found:
    """Derivatives by the leaves and second derivatives by pairs of spots, each with its error."""

    first: np.ndarray
    first_error: np.ndarray
    second: dict[tuple[int, int], tuple[float, float]]


def likelihood(given: Case, paths: int, seed: int, second: bool = False) -> Found:
    """Payoff less its mean times score, and the payoff's own derivative; pairs are numbers of assets."""
    builder, price = Builder.of(given.tape), given.price
    made = scores(builder, [price], second)
    assert not made.refused
    products, alone = made.sums(price)
    own = sums_of(sweep(builder, {price: builder.constant(1.0)}, held=made.held))
    pairs = [part for score in made.second.values() for part in (Sum(price, score), Sum(score))]
    tape = finished(builder, given.tape, (*products, *alone, *own, *pairs))
    assert problems(tape) == []
    reached = run(lower(tape, given.leaves), seed=seed, paths=paths)
    sums, mean, k = reached.sums / reached.batch_paths[:, None], reached.mean[0], len(products)
    first = (leaf_sums(tape, given.leaves, sums, range(k)) + leaf_sums(tape, given.leaves, sums, range(2 * k, len(
        tape.sums) - len(pairs))) - mean * leaf_sums(tape, given.leaves, sums, range(k, 2 * k)))
    weighted = sums[:, len(tape.sums) - len(pairs):]
    curves = weighted[:, ::2] - mean * weighted[:, 1::2]
    instructions = given.tape.instructions
    found = {tuple(instructions[spot].payload.asset for spot in pair): (float(column.mean()), error_of(column))
             for pair, column in zip(made.second, curves.T, strict=True)}
    return Found(first.mean(axis=0), first.std(axis=0, ddof=1) / 8.0, found)


def error_of(parts: np.ndarray) -> float:
    return float(parts.std(ddof=1) / np.sqrt(len(parts)))


def close(value: float, error: float, truth: float, sharp: float) -> None:
    """Within four errors of the truth, with an error small enough to see a mistake."""
    assert abs(value - truth) < 4.0 * error, f"{value} +- {error} against {truth}"
    assert error < sharp * abs(truth)


# The density


def log_density(given: Case, leaves: np.ndarray, logs: dict[tuple[int, float], np.ndarray], extremes: dict[tuple[
        int, float], np.ndarray], barriers: tuple[float, ...]) -> np.ndarray:
    """The log density of given logs and of a watched minimum, from the formulas of the normal law and of the bridge;
    with barriers, in the first step that of the interval between them in which the minimum is."""
    known = dict(zip(given.tape.leaves, leaves, strict=True))
    total, before = 0.0, {leaf.asset: known[leaf] for leaf in known if leaf.kind is LeafKind.LOG_SPOT}
    for start, end in sorted({(leaf.start, leaf.end) for leaf in known if leaf.kind is LeafKind.DRIFT}):
        span = {"start": start, "end": end}
        assets = sorted(leaf.asset for leaf in known if leaf.kind is LeafKind.DRIFT and leaf.start == start)
        factor = np.array([[known.get(Leaf(LeafKind.FACTOR, i, j, **span), 0.0) for j in assets] for i in assets])
        moves = np.array([logs[asset, end] - before[asset] - known[Leaf(LeafKind.DRIFT, asset, **span)]
                          for asset in assets])
        z = np.linalg.solve(factor, moves)
        total = total - 0.5 * np.sum(z * z, axis=0) - np.log(np.prod(np.diag(factor)))
        for asset in assets:
            if (asset, end) in extremes:
                x0, x1, m, v = before[asset], logs[asset, end], extremes[asset, end], known[
                    Leaf(LeafKind.VARIANCE, asset, **span)]
                density = np.log(x0 + x1 - 2.0 * m) - np.log(v) - 2.0 * (x0 - m) * (x1 - m) / v
                if start == 0.0 and barriers:
                    chances = [np.exp(-2.0 * np.maximum(x0 - b, 0.0) * np.maximum(x1 - b, 0.0) / v) for b in barriers]
                    grid = np.array([np.zeros_like(x1), *chances, np.ones_like(x1)])
                    which = np.searchsorted(np.array(barriers), m)
                    lanes = np.arange(len(m))
                    density = np.log(grid[which + 1, lanes] - grid[which, lanes])
                total = total + density
        before = {asset: logs[asset, end] for asset in assets}
    return total


def test_scores_are_derivatives_of_the_log_density():
    """On each path the score by every leaf is the central difference of the log density, the path held fixed; for the
    variance of the first step that of the extreme itself, for the spot that of its interval."""
    barriers = ("  low: {ever: 'of(spot, harbour) / 100 <= 0.9', at: watched}\n"
                "  lower: {ever: '80 >= of(spot, harbour)', at: watched}")
    given = made_up("(3 if low else 2) + (1 if lower else 0) + worst(spot)", "best(spot)", barriers, assets=2)
    builder = Builder.of(given.tape)
    made = scores(builder, [given.price], second=True)
    tape, lanes = builder.tape(given.tape.outputs, given.tape.normals, given.tape.uniforms), 300
    draws = np.random.default_rng(442190013)
    normals, uniforms = draws.normal(size=(tape.normals, lanes)), draws.uniform(size=(tape.uniforms, lanes))
    values = interpret(tape, given.leaves, normals, uniforms)
    logs, extremes = {}, {}
    for number, step in enumerate(given.tape.instructions):
        if step.op is Op.STEP:  # the last of a log's steps stays
            leaf = tape.instructions[step.operands[1]].payload
            logs[leaf.asset, leaf.end] = values[number]
        elif step.op is Op.BRIDGE_LOW:
            leaf = tape.instructions[step.operands[2]].payload
            extremes[leaf.asset, leaf.end] = values[number]
    levels = tuple(np.log([80.0, 90.0]))

    def density(move: np.ndarray, intervals: bool) -> np.ndarray:
        return log_density(given, given.leaves + move, logs, extremes, levels if intervals else ())

    spots = []
    for k, leaf in enumerate(given.tape.leaves):
        if leaf.kind not in (LeafKind.LOG_SPOT, LeafKind.DRIFT, LeafKind.FACTOR, LeafKind.VARIANCE):
            continue
        move = np.where(np.arange(len(given.leaves)) == k, 1e-6, 0.0)
        of_spot = leaf.kind is LeafKind.LOG_SPOT
        expected = (density(move, of_spot) - density(-move, of_spot)) / 2e-6
        number = next(n for n, step in enumerate(given.tape.instructions) if step.payload == leaf)
        np.testing.assert_allclose(values[made.first[number]], expected, rtol=1e-6, atol=1e-6, err_msg=str(leaf))
        spots += [(number, move * 100.0)] if of_spot else []
    for one, by in spots:  # p'' / p = (log p)'' + score score
        for other, and_by in spots:
            bent = (density(by + and_by, True) - density(by - and_by, True) - density(and_by - by, True)
                    + density(-by - and_by, True)) / (4.0 * 1e-8)
            expected = bent + values[made.first[one]] * values[made.first[other]]
            np.testing.assert_allclose(values[made.second[min(one, other), max(one, other)]], expected, rtol=1e-4,
                                       atol=2e-4)


# Closed forms


def test_a_digital():
    """Delta, vega, gamma and the derivative by the discount factor of a digital, whose path-wise derivative is 0."""
    given = case(document("digital", side="call", pays="cash", amount=10, strike=95, expiry="1y") + ONE)
    found = likelihood(given, 1 << 18, 0x1CA62A5A, second=True)

    def price(spot: float = 100.0, vol: float = 0.2) -> float:
        return cash_or_nothing("call", strike=95.0, cash=10.0, spot=spot, vol=vol, maturity=1.0, **FLAT)

    check_greeks(given, found, price, has_variance=False)
    discount = given.column(LeafKind.DISCOUNT)
    close(found.first[discount], found.first_error[discount], price() * np.exp(0.03), 0.01)


@pytest.mark.parametrize(("direction", "knock", "side", "barrier"),
                         [("down", "out", "call", 92), ("up", "in", "put", 107)])
def test_a_barrier_watched_continuously(direction: str, knock: str, side: str, barrier: float):
    """Delta, vega and gamma of continuously watched barrier options."""
    given = case(document("barrier", side=side, direction=direction, knock=knock, strike=100, barrier=barrier,
                          watched="{continuous: [0y, 1y]}", expiry="1y", rebate=2) + ONE)
    found = likelihood(given, 1 << 19, 0x7E1B5A30, second=True)

    def price(spot: float = 100.0, vol: float = 0.2) -> float:
        return barrier_option(side, direction, knock, 100.0, float(barrier), rebate=2.0, spot=spot, vol=vol,
                              maturity=1.0, **FLAT)

    check_greeks(given, found, price, has_variance=True)


def check_greeks(given: Case, found: Found, price, has_variance: bool) -> None:
    """Derivatives by spot and vol of a one-step contract against differences of a closed form."""
    spot, drift, factor = (given.column(kind) for kind in (LeafKind.LOG_SPOT, LeafKind.DRIFT, LeafKind.FACTOR))
    delta = (price(spot=100.01) - price(spot=99.99)) / 0.02
    close(found.first[spot] / 100.0, found.first_error[spot] / 100.0, delta, 0.05)
    gamma = (price(spot=100.1) - 2.0 * price() + price(spot=99.9)) / 0.01
    curve, error = found.second[0, 0]
    value = (curve - found.first[spot]) / 1e4
    assert abs(value - gamma) < 4.0 * (error + found.first_error[spot]) / 1e4
    assert error < 0.3 * abs(gamma) * 1e4
    by_vol = {factor: 1.0, drift: -0.2}
    if has_variance:
        by_vol[given.column(LeafKind.VARIANCE)] = 0.4
    vega = (price(vol=0.2001) - price(vol=0.1999)) / 0.0002
    value = sum(found.first[k] * rate for k, rate in by_vol.items())
    error = sum(found.first_error[k] * abs(rate) for k, rate in by_vol.items())
    assert abs(value - vega) < 4.0 * error < 0.5 * abs(vega)


def test_cross_gamma_of_two_digitals():
    """The derivatives of a payment that two assets decide, by both spots and by each twice."""
    given = made_up("10 if of(spot, harbour) > 95 and of(spot, lantern) > 92 else 0", assets=2)
    found = likelihood(given, 1 << 19, 0x5BE0CD19, second=True)

    def price(a: float, b: float) -> float:
        return two_asset_digital(10.0, 100.0 * np.exp(a), 90.0 * np.exp(b), 95.0, 92.0, 0.01, 0.02, 0.2, 0.3, 0.4,
                                 maturity=1.0, rate=0.03)

    h = 0.01
    for asset, (a, b) in enumerate(((h, 0.0), (0.0, h))):
        k = given.column(LeafKind.LOG_SPOT, asset=asset)
        close(found.first[k], found.first_error[k], (price(a, b) - price(-a, -b)) / (2 * h), 0.05)
        bent = (price(a, b) - 2.0 * price(0.0, 0.0) + price(-a, -b)) / h**2
        close(*found.second[asset, asset], bent, 0.2)
    crossed = (price(h, h) - price(h, -h) - price(-h, h) + price(-h, -h)) / (4.0 * h * h)
    close(*found.second[0, 1], crossed, 0.05)


# Against the path-wise derivative


SMOOTH = {
    "basket": ("max(mean(spot) - 95, 0)", "best(spot) / 50", "  unread: {total: mean(spot), at: expiry}"),
    "one asset ends early": ("of(spot, lantern)", "max(of(spot, harbour) - 95, 0) * of(spot, lantern) / 100",
                             "  unread: {total: mean(spot), at: expiry}"),
    "lowest read as a number": ("of(spot, lantern) - of(low, harbour)", "of(spot, harbour) / 10",
                                "  low: {lowest: 'of(spot, harbour)', at: watched}"),
}


@pytest.mark.parametrize("name", SMOOTH)
def test_smooth_payoffs_either_way(name: str):
    """Both derivatives of a payoff without jumps agree for every leaf; an extreme that is a number, and assets that
    drop out of later steps, included."""
    expiry, middle, running = SMOOTH[name]
    given = made_up(expiry.replace("of(low, harbour)", "low"), middle, running, assets=2)
    scored = likelihood(given, 1 << 18, 0x243185BE)
    swept = with_adjoint(given.tape, [given.price])
    reached = run(lower(swept, given.leaves), seed=0x0C6C3E4F, paths=1 << 18)
    parts = leaf_sums(swept, given.leaves, reached.sums) / reached.batch_paths[:, None]
    for k, leaf in enumerate(given.tape.leaves):
        if leaf.kind is not LeafKind.TERM:
            error = np.hypot(scored.first_error[k], error_of(parts[:, k]))
            assert abs(scored.first[k] - parts[:, k].mean()) < 4.0 * error + 1e-9, str(leaf)


def test_nothing_after_the_payment_is_scored():
    """A payment that is decided early has no score by later steps: it would be noise."""
    given = made_up("mean(spot)", "1 if spot > 95 else 0", "  unread: {total: mean(spot), at: expiry}")
    builder = Builder.of(given.tape)
    early, _ = payments(given.tape, given.price)
    made: Scores = scores(builder, [early])
    times = {builder.instructions[leaf].payload.end for leaf in made.first}
    assert times == {0.0, 0.4}


@pytest.mark.parametrize("payoff", ["call path by path", "digital by its score"])
def test_intervals_from_the_parts_of_a_run_cover(payoff: str):
    """Over many seeds the 95 % interval from the spread of the 64 parts, by Student's law, holds the closed form's
    delta about 95 times in a hundred."""
    seeds, paths = 500, 4096
    if payoff == "call path by path":
        given = case(document("european", side="call", strike=95, expiry="1y") + ONE)
        tape = with_adjoint(given.tape, [given.price])
        chosen, truth = None, european_delta()
    else:
        given = case(document("digital", side="call", pays="cash", amount=10, strike=95, expiry="1y") + ONE)
        builder = Builder.of(given.tape)
        made = scores(builder, [given.price])
        products, _ = made.sums(given.price)
        tape, chosen = finished(builder, given.tape, products), range(len(products))
        truth = (digital(100.001) - digital(99.999)) / 0.002
    spot, program = given.column(LeafKind.LOG_SPOT), lower(tape, given.leaves)
    width, covered = stats.t.ppf(0.975, 63), 0
    for seed in range(seeds):
        reached = run(program, seed=0x3C6EF372 + seed, paths=paths, threads=1)
        parts = leaf_sums(tape, given.leaves, reached.sums, chosen)[:, spot] / reached.batch_paths / 100.0
        covered += abs(parts.mean() - truth) < width * error_of(parts)
    spread = np.sqrt(0.95 * 0.05 * seeds)
    assert abs(covered - 0.95 * seeds) < 4.0 * spread


def european_delta() -> float:
    d1 = (np.log(100.0 / 95.0) + 0.02 + 0.5 * 0.04) / 0.2
    return float(np.exp(-0.01) * stats.norm.cdf(d1))


def digital(spot: float) -> float:
    return cash_or_nothing("call", strike=95.0, cash=10.0, spot=spot, vol=0.2, maturity=1.0, **FLAT)


# What is refused


@pytest.mark.parametrize("expiry", ["1 if low < of(spot, harbour) - 10 else 0", "low if low < 90 else 1"])
def test_a_spot_without_a_score(expiry: str):
    """A minimum compared with what is random, or both a number and compared, leaves the spot without a score; the
    other leaves keep theirs."""
    given = made_up(expiry, running="  low: {lowest: 'of(spot, harbour)', at: watched}")
    builder = Builder.of(given.tape)
    made = scores(builder, [given.price], second=True)
    kinds = {builder.instructions[leaf].payload.kind for leaf in made.first}
    assert [builder.instructions[leaf].payload.kind for leaf in made.refused] == [LeafKind.LOG_SPOT]
    assert kinds == {LeafKind.DRIFT, LeafKind.FACTOR, LeafKind.VARIANCE} and made.second == {}


@pytest.mark.parametrize(("correlation", "zero", "assets"), [("100%", (), {1}), ("99%", (), set()),
                                                             ("40%", (0,), {0}), ("40%", (0, 1), {0, 1})])
def test_singular_steps(correlation: str, zero: tuple[int, ...], assets: set[int]):
    """Full correlation and zero vol leave no density, and the factors at fault are named."""
    text = PAYOFF.format(assets=2, running="  unread: {total: mean(spot), at: expiry}", middle="0", expiry="mean(spot)")
    text += document("made", assets="[harbour, lantern]", middle="0.4y", expiry="1y", watched="{continuous: [0y, 1y]}")
    given = case(text + TWO.replace("40%", correlation))
    leaves = [0.0 if leaf.kind is LeafKind.FACTOR and leaf.asset in zero else value
              for leaf, value in zip(given.tape.leaves, given.leaves, strict=True)]
    assert {leaf.asset for leaf in singular(given.tape, leaves)} == assets
