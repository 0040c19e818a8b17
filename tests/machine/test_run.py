"""Runs: sums that depend on nothing but the seed and the paths, snapshots, bad paths, interruption, replay."""

from __future__ import annotations

import signal
from dataclasses import replace
from math import fsum

import numpy as np
import pytest
from made_programs import SEED, asian, many, program, summed
from scipy.special import ndtr

from mcx.machine import jit
from mcx.machine.blocks import sweep
from mcx.machine.jit import COMPILED
from mcx.machine.prepare import prepare
from mcx.machine.run import (
    COMPILING,
    NonFinitePath,
    NonFiniteSum,
    Stream,
    draws,
    levels,
    load_kernels,
    run,
    values_by_path,
)
from mcx.machine.sizes import batch_for, cost, lanes_for
from mcx.tape.ops import Op
from mcx.tape.program import ALONE, Program

PATHS = many(20_011)  # neither a whole number of groups nor of blocks


def digits(sums) -> tuple:
    """Everything a run found, to the last bit."""
    noted = [(snap.paths, snap.mean.tobytes(), snap.m2.tobytes()) for snap in sums.snapshots]
    parts = sums.batch_paths.tobytes(), sums.sums.tobytes()
    return sums.paths, sums.mean.tobytes(), sums.m2.tobytes(), noted, parts


def log_above(threshold: float) -> Program:
    """The first normal z, and log(z - threshold), which is not finite where z is at or below the threshold."""
    return program([(Op.SUB, 1, 0, -1), (Op.LOG, 1, 1)], rows=2, outputs=[0, 1], scalars=[threshold], normals=1)


def test_asian_call_against_numpy():
    """On the same draws the kernel's payoffs are those of an array script."""
    made = asian(12)
    z = draws(made, seed=SEED, numbers=range(500))
    dt, vol = 1.0 / 12.0, 0.2
    paths = 100.0 * np.exp(np.cumsum((0.03 - 0.5 * vol**2) * dt + vol * np.sqrt(dt) * z, axis=1))
    expected = np.exp(-0.03) * np.maximum(paths.mean(axis=1) - 100.0, 0.0)
    payoff, above = values_by_path(made, seed=SEED, paths=500)
    np.testing.assert_allclose(payoff, expected, rtol=0.0, atol=1e-12)
    np.testing.assert_array_equal(above, expected > 0.0)


def test_mean_and_spread_are_those_of_the_paths():
    """A run's sums are the exact sums over its paths, whole groups and the last part of one alike."""
    made = asian(4)
    sums = run(made, seed=SEED, paths=PATHS)
    for k, values in enumerate(values_by_path(made, seed=SEED, paths=PATHS)):
        mean = fsum(values) / PATHS
        assert sums.mean[k] == pytest.approx(mean, rel=1e-14)
        assert sums.m2[k] == pytest.approx(fsum((values - mean) ** 2), rel=1e-13)
        assert sums.variance[k] == pytest.approx(np.var(values, ddof=1), rel=1e-12)
        assert sums.standard_error[k] == pytest.approx(np.std(values, ddof=1) / np.sqrt(PATHS), rel=1e-12)


def test_one_date_is_the_black_formula():
    """With one date the Asian call is a European one: Black and Scholes (1973), the formula, within 4 errors."""
    sums = run(asian(1), seed=SEED, paths=many(1 << 18))
    d1 = (0.03 + 0.5 * 0.2**2) / 0.2
    price = 100.0 * ndtr(d1) - 100.0 * np.exp(-0.03) * ndtr(d1 - 0.2)
    assert abs(sums.mean[0] - price) < 4.0 * sums.standard_error[0]


@pytest.mark.parametrize("lanes", [64, 128, 192, 512, 1024])
@pytest.mark.parametrize("threads", [1, 2, 5])
def test_no_digit_depends_on_lanes_or_threads(lanes: int, threads: int):
    """The sums are the same to the last bit for every size of block and number of threads."""
    asked = {"seed": SEED, "paths": PATHS, "snapshots": (PATHS // 4, PATHS // 2)}
    made = summed(asian(5))
    assert digits(run(made, **asked, lanes=lanes, threads=threads)) == digits(run(made, **asked))


@pytest.mark.parametrize("batch", [64, 1024, 1 << 20])
def test_no_digit_depends_on_batches(batch: int, monkeypatch: pytest.MonkeyPatch):
    """The sums are the same to the last bit wherever a batch ends."""
    made, asked = summed(asian(3)), {"seed": SEED, "paths": many(5000), "snapshots": (many(2500),)}
    expected = digits(run(made, **asked))
    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: batch)
    assert digits(run(made, **asked, lanes=64)) == expected


def test_paths_have_their_numbers():
    """A run that begins at a later path runs the same paths as one from the start, and so does a lone path."""
    made = asian(6)
    values = levels(made, seed=SEED, numbers=range(1000))
    part = run(made, seed=SEED, first_path=320, paths=500)
    assert part.mean == pytest.approx(values[320:820].mean(axis=0), rel=1e-14)
    np.testing.assert_array_equal(levels(made, seed=SEED, numbers=[999, 3, 3]), values[[999, 3, 3]])


@pytest.mark.parametrize("paths", [1, 2, 63, 64, 65, 129])
def test_few_paths(paths: int):
    """Any number of paths from one up is summed as it is; one alone has no spread to speak of."""
    made = asian(2)
    values = values_by_path(made, seed=SEED, paths=paths)
    sums = run(made, seed=SEED, paths=paths, snapshots=(1,))
    assert sums.paths == paths and sums.snapshots[0].paths == min(paths, 64)
    np.testing.assert_allclose(sums.mean, values.mean(axis=1), rtol=1e-14)
    assert np.all(np.isnan(sums.standard_error)) == (paths == 1)


def test_no_path_is_refused():
    """A run of no paths is a mistake of the caller."""
    with pytest.raises(ValueError, match="at least one path"):
        run(asian(2), seed=SEED, paths=0)


def test_snapshots_are_the_shorter_runs():
    """The sums at a quarter and at half of the paths are those of runs of that length, to the last bit."""
    made, quarter, half = asian(4), 64 * 20, 64 * 40
    sums = run(made, seed=SEED, paths=64 * 80, snapshots=(half, quarter))
    for snap, paths in zip(sums.snapshots, (quarter, half), strict=True):
        assert digits(run(made, seed=SEED, paths=paths))[:4] == (paths, snap.mean.tobytes(), snap.m2.tobytes(), [])


@pytest.mark.parametrize("paths", [PATHS, 640, 65, 1])
def test_sums_of_fixed_parts(paths: int):
    """Group g of 64 paths belongs to part g mod 64, wherever the run begins; each part's sums are exact."""
    made = summed(asian(3))
    first = 64 * 5
    values = levels(made, seed=SEED, numbers=range(first, first + paths))[:, 0]
    part = (first + np.arange(paths)) // 64 % 64
    sums = run(made, seed=SEED, first_path=first, paths=paths)
    np.testing.assert_array_equal(sums.batch_paths, np.bincount(part, minlength=64))
    exact = [[fsum(values[part == k]), fsum(values[part == k] ** 2), fsum([made.scalars[0]] * int((part == k).sum()))]
             for k in range(64)]
    np.testing.assert_allclose(sums.sums, exact, rtol=1e-14, atol=1e-14)


def test_a_sum_that_is_not_finite_stops_the_run():
    """The sum and the group of 64 paths are named; a path past the last one stops nothing."""
    normals = draws(log_above(0.0), seed=SEED, numbers=range(500))[:, 0]
    lowest = int(np.argmin(normals))
    made = replace(log_above(float(normals[lowest])), sums=np.array([(0, ALONE, 2), (1, ALONE, 2)], dtype=np.int32))
    made = replace(made, outputs=made.outputs[:1])
    assert np.isfinite(run(made, seed=SEED, paths=lowest).sums).all()
    with pytest.raises(NonFiniteSum, match="sum 1 is not finite") as found:
        run(made, seed=SEED, paths=500)
    assert (found.value.sum, found.value.first_path) == (1, lowest // 64 * 64)


def test_constant_output():
    """An output that is the same on every path comes back exactly, without spread."""
    sums = run(program([], rows=1, outputs=[-1, 0], scalars=[0.1], normals=1), seed=SEED, paths=640)
    assert sums.mean[0] == 0.1 and sums.m2[0] == 0.0 and sums.m2[1] > 0.0


@pytest.mark.parametrize("lanes", [64, 256])
@pytest.mark.parametrize("threads", [1, 3])
def test_first_path_that_is_not_finite_is_named(lanes: int, threads: int):
    """The lowest such path and its first such output are named, whoever ran it, and it can be replayed alone."""
    normals = draws(log_above(0.0), seed=SEED, stream=Stream.PILOT, numbers=range(many(1 << 14)))[:, 0]
    threshold = np.sort(normals)[2]  # three paths are bad
    first = int(np.flatnonzero(normals <= threshold)[0])
    made = log_above(threshold)
    with pytest.raises(NonFinitePath, match=f"output 1 is not finite on path {first}") as found:
        run(made, seed=SEED, stream=Stream.PILOT, paths=len(normals), lanes=lanes, threads=threads)
    error = found.value
    assert (error.path, error.output, error.seed, error.stream) == (first, 1, SEED, Stream.PILOT)
    replayed = levels(made, seed=SEED, stream=error.stream, numbers=[error.path])[0]
    assert not np.isfinite(replayed[1]) and replayed[0] == normals[first]


def test_infinity_is_not_finite_either():
    """An output that overflows on a path stops the run too, on the path as counted from path 0."""
    made = program([(Op.DIV, 1, -1, 0)], rows=2, outputs=[1], scalars=[1e308], normals=1)
    values = values_by_path(made, seed=SEED, paths=2000)[0]
    first = int(np.flatnonzero(~np.isfinite(values[128:]))[0]) + 128
    with pytest.raises(NonFinitePath) as found:
        run(made, seed=SEED, first_path=128, paths=1000)
    assert found.value.path == first


def test_lanes_past_the_last_path_count_for_nothing():
    """A value that is not finite in the rest of the last block stops nothing and moves no sum."""
    normals = draws(log_above(0.0), seed=SEED, numbers=range(2000))[:, 0]
    lowest = int(np.argmin(normals))
    made = log_above(float(normals[lowest]))
    sums = run(made, seed=SEED, paths=lowest, lanes=1024)
    assert sums.mean[0] == pytest.approx(normals[:lowest].mean(), rel=1e-12)


def test_progress_counts_up_to_all_paths(monkeypatch: pytest.MonkeyPatch):
    """After each batch the paths done are told, with the mean and the error of the first output."""
    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: 128)
    told = []
    sums = run(asian(2), seed=SEED, paths=300, progress=lambda *news: told.append(news))
    assert [paths for paths, _, _ in told] == [128, 256, 300]
    assert told[-1] == (300, sums.mean[0], sums.standard_error[0])


def interrupt(*_: object) -> None:
    signal.raise_signal(signal.SIGINT)


def test_interruption_returns_what_is_there(monkeypatch: pytest.MonkeyPatch):
    """Ctrl-C ends the run with the sums of the batches done, marked, and equal to a run of that many paths."""
    monkeypatch.setattr("mcx.machine.run.batch_for", lambda code, lanes: 128)
    made, asked = asian(2), {"seed": SEED, "snapshots": (128, 700)}
    sums = run(made, **asked, paths=10**12, progress=lambda paths, *_: interrupt() if paths == 384 else None)
    assert sums.interrupted and sums.paths == 384 and [snap.paths for snap in sums.snapshots] == [128]
    assert digits(replace(sums, snapshots=())) == digits(run(made, seed=SEED, paths=384))


def test_interruption_before_anything_is_there(monkeypatch: pytest.MonkeyPatch):
    """Ctrl-C in the first batch leaves nothing to return."""
    from mcx.machine.blocks import Crew

    monkeypatch.setattr(Crew, "run", interrupt)
    with pytest.raises(KeyboardInterrupt):
        run(asian(2), seed=SEED, paths=1000)


def test_interruption_after_the_last_batch_is_none(monkeypatch: pytest.MonkeyPatch):
    """Ctrl-C when all paths are done finds a whole run."""
    sums = run(asian(2), seed=SEED, paths=100, progress=interrupt)
    assert sums.paths == 100 and not sums.interrupted


def test_numbers_of_paths_may_be_of_any_size():
    """Path numbers, seeds and streams up to their last are as good as any."""
    made = program([], rows=2, outputs=[0, 1], normals=2)
    found = levels(made, seed=2**64 - 1, stream=2**32 - 1, numbers=np.array([0, 2**32, 2**64 - 1], dtype=np.uint64))
    assert len(np.unique(found)) == 6


@pytest.mark.skipif(not COMPILED, reason="nothing is compiled")
def test_compiling_is_announced_only_when_it_happens(monkeypatch: pytest.MonkeyPatch):
    """The sentence about compiling comes once, before the kernels of this version exist, and never again."""
    told: list[str] = []
    run(asian(2), seed=SEED, paths=64)
    run(asian(2), seed=SEED, paths=64, notice=told.append)
    assert told == []
    monkeypatch.setattr(jit, "is_cold", lambda entry: entry == "sweep")
    run(asian(2), seed=SEED, paths=64, notice=told.append)
    assert told == [COMPILING]


@pytest.mark.skipif(not COMPILED, reason="nothing is compiled")
def test_kernels_are_loaded_as_runs_need_them(monkeypatch: pytest.MonkeyPatch):
    """After loading a run finds all that it needs: one kernel, for arrays of the same kinds, whatever the run."""
    load_kernels(asian(2))
    kinds = set(sweep.signatures)
    for made in (asian(2), summed(asian(2)), program([], rows=2, outputs=[0, 1], normals=2)):
        run(made, seed=SEED, paths=200)
        levels(made, seed=SEED, numbers=[1, 5])
    assert set(sweep.signatures) == kinds and len(kinds) == 1
    told: list[str] = []
    monkeypatch.setattr(jit, "is_cold", lambda entry: entry == "sweep")
    load_kernels(asian(2), told.append)
    assert told == [COMPILING]


def test_register_file_of_a_block_stays_in_the_cache():
    """Lanes are whole groups, between 128 and 1024, and their registers take at most 256 KB where that is possible."""
    for rows in (1, 10, 56, 200, 300, 5000):
        lanes = lanes_for(rows)
        assert lanes % 64 == 0 and 128 <= lanes <= 1024
        assert lanes == 128 or lanes * rows * 8 <= 1 << 18


def test_batches_are_whole_blocks_and_short():
    """A batch is a whole number of blocks, at most 2^19 paths, fewer for long programs; cost grows with dates."""
    for dates in (1, 52, 2000):
        code = prepare(asian(dates))
        lanes = lanes_for(code.rows)
        batch = batch_for(code, lanes)
        assert batch % lanes == 0 and lanes <= batch <= 1 << 19
        assert batch * cost(asian(dates)) < 3e8
    assert cost(asian(2000)) / cost(asian(1000)) == pytest.approx(2.0, rel=0.01)
