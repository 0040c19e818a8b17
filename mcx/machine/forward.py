"""The kernel: interprets the code on one block of lanes, each instruction one loop that LLVM vectorises.

No instruction writes a row that it reads (`prepare.py` sees to it), else the alias check would send the loop
down its scalar branch. A form that is missing here would leave a row as it was: a test runs every one.
"""

from __future__ import annotations

import numpy as np

from mcx.machine.bits import sum_products, sum_values
from mcx.machine.bridges import bridge_range, corridor, corridor_slope, range_by_start
from mcx.machine.forms import Form
from mcx.machine.jit import jit
from mcx.machine.rows import wide_vectors
from mcx.machine.sizes import GROUP
from mcx.machine.special import exp_negative, exp_row, log_row
from mcx.tape.bridges import BY_ENDS, BY_START, BY_WIDTH, CLOSEST, LEAST_EXPONENT


@jit
def forward(registers, code, scalars, lanes, paths, sums):
    """Run the code on one block: registers (rows, at least lanes) float64, code and scalars as in `KernelCode`.

    sums (groups, sums) float64, written: over each group of 64 lanes, of which the first `paths` count.
    """
    for line in range(code.shape[0]):
        form, to = code[line, 0], code[line, 1]
        a, b, c, d = code[line, 2], code[line, 3], code[line, 4], code[line, 5]
        if form < Form.LT_RR:
            _arithmetic(form, registers[to], registers, scalars, a, b, lanes)
        elif form < Form.STEP_RSR:
            _logic(form, registers[to], registers, scalars, a, b, c, lanes)
        elif form < Form.CLEAR_RRS:
            _model(form, registers[to], registers, scalars, a, b, c, d, lanes)
        elif form < Form.SUM_R:
            _watch(form, registers[to], registers, scalars, a, b, c, d, lanes)
        else:
            _sum(form, sums[:, to], registers, a, b, paths)


@jit
def _arithmetic(form, y, registers, scalars, a, b, lanes):
    wide_vectors()
    if form == Form.FILL_S:
        s = scalars[a]
        for i in range(lanes):
            y[i] = s
    elif form == Form.ADD_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = p[i] + q[i]
    elif form == Form.ADD_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = p[i] + s
    elif form == Form.SUB_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = p[i] - q[i]
    elif form == Form.SUB_SR:
        s, q = scalars[a], registers[b]
        for i in range(lanes):
            y[i] = s - q[i]
    elif form == Form.MUL_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = p[i] * q[i]
    elif form == Form.MUL_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = p[i] * s
    elif form == Form.DIV_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = p[i] / q[i]
    elif form == Form.DIV_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = p[i] / s
    elif form == Form.DIV_SR:
        s, q = scalars[a], registers[b]
        for i in range(lanes):
            y[i] = s / q[i]
    elif form == Form.POW_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = np.power(p[i], q[i])
    elif form == Form.MIN_RR:  # NaN of either operand gets through, as in np.minimum
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = p[i] if p[i] < q[i] or p[i] != p[i] else q[i]
    elif form == Form.MIN_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = p[i] if p[i] < s or p[i] != p[i] else s
    elif form == Form.MAX_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = p[i] if p[i] > q[i] or p[i] != p[i] else q[i]
    elif form == Form.MAX_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = p[i] if p[i] > s or p[i] != p[i] else s
    elif form == Form.ABS_R:
        p = registers[a]
        for i in range(lanes):
            y[i] = abs(p[i])
    elif form == Form.EXP_R:
        exp_row(y, registers[a], lanes)
    elif form == Form.LOG_R:
        log_row(y, registers[a], lanes)
    elif form == Form.SQRT_R:
        p = registers[a]
        for i in range(lanes):
            y[i] = np.sqrt(p[i])


@jit
def _logic(form, y, registers, scalars, a, b, c, lanes):
    wide_vectors()
    if form == Form.LT_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] < q[i] else 0.0
    elif form == Form.LT_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] < s else 0.0
    elif form == Form.LT_SR:
        s, q = scalars[a], registers[b]
        for i in range(lanes):
            y[i] = 1.0 if s < q[i] else 0.0
    elif form == Form.LE_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] <= q[i] else 0.0
    elif form == Form.LE_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] <= s else 0.0
    elif form == Form.LE_SR:
        s, q = scalars[a], registers[b]
        for i in range(lanes):
            y[i] = 1.0 if s <= q[i] else 0.0
    elif form == Form.EQ_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] == q[i] else 0.0
    elif form == Form.EQ_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] == s else 0.0
    elif form == Form.NE_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] != q[i] else 0.0
    elif form == Form.NE_RS:
        p, s = registers[a], scalars[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] != s else 0.0
    elif form == Form.AND_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] != 0.0 and q[i] != 0.0 else 0.0
    elif form == Form.OR_RR:
        p, q = registers[a], registers[b]
        for i in range(lanes):
            y[i] = 1.0 if p[i] != 0.0 or q[i] != 0.0 else 0.0
    elif form == Form.SELECT_RRR:
        p, q, r = registers[a], registers[b], registers[c]
        for i in range(lanes):
            taken, other = q[i], r[i]  # both loaded: a load on one branch only would stop vectorisation
            y[i] = taken if p[i] != 0.0 else other
    elif form == Form.SELECT_RRS:
        p, q, s = registers[a], registers[b], scalars[c]
        for i in range(lanes):
            y[i] = q[i] if p[i] != 0.0 else s
    elif form == Form.SELECT_RSR:
        p, s, r = registers[a], scalars[b], registers[c]
        for i in range(lanes):
            y[i] = s if p[i] != 0.0 else r[i]


@jit
def _model(form, y, registers, scalars, a, b, c, d, lanes):
    wide_vectors()
    if form == Form.STEP_RSR:
        x, s, z = registers[a], scalars[b], registers[c]
        for i in range(lanes):
            y[i] = x[i] + s * z[i]
    elif form == Form.STEP_SSR:
        start, s, z = scalars[a], scalars[b], registers[c]
        for i in range(lanes):
            y[i] = start + s * z[i]
    elif form == Form.STEP_RRR:
        x, s_row, z = registers[a], registers[b], registers[c]
        for i in range(lanes):
            y[i] = x[i] + s_row[i] * z[i]
    elif form == Form.DRIFT_STEP_RSSR:
        x, m, s, z = registers[a], scalars[b], scalars[c], registers[d]
        for i in range(lanes):
            y[i] = x[i] + m + s * z[i]
    elif form == Form.BRIDGE_LOW_RRSR:  # the law of a bridge's extreme, inverted: see tape/rules.py
        x0, x1, variance, log = registers[a], registers[b], scalars[c], registers[d]
        for i in range(lanes):
            move = x1[i] - x0[i]
            y[i] = 0.5 * (x0[i] + x1[i] - np.sqrt(move * move - 2.0 * variance * log[i]))
    elif form == Form.BRIDGE_HIGH_RRSR:
        x0, x1, variance, log = registers[a], registers[b], scalars[c], registers[d]
        for i in range(lanes):
            move = x1[i] - x0[i]
            y[i] = 0.5 * (x0[i] + x1[i] + np.sqrt(move * move - 2.0 * variance * log[i]))


@jit
def _watch(form, y, registers, scalars, a, b, c, d, lanes):
    wide_vectors()
    if form == Form.CLEAR_RRS:  # both sides of each `if` are computed: a branch would stop vectorisation
        p, q, s = registers[a], registers[b], scalars[c]
        for i in range(lanes):
            chance = 1.0 - exp_negative(min(s * p[i] * q[i], 0.0))
            y[i] = chance if min(p[i], q[i]) > 0.0 else 0.0
    elif form == Form.CORRIDOR_RRSS:
        p, q, w, s = registers[a], registers[b], scalars[c], scalars[d]
        counts = 0  # lanes where the bridge crosses nearly all of the corridor: hardly ever any
        for i in range(lanes):
            low = exp_negative(min(p[i] * q[i] * s, 0.0))
            high = exp_negative(min((p[i] - w) * (q[i] - w) * s, 0.0))
            chance = max(1.0 - low - high, 0.0)
            y[i] = chance if (min(p[i], q[i]) > 0.0) & (max(p[i], q[i]) < w) else 0.0
            counts += w * (w - abs(p[i] - q[i])) * s > LEAST_EXPONENT
        if counts > 0:
            for i in range(lanes):
                far = w * (w - abs(p[i] - q[i])) * s
                if far > LEAST_EXPONENT and min(p[i], q[i]) > 0.0 and max(p[i], q[i]) < w:
                    low = exp_negative(min(p[i] * q[i] * s, 0.0))
                    high = exp_negative(min((p[i] - w) * (q[i] - w) * s, 0.0))
                    y[i] = max(1.0 - low - high + exp_negative(far), 0.0)
    elif form == Form.IMAGE_RRSS:
        p, q, s, t = registers[a], registers[b], scalars[c], scalars[d]
        for i in range(lanes):
            y[i] = min((p[i] + s) * (q[i] + s) * t, 0.0)
    elif form == Form.FAR_RRRS:  # hardly ever does it count: only where the bridge crosses nearly all of the corridor
        x, p, q, s, t = registers[a], registers[b], registers[c], scalars[d], scalars[d + 1]
        counts = 0
        for i in range(lanes):
            y[i] = x[i]
            counts += s + t * abs(p[i] - q[i]) > LEAST_EXPONENT
        if counts > 0:
            for i in range(lanes):
                exponent = s + t * abs(p[i] - q[i])
                if exponent > LEAST_EXPONENT:
                    y[i] = x[i] + np.exp(min(exponent, 0.0))
    elif form == Form.INSIDE_RRRS:
        x, p, q, s = registers[a], registers[b], registers[c], scalars[d]
        for i in range(lanes):
            chance = max(x[i], 0.0)
            y[i] = chance if (min(p[i], q[i]) > 0.0) & (max(p[i], q[i]) < s) else 0.0
    elif form == Form.BRIDGE_CLEAR_RRR:
        p, q, v = registers[a], registers[b], registers[c]
        for i in range(lanes):
            y[i] = -np.expm1(-2.0 * p[i] * q[i] / v[i]) if min(p[i], q[i]) > 0.0 else 0.0
    elif form == Form.BRIDGE_CORRIDOR_RRRR:
        p, q, w, v = registers[a], registers[b], registers[c], registers[d]
        for i in range(lanes):
            y[i] = corridor(p[i], q[i], w[i], v[i])
    elif form == Form.BRIDGE_RANGE_RRRR:
        p, q, v, u = registers[a], registers[b], registers[c], registers[d]
        for i in range(lanes):
            y[i] = bridge_range(p[i], q[i], v[i], u[i])
    elif form == Form.RANGE_BY_START_RRRR:
        p, q, v, u = registers[a], registers[b], registers[c], registers[d]
        for i in range(lanes):
            y[i] = range_by_start(p[i], q[i], v[i], u[i])
    elif Form.CORRIDOR_BY_START_RRRR <= form <= Form.CORRIDOR_BY_ENDS_RRRR:
        p, q, w, v = registers[a], registers[b], registers[c], registers[d]
        by = BY_START if form == Form.CORRIDOR_BY_START_RRRR else BY_WIDTH
        by = BY_ENDS if form == Form.CORRIDOR_BY_ENDS_RRRR else by
        for i in range(lanes):
            y[i] = corridor_slope(by, p[i], q[i], w[i], v[i])
    elif form == Form.BRIDGE_MOMENT_RRRR:
        p, q, square, u = registers[a], registers[b], registers[c], registers[d]
        for i in range(lanes):
            d0, d1 = max(abs(p[i]), CLOSEST), max(abs(q[i]), CLOSEST)
            product = d0 * d1
            larger = product + square[i] + np.sqrt(square[i] * (square[i] + 2.0 * product))
            small = u[i] * (product + larger) <= larger
            passed, rest = d0 * d0 if small else larger, larger if small else d1 * d1
            y[i] = passed / (passed + rest)
    elif form == Form.LOOKUP_RSS:
        x, last = registers[a], c - b
        for i in range(lanes):
            y[i] = scalars[b + (int(min(x[i], 1.0 * last)) if x[i] >= 1.0 else 0)]


@jit
def _sum(form, groups, registers, a, b, paths):
    p, q = registers[a], registers[b]
    for group in range(groups.shape[0]):
        first = group * GROUP
        if paths - first < GROUP:
            total = 0.0
            for i in range(first, paths):
                total += p[i] * q[i] if form == Form.SUM_RR else p[i]
            groups[group] = total
        elif form == Form.SUM_RR:
            groups[group] = sum_products(p, q, first)
        else:
            groups[group] = sum_values(p, first)
