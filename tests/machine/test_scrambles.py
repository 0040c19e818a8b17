"""Runs over scrambled points: each scramble is a run of its own, wherever batches, blocks and threads cut."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from made_programs import SEED, asian, program, summed

from mcx.machine.draw_plan import SCRAMBLE_BITS, DrawPlan
from mcx.machine.orders import bridge, components
from mcx.machine.run import NonFinitePath, NonFiniteSum, ScrambleSums, draws, levels, run, run_scrambles
from mcx.machine.sizes import cost
from mcx.tape.ops import Op
from mcx.tape.program import ALONE

MADE = summed(asian(6))
PLAN = DrawPlan(5, bridge(np.full((6, 1), 0.01)))


def digits(sums: ScrambleSums) -> tuple:
    """Everything a run found, to the last bit."""
    return sums.points, sums.means.tobytes(), sums.squares.tobytes(), sums.sums.tobytes(), sums.interrupted


def interrupt(*_: object) -> None:
    raise KeyboardInterrupt


@pytest.mark.parametrize("points", [64, 192, 1024])
def test_each_scramble_is_a_run(points: int):
    """The sums of a scramble are, to the last bit, those of a run over its path numbers."""
    sums = run_scrambles(MADE, seed=SEED, plan=PLAN, points=points)
    assert sums.means.shape == (5, 2) and not sums.interrupted
    for scramble in range(5):
        alone = run(MADE, seed=SEED, plan=PLAN, paths=points, first_path=scramble << SCRAMBLE_BITS)
        np.testing.assert_array_equal(sums.means[scramble], alone.mean)
        np.testing.assert_array_equal(sums.squares[scramble], alone.m2)
        np.testing.assert_array_equal(sums.sums[scramble], alone.sums.sum(axis=0))
    np.testing.assert_allclose(sums.sums[:, 0], points * sums.means[:, 0], rtol=1e-13)


@pytest.mark.parametrize("lanes", [64, 192, 1024])
@pytest.mark.parametrize("threads", [1, 2, 5])
def test_no_digit_depends_on_lanes_or_threads(lanes: int, threads: int):
    """The sums are the same to the last bit for every size of block and number of threads."""
    asked = {"seed": SEED, "plan": PLAN, "points": 320}
    assert digits(run_scrambles(MADE, **asked, lanes=lanes, threads=threads)) == digits(run_scrambles(MADE, **asked))


@pytest.mark.parametrize("batch", [64, 448, 1 << 20])
def test_no_digit_depends_on_batches(batch: int, monkeypatch: pytest.MonkeyPatch):
    """A batch may hold several scrambles, or a part of one."""
    asked = {"seed": SEED, "plan": PLAN, "points": 256}
    expected = digits(run_scrambles(MADE, **asked))
    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: batch)
    assert digits(run_scrambles(MADE, **asked, lanes=64)) == expected


def test_progress_and_interruption(monkeypatch: pytest.MonkeyPatch):
    """Ctrl-C leaves the scrambles that are whole, if there are two; each report is of what is whole."""
    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: 64)
    asked = {"seed": SEED, "plan": PLAN, "points": 128}
    whole, reports = run_scrambles(MADE, **asked), []
    run_scrambles(MADE, **asked, progress=lambda *report: reports.append(report))
    assert [paths for paths, *_ in reports] == list(range(256, 641, 64))
    prices = whole.means[:, 0]
    assert reports[-1][1:] == pytest.approx((prices.mean(), prices.std(ddof=1) / np.sqrt(5)), rel=1e-12)
    cut = run_scrambles(MADE, **asked, progress=lambda paths, *_: interrupt() if paths == 448 else None)
    assert cut.interrupted
    np.testing.assert_array_equal(cut.means, whole.means[:3])
    done = run_scrambles(MADE, **asked, progress=lambda paths, *_: interrupt() if paths == 640 else None)
    assert digits(done) == digits(whole)


def test_interruption_before_two_scrambles(monkeypatch: pytest.MonkeyPatch):
    """One scramble has no error, so there is nothing to return."""
    from mcx.machine.blocks import Crew

    monkeypatch.setattr(Crew, "run", interrupt)
    with pytest.raises(KeyboardInterrupt):
        run_scrambles(MADE, seed=SEED, plan=PLAN, points=64)


def test_a_bad_path_is_named():
    """The number of a path that is not finite replays it alone."""
    made = program([(Op.SUB, 1, 0, -1), (Op.LOG, 1, 1)], rows=2, outputs=[0, 1], scalars=[-2.5], normals=1)
    with pytest.raises(NonFinitePath) as caught:
        run_scrambles(made, seed=SEED, plan=DrawPlan(9), points=64)
    alone = levels(made, seed=SEED, plan=DrawPlan(9), numbers=[caught.value.path])[0]
    assert caught.value.output == 1 and alone[0] < -2.5 and np.isnan(alone[1])
    scramble, point = divmod(caught.value.path, 1 << SCRAMBLE_BITS)
    before = levels(made, seed=SEED, plan=DrawPlan(9), numbers=np.arange(point) + (scramble << SCRAMBLE_BITS))
    assert np.isfinite(before).all()


def test_a_sum_that_is_not_finite_is_named():
    """By the first of the group's 64 path numbers, in its scramble."""
    made = program([(Op.SUB, 1, 0, -1), (Op.LOG, 1, 1)], rows=2, outputs=[0], scalars=[-3.2], normals=1)
    made = replace(made, sums=np.array([(0, ALONE, 2), (1, ALONE, 2)], dtype=np.int32))
    with pytest.raises(NonFiniteSum) as caught:
        run_scrambles(made, seed=SEED, plan=DrawPlan(9), points=128)
    first = caught.value.first_path
    drawn = draws(made, seed=SEED, plan=DrawPlan(9), numbers=np.arange(64) + first)
    assert caught.value.sum == 1 and drawn.min() < -3.2 and first >> SCRAMBLE_BITS < 9


@pytest.mark.parametrize("number", [5 << SCRAMBLE_BITS, (1 << 64) - 1])
def test_paths_of_no_scramble_are_refused(number: int):
    """The kernel would read keys that are not there."""
    with pytest.raises(ValueError, match="in none of 5 scrambles"):
        levels(MADE, seed=SEED, plan=PLAN, numbers=[3, number, 4])
    with pytest.raises(ValueError, match="in none of 5 scrambles"):
        run(MADE, seed=SEED, plan=PLAN, first_path=number - 64, paths=65)


@pytest.mark.parametrize("points", [0, 65])
def test_parts_of_groups_are_refused(points: int):
    """A scramble is a whole number of groups."""
    with pytest.raises(ValueError, match="whole groups of 64 points"):
        run_scrambles(MADE, seed=SEED, plan=PLAN, points=points)


def test_what_plans_cost():
    """Points are cheaper than random numbers, and an order costs by its steps: at most a tenth of an Asian call."""
    made, clock = asian(52), np.full((52, 1), 0.01)
    plans = [DrawPlan(9), DrawPlan(9, bridge(clock)), DrawPlan(9, components(np.sqrt(clock)[:, :, None]))]
    net, bridged, leading = (cost(made, plan) / cost(made) for plan in plans)
    assert net < bridged < leading < 1.1 and net < 1.0
    assert cost(made, DrawPlan(0, plans[1].order)) - cost(made) == pytest.approx(51 * 0.3)
