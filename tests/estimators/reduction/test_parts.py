"""The parts of variance reduction: names, coefficients, mirrors, weights, strata, the choice."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from test_laws import CURVED, FLAT, made

from mcx.checked.load import load
from mcx.dates.dating import date_on
from mcx.estimators.nets import clock
from mcx.estimators.plan import precision
from mcx.estimators.price import value
from mcx.estimators.ready import Ready, prepare
from mcx.estimators.reduction import choice, fit, sample
from mcx.estimators.reduction.antithetic import paired
from mcx.estimators.reduction.catalogue import conflict, scheme_of
from mcx.estimators.reduction.choice import CHOICES, best
from mcx.estimators.reduction.fit import CONTROLLED, Costs, chosen_controls, coefficients
from mcx.estimators.reduction.importance import mode, shifted
from mcx.estimators.reduction.names import NAMES, wished
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case, Control, Scheme
from mcx.faults import Refusal, RequestError
from mcx.machine.draw_plan import DrawPlan
from mcx.machine.orders import bridge, early_bridge
from mcx.machine.run import Stream, draws, run
from mcx.tape.adjoint import by_normals
from mcx.tape.interpret import interpret

SEED = 0x510E527FADE682D1
EXAMPLES = Path(__file__).resolve().parents[3] / "payoffs" / "examples"


def shipped(file: str, number: int) -> Ready:
    """A contract of the examples."""
    request = load([EXAMPLES / f"{file}.yaml"])
    dated, _ = date_on(request.contracts[number], request.market)
    return prepare(dated, request.market)[0]


@pytest.mark.parametrize(("asked", "names"), [
    ("none", ()), ("auto", ("auto",)), ("antithetic", ("antithetic",)),
    (" sobol-bridge, controls", ("controls", "sobol-bridge")), (["antithetic", "controls"], ("controls", "antithetic"))])
def test_names_are_put_in_order(asked: object, names: tuple):
    assert wished(asked) == names


@pytest.mark.parametrize("asked", ["", "sobol", "none,antithetic", "auto,controls", "controls,controls", None, 3, [], [1]])
def test_other_names_are_refused(asked: object):
    with pytest.raises(RequestError):
        wished(asked)


def test_two_sources_of_draws_conflict():
    """Said before anything runs."""
    assert "cannot go together" in conflict(("sobol-bridge", "sobol-components"))
    assert not conflict(("controls", "antithetic", "stratified"))
    with pytest.raises(RequestError, match="one source"):
        scheme_of(Case(made("digital", FLAT), SEED), ("stratified", "sobol-bridge"))


def test_coefficients_of_nearly_equal_controls_stay_small():
    """Three copies of one control, but for 1e-9, share its coefficient."""
    rng = np.random.default_rng(SEED)
    x, noise = rng.normal(size=4000), rng.normal(size=(4000, 3))
    controls = x[:, None] + 1e-9 * noise
    target = 2.0 * x + 0.1 * rng.normal(size=4000)
    found = coefficients(target[:, None], controls)
    assert np.abs(found).max() < 2.1 and found.sum() == pytest.approx(2.0, abs=0.01)


def test_controls_are_chosen_by_variance_times_cost():
    """Of a good cheap, the same but dearer, and a useless control the first; those that must come in any case."""
    rng = np.random.default_rng(SEED)
    x, other = rng.normal(size=4000), rng.normal(size=4000)
    target = x + 0.1 * rng.normal(size=4000)
    candidates = np.stack([other, x, x + 1e-3 * other, np.full(4000, 2.0)], axis=1)
    needs = np.array([[True, False], [False, False], [False, True], [False, False]])
    costs = Costs(10.0, 0.3, np.array([50.0, 50.0]), needs)
    controls = tuple(Control(str(k), 0.0) for k in range(4))
    assert chosen_controls(target, candidates, controls, costs).tolist() == [1]
    must = tuple(replace(control, must=control.name in "03") for control in controls)  # the constant cannot
    assert chosen_controls(target, candidates, must, costs).tolist() == [0, 1]
    assert chosen_controls(rng.normal(size=4000), candidates, controls, costs).tolist() == []


@pytest.mark.parametrize("name", ["average", "barrier", "exchange", "lookback strike"])
def test_a_pair_is_a_path_and_its_mirror(name: str):
    """Each output on each pair of draws: the mean of the tape on z and on -z, on u and on 1 - u."""
    ready = made(name, CURVED)
    tape = ready.unrolled.tape
    rng = np.random.default_rng(SEED)
    z, u = rng.normal(size=(tape.normals, 50)), rng.uniform(size=(tape.uniforms, 50))
    leaves = ready.market.values(tape.leaves)
    sides = [interpret(tape, leaves, s * z, 0.5 + s * (u - 0.5)) for s in (1.0, -1.0)]
    pair = paired(tape)
    found = interpret(pair, ready.market.values(pair.leaves), z, u)
    for one, output in zip(tape.outputs, pair.outputs, strict=True):
        np.testing.assert_allclose(found[output.value], 0.5 * (sides[0][one.value] + sides[1][one.value]), rtol=1e-9)


def test_a_shift_carries_its_weight():
    """Each output of the shifted tape at z: that of the tape at z + shift, times the ratio of the densities; of what
    takes no controls the distance from a given number is weighted."""
    ready = made("barrier", CURVED)
    tape = ready.unrolled.tape
    rng = np.random.default_rng(SEED)
    z, shift = rng.normal(size=(tape.normals, 50)), rng.normal(size=tape.normals)
    middle = [0.25 * (output.kind not in CONTROLLED) for output in tape.outputs]
    moved, weight = shifted(tape, shift, middle)
    there = z + shift[:, None]
    ratio = np.exp(-0.5 * (there**2).sum(axis=0) + 0.5 * (z**2).sum(axis=0))
    found = interpret(moved, ready.market.values(moved.leaves), z)
    plain = interpret(tape, ready.market.values(tape.leaves), there)
    np.testing.assert_allclose(found[weight], ratio, rtol=1e-9)
    for one, output, centre in zip(tape.outputs, moved.outputs, middle, strict=True):
        weighed = 1.0 if one.kind == "life" else ratio  # paid at expiry on every path
        np.testing.assert_allclose(found[output.value], (plain[one.value] - centre) * weighed + centre, rtol=1e-9,
                                   atol=1e-13)
    assert [output.kind for output in tape.outputs].count("life") == 1


@pytest.mark.parametrize("name", ["average", "barrier", "exchange"])
def test_slopes_by_normals_are_those_of_differences(name: str):
    """The price's derivative by each normal at a point where something is paid."""
    ready = made(name, CURVED)
    tape, leaves = ready.unrolled.tape, ready.market.values(ready.unrolled.tape.leaves)
    result = tape.outputs[0].value
    point = np.abs(np.random.default_rng(SEED).normal(size=tape.normals)) * [1.0, -0.5][name == "exchange"]
    point[::2] = np.abs(point[::2])
    moved = 1e-5 * np.eye(tape.normals)
    up, down = (interpret(tape, leaves, point[:, None] + sign * moved)[result] for sign in (1.0, -1.0))
    found = by_normals(tape, interpret(tape, leaves, point), result)
    assert np.abs(found).min() > 0.01
    np.testing.assert_allclose(found, (up - down) / 2e-5, rtol=1e-5)


def test_the_mode_is_where_the_slope_vanishes():
    """Of a call far out of the money: log payoff and log density rise and fall alike, by the closed form's own terms."""
    far = made("average", FLAT.replace("spot: 100", "spot: 55"))
    found = mode(Case(far, SEED))
    tape, leaves = far.unrolled.tape, far.market.values(far.unrolled.tape.leaves)
    values = interpret(tape, leaves, found)
    slope = by_normals(tape, values, tape.outputs[0].value) / values[tape.outputs[0].value]
    assert np.linalg.norm(found) > 3.0
    np.testing.assert_allclose(slope, found, atol=0.02 * np.linalg.norm(found))


def test_the_mode_of_a_digital_is_its_edge():
    """Paid below 104, all the density on the near side: the mode is the mean, and importance has nothing to offer; paid
    below 40, it is the edge itself."""
    with pytest.raises(Refusal, match="pays most where paths are drawn anyway"):
        scheme_of(Case(made("digital", FLAT), SEED), ("importance",))
    far = made("digital", FLAT.replace("spot: 100", "spot: 260"))
    edge = (math.log(104.0 / 260.0) - (0.04 - 0.015 - 0.5 * 0.22**2)) / 0.22
    assert mode(Case(far, SEED))[0] == pytest.approx(edge, abs=0.06)


def test_strata_share_out_the_end_of_a_path():
    """Of the 64 paths of a group one is in each part of equal probability; other normals are untouched."""
    ready = made("average", FLAT)
    program = ready.program
    plain, strata = (draws(program, seed=SEED, numbers=range(640), plan=DrawPlan(strata=s)) for s in (0, 64))
    from scipy.special import ndtr

    parts = np.floor(64 * ndtr(strata[:, 0])).astype(int).reshape(-1, 64)
    assert (np.sort(parts, axis=1) == np.arange(64)).all()
    np.testing.assert_array_equal(plain[:, 1:], strata[:, 1:])


@pytest.mark.parametrize(("file", "number", "ratio"), [("barrier", 4, 20.0), ("worst_of_watched", 0, 3.0),
                                                       ("worst_of_watched", 1, 1.5)])
def test_controls_beside_a_hit_and_between_bounds(file: str, number: int, ratio: float):
    """A rebate at the moment of a hit, and assets watched together: the controls read levels on dates only, lower the
    variance and leave every other output as it is on the same paths, the distances between bounds among them."""
    ready = shipped(file, number)
    scheme = scheme_of(Case(ready, SEED), ("controls",))
    plain, found = (run(program, seed=SEED, paths=1 << 15) for program in (ready.program, scheme.program))
    outputs = ready.unrolled.tape.outputs
    assert ready.unrolled.bracketed == any(output.kind == "gap" for output in outputs)
    free = [number for number, output in enumerate(outputs) if output.kind not in CONTROLLED]
    np.testing.assert_allclose(found.mean[free], plain.mean[free], rtol=1e-12)
    error = np.hypot(found.standard_error, plain.standard_error)
    assert np.all(np.abs(found.mean - plain.mean) <= 4.0 * error + 1e-12)
    assert plain.variance[0] > ratio * found.variance[0]


def test_only_a_contract_that_may_end_gets_the_early_bridge():
    """By the points of an autocall, and of an average."""
    autocall = shipped("autocall", 0)
    for ready, order in ((autocall, early_bridge), (made("average", FLAT), bridge)):
        plan = scheme_of(Case(ready, SEED), ("sobol-bridge",)).plan
        expected = order(clock(ready.market, ready.unrolled.grid))
        np.testing.assert_array_equal(plan.order.pairs, expected.pairs)
    assert not np.array_equal(early_bridge(np.full((12, 1), 0.01)).pairs, bridge(np.full((12, 1), 0.01)).pairs)


def test_the_choice_beats_plain_sampling_and_is_always_the_same():
    """For an average; two threads choose as one does, and the named methods give the same digits as the choice."""
    ready = made("average", FLAT)
    scheme = best(Case(ready, SEED, 1))
    assert scheme.names in CHOICES and "controls" in scheme.names
    assert scheme.names == best(Case(ready, SEED, 2)).names
    asked = precision(20_000, None, None)
    chosen, named, plain = (value(ready, asked, seed=SEED, reduction=names) for names in (("auto",), scheme.names, ()))
    assert chosen.results == named.results
    assert chosen.price.standard_error < 0.03 * plain.price.standard_error
    assert abs(chosen.price.value - plain.price.value) < 4 * plain.price.standard_error


def test_pilots_share_no_number_with_the_run(monkeypatch: pytest.MonkeyPatch):
    """A choice or a coefficient that had seen the run's paths would bias it: each pilot has a stream of its own."""
    seen = {"choice": set(), "fit": set()}
    independent, values_by_path = Sampler.independent, fit.values_by_path

    def trial(sampler: Sampler, wanted: int, stream: int = Stream.PILOT):
        seen["choice"].add(stream)
        return independent(sampler, wanted, stream)

    def fitting(program, **how: object):
        seen["fit"].add(how["stream"])
        return values_by_path(program, **how)

    monkeypatch.setattr(Sampler, "independent", trial)
    monkeypatch.setattr(fit, "values_by_path", fitting)
    best(Case(made("average", FLAT), SEED))
    assert seen == {"choice": {Stream.CHOICE}, "fit": {Stream.COEFFICIENTS}}
    assert len(set(Stream)) == len(Stream) and Stream.MAIN not in (Stream.CHOICE, Stream.COEFFICIENTS)


def test_a_pilot_that_was_cut_short_says_nothing(monkeypatch: pytest.MonkeyPatch):
    """Of points as of paths: the interruption goes on to whoever asked."""
    sampler = Sampler(scheme_of(Case(made("average", FLAT), SEED), ("sobol-bridge",)), SEED)
    on_net = sample.on_net
    monkeypatch.setattr(sample, "on_net", lambda *given, **how: replace(on_net(*given, **how), interrupted=True))
    assert sampler.sample(2048).interrupted
    for run_pilot in (sampler.pilot, sampler.independent):
        with pytest.raises(KeyboardInterrupt):
            run_pilot(2048)


def test_rounding_decides_nothing():
    """Of several choices that are exact the first is taken, whatever rounding leaves of each; the note says so."""
    few = [choice.Trial(Scheme(names, None), burden, False) for names, burden in
           (((), 1.0), (("controls",), 1e-28), (("controls", "antithetic"), 1e-31), (("importance",), 0.0))]
    assert choice._found(few).scheme.names == ("controls",)
    assert choice._noted(few, 8192, []).notes[-1].endswith("; exact")
    assert choice._found([*few, choice.Trial(Scheme(("stratified",), None), 1e-6, False)]).scheme.names == ("controls",)


def test_a_choice_costs_no_more_than_its_share(monkeypatch: pytest.MonkeyPatch):
    """What is tried is what can be paid: nothing, nothing that needs another tape, or everything, and the note says what
    was left out; a longer run can pay more."""
    ready = made("average", FLAT)
    tried = []
    monkeypatch.setattr(choice, "scheme_of", lambda case, names, known=None: (tried.append(names), scheme_of(
        case, names, known))[1])
    rewriting = {names for names in CHOICES if set(names) & {"controls", "importance"}}
    for seconds, expected in ((1e-6, {()}), (0.2, set(CHOICES[:2])), (5.0, set(CHOICES))):
        tried.clear()
        monkeypatch.setattr(choice, "SECOND", seconds * 1e9)
        scheme = best(Case(ready, SEED), precision(20_000, None, None))
        assert expected <= set(tried) and (set(tried) <= expected or not set(tried) & rewriting)
        assert ("would cost too much" in scheme.notes[-1]) == (expected != set(CHOICES))
    monkeypatch.setattr(choice, "SECOND", 0.2e9)
    tried.clear()
    best(Case(ready, SEED), precision(1 << 26, None, None))
    assert ("controls",) in tried


def test_the_pilot_of_a_precision_is_worth_what_plain_sampling_would_take(monkeypatch: pytest.MonkeyPatch):
    """A thousandth of the half-width takes a million times the paths, which pays for more trials."""
    ready = made("average", FLAT)
    monkeypatch.setattr(choice, "SECOND", 0.0)
    wide, narrow = (best(Case(ready, SEED), precision(None, within, None)) for within in ("1", "0.001"))
    assert wide.names == () and "controls" in narrow.names


def test_a_pilot_of_controls_that_costs_too_much_is_refused():
    """With the reason; the same one is run where it may cost that."""
    ready = made("average", FLAT)
    with pytest.raises(Refusal, match=r"since a pilot of 8,192 paths costs too much for this run"):
        scheme_of(Case(ready, SEED, most=1e4), ("controls",))
    assert scheme_of(Case(ready, SEED, most=1e9), ("controls",)).fit_paths == 8192


@pytest.mark.parametrize("reduction", ["none", "controls", "antithetic", "sobol-bridge", "stratified"])
def test_half_widths_are_planned_with_a_method(reduction: str):
    """The precision asked for is reached, by a method in fewer paths than without."""
    ready = made("lookback", FLAT)
    found = value(ready, precision(None, "0.05", None), seed=SEED, reduction=wished(reduction))
    plain = value(ready, precision(None, "0.05", None), seed=SEED)
    assert found.price.half_width <= 0.05
    assert found.price.paths <= plain.price.paths


@pytest.mark.parametrize("names", [(name,) for name in NAMES])
def test_odd_numbers_of_paths_become_whole(names: tuple):
    """The number that was run asks for itself again, so that a record replays."""
    ready = made("average", FLAT)
    try:
        sampler = Sampler(scheme_of(Case(ready, SEED), names), SEED)
    except Refusal:
        pytest.skip("does not apply")
    for wanted in (2049, 5000, 12_345):
        found = sampler.paths(wanted)
        assert found >= wanted and sampler.paths(found) == found == sampler.sample(wanted).results[0].paths
