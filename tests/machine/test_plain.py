"""The kernels as plain Python give what the compiled ones give."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from made_programs import SEED, asian, program

from mcx.machine.draw_plan import DrawPlan
from mcx.machine.jit import COMPILED
from mcx.machine.orders import components
from mcx.machine.run import Stream, levels, run
from mcx.tape.ops import Op
from mcx.tape.program import Program

NUMBERS = [0, 5, 2**40 + 1]
SCRIPT = """
import json, warnings
from made_programs import SEED
from test_plain import NET, NUMBERS, PROGRAMS, POINTS
from mcx.machine.run import Stream, levels, run
warnings.simplefilter("ignore", RuntimeWarning)
found = [levels(made, seed=SEED, stream=Stream.PILOT, numbers=NUMBERS).tolist() for made in PROGRAMS.values()]
sums = run(PROGRAMS["asian"], seed=SEED, paths=70)
points = levels(PROGRAMS["asian"], seed=SEED, plan=NET, numbers=POINTS)
print(json.dumps([found, sums.mean.tolist(), sums.m2.tolist(), points.tolist()]))
"""


def bridges() -> Program:
    """Both extremes of a bridge between two normals, logarithms, roots and powers."""
    lines = [
        (Op.BRIDGE_LOW, 4, 0, 1, -1, 2),
        (Op.BRIDGE_HIGH, 5, 0, 1, -1, 3),
        (Op.LOG, 6, 2),
        (Op.POW, 6, 3, 6),
        (Op.SELECT, 7, -2, 4, 5),
        (Op.SQRT, 7, 7),
    ]
    return program(lines, rows=8, outputs=range(8), scalars=[0.3, 1.0], normals=2, uniforms=2)


NET = DrawPlan(3, components(np.full((6, 1, 1), 0.1)))
POINTS = [*range(64), 7, 2**33 + 5, 2**32 + 1000]  # a whole group in order, and strangers
PROGRAMS = {"asian": asian(6), "bridges": bridges()}


@pytest.mark.skipif(not COMPILED, reason="this is the plain run")
def test_plain_python_agrees_with_the_compiler():
    """Without the compiler every value of a few paths, and the sums of a run, are the same to rounding."""
    here = Path(__file__).resolve().parent
    path = os.pathsep.join([str(here), str(here.parent.parent), os.environ.get("PYTHONPATH", "")])
    done = subprocess.run([sys.executable, "-c", SCRIPT], capture_output=True, text=True, check=True,
                          env={**os.environ, "NUMBA_DISABLE_JIT": "1", "PYTHONPATH": path})  # fmt: skip
    values, mean, m2, points = json.loads(done.stdout)
    for made, plain in zip(PROGRAMS.values(), values, strict=True):
        compiled = levels(made, seed=SEED, stream=Stream.PILOT, numbers=NUMBERS)
        np.testing.assert_allclose(np.array(plain, dtype=float), compiled, rtol=1e-12, atol=1e-12)
    sums = run(PROGRAMS["asian"], seed=SEED, paths=70)
    np.testing.assert_allclose((mean, m2), (sums.mean, sums.m2), rtol=1e-12)
    np.testing.assert_allclose(points, levels(PROGRAMS["asian"], seed=SEED, plan=NET, numbers=POINTS), rtol=1e-12)
