"""Sensitivities on pairs, strata and scrambled points: the same truths, less variance, and errors that hold."""

from __future__ import annotations

from functools import cache
from math import exp, sqrt
from pathlib import Path

import numpy as np
import pytest
from closed_forms import cash_or_nothing, european
from front_door import CALL as CALL_CONTRACT
from front_door import MARKET, mcx, refused, written
from test_greeks import AT, KNOWN
from test_greeks_calibration import CALL, HIT, TEXT, both, call, rebate

import mcx as package
from greek_tools import bend, by_name, found, greeks, ready, slope
from helpers import check
from mcx.estimators.batches import Batches, Sampling
from mcx.estimators.drawn import NOT_OF_SENSITIVITIES, SUPPORTED, Drawn
from mcx.estimators.greeks import Found
from mcx.estimators.methods import methods
from mcx.estimators.plan import Precision
from mcx.estimators.price import value
from mcx.estimators.reduction.antithetic import paired
from mcx.estimators.reduction.catalogue import BY_NAME
from mcx.estimators.reduction.scheme import Stage
from mcx.leaves.jacobian import inputs
from mcx.machine.run import Stream, run, run_scrambles
from mcx.tape.builder import Builder
from mcx.tape.interpret import interpret
from mcx.tape.ops import Op
from mcx.tape.program import Output, Sum

SEED, PATHS = 0x9B05688C2B3E6C1F, 1 << 16
POINTS = ("sobol-bridge", "sobol-components")
EVERY = [(name,) for name in SUPPORTED] + [("antithetic", "stratified"), ("antithetic", "sobol-bridge")]
MONTHLY = "geometric average"
CASES = [("european put", "pathwise"), ("european put", "likelihood"), ("digital", "likelihood"), (MONTHLY, "pathwise"),
         (MONTHLY, "likelihood"), ("barrier", "likelihood"), ("lookback put", "pathwise"),
         ("rebate at the hit", "mixed")]
SHARP = 0.06  # of a likelihood ratio's vega over a year of months


def label(names: object) -> str | None:
    return ",".join(names) if isinstance(names, tuple) else None


@cache
def run_of(name: str, estimator: str, reduction: tuple[str, ...]) -> Found:
    return found(KNOWN[name].text, PATHS, SEED, reduction, estimator=estimator)


@pytest.mark.parametrize("reduction", EVERY, ids=label)
@pytest.mark.parametrize(("name", "estimator"), CASES)
def test_against_closed_forms(name: str, estimator: str, reduction: tuple[str, ...]):
    """Delta, vega, rho, yield and gamma by every kind of estimator, with normals alone, with the uniforms of bridges,
    and at the moment of a hit."""
    values, form = by_name(run_of(name, estimator, reduction).values), KNOWN[name].value
    check(values["delta", "harbour", ""], slope(form, AT, "spot"), SHARP)
    check(values["vega", "harbour", ""], 0.01 * slope(form, AT, "vol"), 2 * SHARP)
    check(values["rho", "EUR", ""], 1e-4 * slope(form, AT, "rate"), SHARP)
    check(values["yield", "harbour", ""], 1e-4 * slope(form, AT, "dividend_yield"), SHARP)
    check(values["theta", "", "1 day"], form(**AT | {"maturity": 1 - 1 / 365}) - form(**AT), 0.4)
    if estimator in KNOWN[name].gamma:
        check(values["gamma", "harbour", ""], 0.01 * AT["spot"] * bend(form, AT, "spot"), 2 * SHARP)


@pytest.mark.parametrize("reduction", EVERY, ids=label)
def test_several_assets(reduction: tuple[str, ...]):
    """Scores with correlated normals, which an order mixes asset by asset."""
    from test_greeks import EXCHANGE, PAIR, exchange

    values = greeks(EXCHANGE, 1 << 17, SEED, reduction, estimator="likelihood")
    for asset, number in (("harbour", "1"), ("lantern", "2")):
        check(values["delta", asset, ""], slope(exchange, PAIR, f"s{number}"), SHARP)
        check(values["vega", asset, ""], 0.01 * slope(exchange, PAIR, f"v{number}"), SHARP)
    check(values["correlation", "lantern/harbour", ""], 0.01 * slope(exchange, PAIR, "rho"), 2 * SHARP)


@pytest.mark.parametrize(("reduction", "key", "less"), [
    (("antithetic",), "delta", 20), (("antithetic",), "rho", 20), (("stratified",), "delta", 2),
    *(((order,), key, less) for order in POINTS
      for key, less in (("delta", 8), ("vega", 100), ("rho", 5), ("gamma", 5))),
])
def test_variance_falls(reduction: tuple[str, ...], key: str, less: float):
    """At equal paths the variance of a smooth average's sensitivities is so many times smaller than on plain paths."""
    subject = "EUR" if key == "rho" else "harbour"
    plain, reduced = (by_name(run_of(MONTHLY, "pathwise", each).values)[key, subject, ""] for each in ((), reduction))
    assert (plain.error / reduced.error) ** 2 > less


@pytest.mark.parametrize("order", POINTS)
def test_a_jump_too(order: str):
    """The likelihood ratio of a digital on points: in one dimension the score is integrated as well as the price."""
    plain, reduced = (by_name(run_of("digital", "likelihood", each).values) for each in ((), (order,)))
    for key in (("delta", "harbour", ""), ("vega", "harbour", ""), ("gamma", "harbour", "")):
        assert (plain[key].error / reduced[key].error) ** 2 > 100


RUNS, LEAST = 400, 4096
SEEDS = [int(seed) for seed in np.random.default_rng(0x5BE0CD19137E2179).integers(1, 2**63, RUNS)]
PUT = CALL.replace("spot - strike", "strike - spot").replace("strike: 95", "strike: 100")
CALIBRATED = {"pathwise": (CALL, call), "put": (PUT, lambda **at: european("put", strike=100.0, **at)),
              "likelihood": (TEXT, both), "mixed": (TEXT, both), "at a hit": (HIT, rebate)}
MEASURED = [("pathwise", ("antithetic",)), ("likelihood", ("antithetic",)), ("mixed", ("antithetic",)),
            ("pathwise", ("stratified",)), ("likelihood", ("stratified",)),
            ("likelihood", ("antithetic", "stratified")),
            ("put", ("sobol-bridge",)), ("likelihood", ("sobol-bridge",)), ("mixed", ("sobol-components",)),
            ("at a hit", ("sobol-bridge",)), ("likelihood", ("antithetic", "sobol-bridge"))]


@pytest.mark.parametrize(("case", "reduction"), MEASURED)
def test_intervals_cover(case: str, reduction: tuple[str, ...]):
    """95 % intervals of at most 4,096 paths cover in 92 % to 98 % of 400 runs, by Student's t; all together are
    unbiased. The rho of a single option is an indicator of one normal: paths so even count nearly the same in every
    part, and the error is cautious. (On points the vega of a call, which has a long tail, covers 92.4 % in 2,000 runs.)
    """
    text, form = CALIBRATED[case]
    made, market = ready(text)
    drawn = Drawn(reduction, SEEDS[0], 1)
    pilot = drawn.sampling(made, 1 << 14, Stream.PILOT)
    method = methods(made, market, {"at a hit": "mixed", "put": "pathwise"}.get(case, case), pilot).valid[0]
    bound = method.on(market)
    kinds = [number.kind for number in inputs(market, made.dated.contract)]
    columns = [kinds.index(kind) for kind in ("spot", "vol", "rate")]
    coefficients = bound.derivatives(pilot).fitted()
    main, results = drawn.sampling(made, LEAST), []
    for seed in SEEDS:
        sampling = Sampling(seed, main.paths, threads=1, plan=main.plan, each=main.each)
        first, second = bound.derivatives(sampling).with_controls(coefficients)
        estimates = first.estimates()
        results.append([*(estimates[column] for column in columns),
                        *(second.estimates()[:1] if "gamma" not in method.refusals else ())])
    assert results[0][0].paths == LEAST
    truth = [*(slope(form, AT, by) for by in ("spot", "vol", "rate")), bend(form, AT, "spot")]
    for number, estimates in enumerate(zip(*results, strict=True)):
        covered = np.mean([low <= truth[number] <= high for low, high in (each.interval95 for each in estimates)])
        cautious = number == 2 and method.name == "pathwise" and reduction != ("antithetic",)
        assert 0.92 <= covered <= (1.0 if cautious else 0.98), (number, covered)
        values = np.array([each.value for each in estimates])
        assert sqrt(RUNS) * abs(values.mean() - truth[number]) / values.std() < 4, number


@pytest.mark.parametrize("name", ["european put", "barrier", "rebate at the hit", MONTHLY])
def test_a_pair_sums_a_path_and_its_mirror(name: str):
    """Each sum on each path: the mean of what it adds up on z, u and on -z, 1 - u; what it is a derivative by stays."""
    made, market = ready(KNOWN[name].text)
    method = methods(made, market, "auto").valid[-1]
    single, pair, values = method.made.tape, paired(method.made.tape), method.on(market).values
    rng = np.random.default_rng(SEED)
    z, u = rng.normal(size=(single.normals, 500)), rng.uniform(1e-6, 1 - 1e-6, size=(single.uniforms, 500))

    def summed(tape, normals: np.ndarray, uniforms: np.ndarray) -> np.ndarray:
        known = interpret(tape, values, normals, uniforms)
        return np.array([np.prod([np.broadcast_to(known[k], 500) for k in part.factors], axis=0) for part in tape.sums])

    assert pair.leaves == single.leaves
    here, there = summed(single, z, u), summed(single, -z, 1.0 - u)
    scale = np.abs(here) + np.abs(there) + 1e-9 * np.abs(here).max(axis=1, keepdims=True)
    assert np.all(np.abs(summed(pair, z, u) - 0.5 * (here + there)) <= 1e-7 * scale)
    for one, other in zip(single.sums, pair.sums, strict=True):
        assert (one.uniform < 0) == (other.uniform < 0)
        if one.uniform >= 0:
            assert interpret(single, values, z, u)[one.uniform] == interpret(pair, values, z, u)[other.uniform]


def test_a_mirror_turns_the_scale_of_a_step_too():
    """A score is summed up by steps on normals, whose scale may itself hang on what was drawn."""
    builder = Builder()
    one, other = (builder.input(Op.NORMAL, k) for k in (0, 1))
    scale = builder.emit(Op.EXP, one)
    value = builder.emit(Op.STEP, one, scale, other)
    tape = builder.tape([Output.of("price", value)], normals=2, sums=[Sum(value, scale), Sum(other, one), Sum(value)])
    pair, z = paired(tape), np.random.default_rng(SEED).normal(size=(2, 100))

    def on(normals: np.ndarray) -> np.ndarray:
        value = normals[0] + np.exp(normals[0]) * normals[1]
        return np.array([value * np.exp(normals[0]), normals[0] * normals[1], value])

    known = interpret(pair, (), z)
    found = [np.prod([np.broadcast_to(known[k], 100) for k in part.factors], axis=0) for part in pair.sums]
    np.testing.assert_allclose(found, 0.5 * (on(z) + on(-z)), rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("reduction", [*EVERY, ()], ids=label)
def test_threads_and_blocks_change_nothing(reduction: tuple[str, ...]):
    """Every sum of the derivative tape, and all that is made of them, to the last bit."""
    made, market = ready(KNOWN["barrier"].text)
    drawn = Drawn(reduction, SEED)
    main = drawn.sampling(made, 20_000)
    pilot = drawn.sampling(made, 1 << 14, Stream.PILOT)
    program = methods(made, market, "likelihood", pilot).valid[0].on(market).program

    def digits(lanes: int, threads: int) -> list[bytes]:
        how = {"seed": SEED, "plan": main.plan, "lanes": lanes, "threads": threads}
        if main.plan.scrambles:
            sums = run_scrambles(program, points=main.paths // main.each // main.plan.scrambles, **how)
            return [each.tobytes() for each in (sums.means, sums.squares, sums.sums)]
        sums = run(program, paths=main.paths // main.each, **how)
        return [each.tobytes() for each in (sums.mean, sums.m2, sums.sums)]

    assert digits(64, 1) == digits(192, 2) == digits(1024, 1)
    one, two = (found(KNOWN["barrier"].text, 20_000, SEED, reduction, threads=threads) for threads in (1, 2))
    assert one.values == two.values and one.price == two.price


@pytest.mark.parametrize("reduction", EVERY, ids=label)
def test_the_price_is_that_of_mcx_price(reduction: tuple[str, ...]):
    """The same paths in the same pairs, groups and scrambles: the same price with the same error."""
    made, _ = ready(KNOWN[MONTHLY].text)
    price = value(made, Precision(paths=10_000), seed=SEED, reduction=reduction).price
    here = found(KNOWN[MONTHLY].text, 10_000, SEED, reduction, estimator="pathwise").price
    assert here.paths == price.paths and here.quantile == price.quantile
    assert here.value == pytest.approx(price.value, rel=1e-12)
    assert here.standard_error == pytest.approx(price.standard_error, rel=1e-9)


def test_points_that_agree_promise_nothing_exact():
    """Nearly every scramble has as many points above a digital's strike; the funding's derivative, minus the price, has
    an error in proportion to the price's, which knows of it."""
    text = KNOWN["digital"].text + "funding: {EUR: 1%}\n"
    run_here = found(text, PATHS, SEED, ("sobol-bridge",), estimator="likelihood")
    price, funding = run_here.price, by_name(run_here.values)["funding", "EUR", ""]
    assert funding.mean == pytest.approx(-1e-4 * price.value, rel=1e-9)
    assert funding.error / -funding.mean == pytest.approx(price.standard_error / price.value, rel=1e-6)
    equal = Batches(np.full(32, 64), np.full((32, 1), 0.7), np.array([0.01]))
    assert equal.estimates()[0].standard_error > 0.0
    assert Batches(np.full(32, 64), np.full((32, 1), 0.7)).estimates()[0].standard_error < 1e-15


def test_ladder_grid_and_comparison():
    """On points a ladder's prices, changes and deltas, a grid and a revaluation are those of the closed form."""
    moves = (-0.05, 0.0, 0.05)
    here = found(KNOWN[MONTHLY].text, PATHS, SEED, ("antithetic", "sobol-components"), spot_moves=moves,
                 vol_moves=(-0.02, 0.02), bump=0.01)
    form = KNOWN[MONTHLY].value
    for step in here.ladder:
        there = AT | {"spot": 100.0 * (1.0 + step.spot_move)}
        assert abs(step.price.z(form(**there))) < 4 and abs(step.deltas[0].z(slope(form, there, "spot"))) < 4
        assert step.spot_move == 0.0 or abs(step.change.z(form(**there) - form(**AT))) < 4
        assert step.price.standard_error < 1e-3
    for point in here.grid:
        there = AT | {"spot": 100.0 * (1.0 + point.spot_move), "vol": 0.22 + point.vol_move}
        assert abs(point.price.z(form(**there))) < 4
    values = by_name(here.comparison)
    check(values["delta", "harbour", ""], (form(**AT | {"spot": 101.0}) - form(**AT | {"spot": 99.0})) / 2.0, 1e-3)
    check(values["gamma", "harbour", ""],
          form(**AT | {"spot": 101.0}) + form(**AT | {"spot": 99.0}) - 2.0 * form(**AT), 5e-2)


@pytest.mark.parametrize("reduction", [(), ("stratified",), ("antithetic", "sobol-bridge")], ids=label)
def test_curves_that_bend_within_a_watch(reduction: tuple[str, ...]):
    """Theta of a continuous watch takes steps of its own, and an order of its own for them."""
    text = KNOWN["barrier"].text.replace("vol: 22%", "vol: {0.3y: 22%, 0.6y: 22%, 1y: 22%}")
    form = KNOWN["barrier"].value
    values = greeks(text, PATHS, SEED, reduction)
    check(values["theta", "", "1 day"], form(**AT | {"maturity": 1 - 1 / 365}) - form(**AT), 0.1)
    check(values["delta", "harbour", ""], slope(form, AT, "spot"), 0.03)


@pytest.mark.parametrize("name", NOT_OF_SENSITIVITIES)
def test_what_is_fitted_to_the_price_is_refused(tmp_path: Path, name: str):
    """With its reason, and exit code 2."""
    refused(mcx("greeks", written(tmp_path, CALL_CONTRACT + MARKET), "--reduction", name),
            f"no variance reduction '{name}' of sensitivities, since", NOT_OF_SENSITIVITIES[name])


def test_only_what_changes_how_paths_are_drawn_is_taken():
    """Sensitivities know of a method's plan of draws, and of pairs; of nothing else that it does to a tape."""
    assert {name for name in SUPPORTED if BY_NAME[name].stage is not Stage.DRAWS} == {"antithetic"}


@pytest.mark.parametrize(("asked", "said"), [
    ("sobol-bridge,stratified", "cannot go together"), ("antithetic,antithetic", "named twice"),
    ("none,antithetic", "goes with no other")])
def test_wrong_combinations(tmp_path: Path, asked: str, said: str):
    refused(mcx("greeks", written(tmp_path, CALL_CONTRACT + MARKET), "--reduction", asked), said)


def test_nothing_drawn_is_refused(tmp_path: Path):
    """A method that has nothing to offer on a contract says so."""
    fixed = CALL_CONTRACT.replace("expiry: 1y", "expiry: 0y")
    refused(mcx("greeks", written(tmp_path, fixed + MARKET), "--reduction", "sobol-bridge"), "no 'sobol-bridge', since")


@pytest.mark.parametrize("reduction", ["antithetic", "antithetic,stratified", "sobol-components"])
def test_a_record_reproduces(tmp_path: Path, reduction: str):
    """To the last bit, with the reduction that was asked for; the result says it, as do the page and Python."""
    file, record = written(tmp_path, CALL_CONTRACT + MARKET), tmp_path / "greeks.json"
    asked = ("--paths", 5000, "--reduction", reduction)
    result = mcx("greeks", file, *asked, "--record", record, "--json").json
    replayed = mcx("replay", record, "--json")
    assert replayed.code == 0 and replayed.json["identical"] and replayed.json["largest_difference"] == 0.0
    assert result["reduction"] == reduction and f"variance reduction: {reduction}" in mcx("greeks", file, *asked).out
    assert package.greeks(file, paths=5000, reduction=reduction).to_dict() | {"seconds": 0} == result | {"seconds": 0}
    assert result["paths"] >= 5000 and result["paths"] == result["planned"]["paths"]
    for each in result["greeks"]:
        low, high = each["interval95"]
        quantile = 0.5 * (high - low) / each["standard_error"]
        assert quantile == pytest.approx(2.0395 if "sobol" in reduction else 2.0, rel=0.02)


def test_precision_is_planned_for_the_reduction(tmp_path: Path):
    """The half-width asked for is that of the price: pairs and points need fewer paths."""
    file = written(tmp_path, CALL_CONTRACT + MARKET)
    plain, points = (package.greeks(file, within="0.02", reduction=name) for name in ("none", "sobol-bridge"))
    assert points.planned.met and points.paths < plain.paths / 16
    assert points.paths % 32 == 0 and (points.paths // 32).bit_count() == 1
