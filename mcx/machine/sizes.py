"""How large the pieces of a run are, and what a path costs.

Costs come from a fixed table, since nothing that a result depends on may depend on the clock: nanoseconds for
one lane, measured on one core with 256-bit vectors (benchmarks/kernel.py). Only ratios matter.
"""

from __future__ import annotations

import numpy as np

from mcx.machine.draw_plan import PLAIN, DrawPlan
from mcx.machine.forms import Form
from mcx.machine.prepare import KernelCode, prepare
from mcx.tape.ops import Op
from mcx.tape.program import Program, Tape

GROUP = 64  # paths that are summed together, whatever the block
BATCHES = 64  # parts of a run: group g of 64 paths belongs to part g mod 64, so that the parts grow together

_NORMAL, _UNIFORM, _OUTPUT = 2.7, 0.9, 0.8
_NET, _TURN, _BEND = -0.35, 0.3, 0.3  # a net's word beside a random one; a turn of a path order; a normal bent by it
_USUAL = 0.17
_DEAR = {
    Form.DIV_RR: 0.42,
    Form.DIV_RS: 0.42,
    Form.DIV_SR: 0.42,
    Form.SQRT_R: 0.75,
    Form.EXP_R: 1.1,
    Form.LOG_R: 1.6,
    Form.POW_RR: 15.0,
    Form.BRIDGE_LOW_RRSR: 0.8,
    Form.BRIDGE_HIGH_RRSR: 0.8,
    Form.CLEAR_RRS: 1.0,
    Form.CORRIDOR_RRSS: 2.0,
    Form.BRIDGE_CLEAR_RRR: 6.0,
    Form.BRIDGE_CORRIDOR_RRRR: 90.0,
    Form.BRIDGE_RANGE_RRRR: 900.0,
    Form.CORRIDOR_BY_START_RRRR: 60.0,
    Form.CORRIDOR_BY_WIDTH_RRRR: 60.0,
    Form.CORRIDOR_BY_ENDS_RRRR: 60.0,
    Form.RANGE_BY_START_RRRR: 90.0,
    Form.BRIDGE_MOMENT_RRRR: 1.5,
    Form.FAR_RRRS: 0.4,
    Form.LOOKUP_RSS: 1.0,
}
_BY_OP = {Op.DIV: 0.42, Op.SQRT: 0.75, Op.EXP: 1.1, Op.LOG: 1.6, Op.POW: 1.6, Op.BRIDGE_LOW: 3.3, Op.BRIDGE_HIGH: 3.3}
_BY_FORM = np.array([_DEAR.get(form, _USUAL) for form in Form])


_BATCH = 1 << 19  # paths between two reports of progress,
_BATCH_TIME = 2.5e8  # unless they take longer than this on one core: an interruption must be prompt
_CACHE = 3 << 16  # bytes of a register file: with room to spare in a second-level cache of 512 KB


def nanoseconds(code: KernelCode) -> float:
    """The cost of one path on one core."""
    arithmetic = float(_BY_FORM[code.code[:, 0] - min(Form)].sum())
    return _NORMAL * code.normals + _UNIFORM * code.uniforms + arithmetic + _OUTPUT * len(code.outputs)


def cost(program: Program, plan: DrawPlan = PLAIN) -> float:
    """The cost of one path of a program, to compare programs and plans with."""
    return nanoseconds(prepare(program)) + plan_cost(program, plan)


def plan_cost(program: Program, plan: DrawPlan) -> float:
    """What a path costs more by a plan of draws."""
    drawn = _NET * program.draws if plan.scrambles else 0.0
    if plan.order is not None:
        drawn += _TURN * len(plan.order.pairs) + _BEND * (program.normals if plan.order.left.size else 0)
    return drawn


def op_costs(tape: Tape) -> np.ndarray:
    """Roughly what each instruction of a tape costs, (instructions,): which of its values share work is then seen."""
    return np.array([_BY_OP.get(step.op, _USUAL) if step.operands else 0.0 for step in tape.instructions])


def batch_for(code: KernelCode, lanes: int) -> int:
    """Paths in a batch: a whole number of blocks."""
    paths = min(_BATCH, _BATCH_TIME / max(nanoseconds(code), 1.0))
    return max(int(paths) // lanes, 1) * lanes


def lanes_for(rows: int) -> int:
    """How many paths a block has: its register file stays in the second-level cache; a multiple of 64. Below 128
    the instructions themselves cost more than what a smaller file saves, however many rows there are."""
    return min(max(_CACHE // (8 * rows) // GROUP * GROUP, 2 * GROUP), 1024)
