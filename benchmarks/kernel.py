"""How fast the kernel is: an arithmetic Asian call, 52 dates, 2^20 paths, against two rivals.

    python benchmarks/kernel.py            # rivals, threads, start, instructions, vector registers
    python benchmarks/kernel.py --quick    # rivals and threads only

The rivals are the array script that one would write with numpy (and the same in chunks, for who knows about caches),
and asian.c, one fused loop nest in C with the same generator and inverse normal (so the same price), on one core and in
the widest vectors that the processor has. Everything is run in turns, so that a busy machine is unfair to all alike;
medians and best times of several rounds are printed, in nanoseconds for a path and date. On a busy machine read the
best ones.
"""

from __future__ import annotations

import ctypes
import os
import re
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

from mcx.machine.run import available_threads, run
from mcx.tape.ops import Op
from mcx.tape.program import Program

SEED = 5920817734650192837
DATES, PATHS = 52, 1 << 20
SPOT, STRIKE, RATE, VOL = 100.0, 100.0, 0.03, 0.2
DRIFT, DEVIATION = (RATE - 0.5 * VOL * VOL) / DATES, VOL / np.sqrt(DATES)
ROUNDS = 7
COMPILER = "gcc -O3 -march=native -mprefer-vector-width=512 -ffast-math -shared -fPIC -DLANES=256"
GOALS = {"script": "at least 18 on two cores", "C": "at most 1.15 on one core", "threads": "at least 1.9"}


def asian() -> Program:
    """The call's program, as the tape's registers would be given out."""
    scalars = (np.log(SPOT) + DRIFT, DRIFT, DEVIATION, 1.0 / DATES, STRIKE, 0.0, np.exp(-RATE))
    start, drift, deviation, weight, strike, zero, discount = (-1 - k for k in range(len(scalars)))
    x, y, total, other = range(DATES, DATES + 4)
    code = [(Op.STEP, x, start, deviation, 0, 0), (Op.EXP, total, x, 0, 0, 0)]
    for date in range(1, DATES):
        code += [(Op.ADD, y, x, drift, 0, 0), (Op.STEP, x, y, deviation, date, 0)]
        code += [(Op.EXP, y, x, 0, 0, 0), (Op.ADD, other, total, y, 0, 0)]
        total, other = other, total
    code += [
        (Op.MUL, other, total, weight, 0, 0),
        (Op.SUB, total, other, strike, 0, 0),
        (Op.MAX, other, total, zero, 0, 0),
        (Op.MUL, total, other, discount, 0, 0),
    ]
    return Program(np.array(code, np.int32), np.array(scalars), np.array([total], np.int32), DATES, 0, DATES + 4)


def script(chunk: int, paths: int = PATHS) -> float:
    """The array script, some paths at a time."""
    rng = np.random.default_rng(SEED)
    payoffs = []
    for _ in range(0, paths, chunk):
        steps = DRIFT + DEVIATION * rng.standard_normal((chunk, DATES))
        levels = SPOT * np.exp(np.cumsum(steps, axis=1))
        payoffs.append(np.exp(-RATE) * np.maximum(levels.mean(axis=1) - STRIKE, 0.0))
    return float(np.concatenate(payoffs).mean())


def fused_c(folder: str, *defined: str) -> Callable[[], float]:
    """The C program, compiled into a folder."""
    source, library = Path(__file__).with_name("asian.c"), f"{folder}/asian{len(defined)}.so"
    subprocess.run([*COMPILER.split(), *defined, str(source), "-o", library, "-lmvec", "-lm"], check=True)
    function = ctypes.CDLL(library).asian
    function.restype = ctypes.c_double
    function.argtypes = [ctypes.c_uint64, ctypes.c_uint64, ctypes.c_int64, ctypes.c_int, *[ctypes.c_double] * 5]
    return lambda: function(SEED, 0, PATHS, DATES, SPOT, STRIKE, DRIFT, DEVIATION, np.exp(-RATE)) / PATHS


def race(runners: dict[str, Callable[[], float]], rounds: int = ROUNDS) -> dict[str, list[float]]:
    """Seconds of each runner in each round, in turns, after one warm-up."""
    for name, runner in runners.items():
        print(f"{name:>32}  price {runner():.6f}")
    times: dict[str, list[float]] = {name: [] for name in runners}
    for _ in range(rounds):
        for name, runner in runners.items():
            begun = time.perf_counter()
            runner()
            times[name].append(time.perf_counter() - begun)
    return times


def rivals() -> None:
    """The table of rivals, and the ratios that have goals."""
    made, most = asian(), available_threads()
    with tempfile.TemporaryDirectory() as folder:
        runners: dict[str, Callable[[], float]] = {
            "machine, one core": lambda: run(made, seed=SEED, paths=PATHS, threads=1).mean[0],
            f"machine, {most} cores": lambda: run(made, seed=SEED, paths=PATHS, threads=most).mean[0],
            "C, its own exp": fused_c(folder),
            "C, exp of the library": fused_c(folder, "-DLIBRARY_EXP"),
            "array script": lambda: script(PATHS),
            "array script in chunks": lambda: script(1 << 17),
        }
        times = race(runners)
    print(f"\n{'ns for a path and date':>32}  {'median':>7} {'best':>7}")
    for name, seconds in times.items():
        median, best = (1e9 * value / PATHS / DATES for value in (statistics.median(seconds), min(seconds)))
        print(f"{name:>32}  {median:7.2f} {best:7.2f}")
    one, all_cores, own, library, array, chunks = times.values()
    print()
    for how in (statistics.median, min):
        rival = min(how(own), how(library))
        print(f"{'by the ' + ('median' if how is not min else 'best'):>32}  "
              f"script / {most} cores {how(array) / how(all_cores):.1f}, in chunks {how(chunks) / how(all_cores):.1f} "
              f"(goal: {GOALS['script']}), "
              f"one core / C {how(one) / rival:.2f} ({GOALS['C']}), "
              f"one core / {most} cores {how(one) / how(all_cores):.2f} ({GOALS['threads']})")  # fmt: skip


def start() -> None:
    """Seconds of a process that imports, compiles or loads the kernel, and prices 64 paths; and of its imports."""
    here = str(Path(__file__).parent)
    code = f"import sys; sys.path.insert(0, {here!r}); import kernel; kernel.run(kernel.asian(), seed=1, paths="
    print()
    with tempfile.TemporaryDirectory() as folder:
        for name, text in [
            ("nothing compiled yet", f"{code}64)"),
            ("64 paths", f"{code}64)"),
            ("2^20 paths", f"{code}1 << 20)"),
            ("import numpy, numba", "import numpy, numba"),
        ]:
            begun = time.perf_counter()
            subprocess.run([sys.executable, "-c", text], check=True, env={**os.environ, "NUMBA_CACHE_DIR": folder})
            print(f"{'fresh process, ' + name:>40}  {time.perf_counter() - begun:6.2f} s")


def instructions(lanes: int = 384, repeats: int = 60) -> None:
    """Nanoseconds a lane of every form on rows in the first-level cache, and of the draws."""
    from mcx.machine.draws import fill_draws
    from mcx.machine.forms import Form, kinds
    from mcx.machine.forward import forward

    rng = np.random.default_rng(SEED)
    registers, scalars = np.empty(101 * (lanes + 8)), rng.uniform(0.5, 1.5, 4)
    registers = registers[-registers.ctypes.data // 8 % 8 :][: 100 * (lanes + 8)].reshape(100, -1)  # on cache lines
    registers[:] = rng.uniform(0.5, 1.5, registers.shape)
    words, numbers = np.empty((4, lanes), np.int32), np.arange(lanes, dtype=np.uint64)
    seed, stream = np.uint64(SEED), np.uint64(0)
    jobs: dict[str, Callable[[], None]] = {
        "NORMAL": lambda: fill_draws(registers, words, numbers, 100, 0, seed, stream),
        "UNIFORM": lambda: fill_draws(registers, words, numbers, 0, 100, seed, stream),
    }
    for form in Form:
        operands = [k if kind == "R" else k % 4 for k, kind in enumerate(kinds(form))]
        line = (form, 4, *operands, *(0,) * (4 - len(operands)))
        code = np.array([line] * 100, dtype=np.int32)
        jobs[form.name] = lambda code=code: forward(registers, code, scalars, lanes)
    best = dict.fromkeys(jobs, np.inf)
    for _ in range(repeats):
        for name, job in jobs.items():
            begun = time.perf_counter()
            job()
            best[name] = min(best[name], 1e9 * (time.perf_counter() - begun) / 100 / lanes)
    print("\nns a lane, best of", repeats)
    for number, (name, value) in enumerate(best.items()):
        print(f"{name:>20} {value:6.2f}", end="\n" if number % 4 == 3 else "")


def vectors() -> None:
    """How many vector registers the assembly of the dear loops names; none at all means a scalar loop."""
    import numba

    from mcx.machine import philox, special

    row, words = np.ones(64), np.zeros((4, 64), np.int32)
    print()
    for function, arguments in [
        (philox.fill_words, (words, np.zeros(64, np.uint64), *(np.uint64(k) for k in range(3)))),
        (special.normal_row, (row, words[0], 64)),
        (special.exp_row, (row, row.copy(), 64)),
        (special.log_row, (row, row.copy(), 64)),
    ]:
        fresh = numba.jit(**function.targetoptions)(function.py_func)
        fresh(*arguments)
        assembly = "".join(fresh.inspect_asm().values())
        counts = ", ".join(f"{len(re.findall('%' + name, assembly))} {name}" for name in ("xmm", "ymm", "zmm"))
        print(f"{function.py_func.__name__:>20}: {counts}")


if __name__ == "__main__":
    rivals()
    if "--quick" not in sys.argv:
        start()
        instructions()
        vectors()
