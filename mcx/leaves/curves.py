"""Curves of rates, spreads, yields and forwards, as logs that are linear between their points.

A zero rate r to time t is the log -r t of a discount factor, if it is continuously compounded; funding spreads and
yields are read by the same rule, and forwards are the log of the forward over the spot. Every curve starts at (0, 0),
is linear in the log between points, and keeps its last slope beyond them: a flat forward rate. Values may be complex:
sensitivities are taken by a complex step (`jacobian.py`).
"""

from __future__ import annotations

import datetime
from dataclasses import dataclass

import numpy as np

from mcx.checked.market import Curve, RateConvention
from mcx.dates.day_counts import year_fraction


@dataclass(frozen=True, slots=True)
class LogCurve:
    """`logs[k]` at `times[k]` (years, rising, from 0); `last_slope` per year beyond the last point."""

    times: tuple[float, ...]
    logs: tuple[float, ...]
    last_slope: float

    def log(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The log at times in years; linear between the points."""
        slope_part = self.last_slope * np.maximum(time - self.times[-1], 0.0)
        if len(self.times) == 1:
            return self.logs[-1] + slope_part
        times, logs, held = np.array(self.times), np.array(self.logs), np.minimum(time, self.times[-1])
        after = np.maximum(np.searchsorted(times, held), 1)
        weight = (held - times[after - 1]) / (times[after] - times[after - 1])
        return (1.0 - weight) * logs[after - 1] + weight * logs[after] + slope_part

    def factor(self, time: float) -> np.number:
        return np.exp(self.log(time))


NOTHING = LogCurve((0.0,), (0.0,), 0.0)


def log_curve(curve: Curve | None, spot: float = 1.0) -> LogCurve:
    """The log of what a curve of the market says: discount factors for 'zero' and 'discount', and forwards over
    `spot` for 'forward'. None is nothing at all: the log 0 at every time."""
    if curve is None:
        return NOTHING
    if curve.flat and curve.form == "zero":
        return LogCurve((0.0,), (0.0,), _zero_log(curve.convention, 1.0, curve.nodes[0].quoted.value))
    times, logs = [0.0], [0.0]
    for node in curve.nodes:
        if node.time > 0.0:
            times.append(node.time)
            logs.append(_log(curve, node.time, node.quoted.value, spot))
    slope = (logs[-1] - logs[-2]) / (times[-1] - times[-2]) if len(times) > 1 else 0.0
    return LogCurve(tuple(times), tuple(logs), slope)


def _zero_log(convention: RateConvention, time: float, rate: float) -> float:
    """The log of the discount factor to a time (Actual/365 Fixed) that a zero rate means by its convention."""
    years = time
    if convention.day_count == "Actual/360":
        years = time * 365 / 360
    elif convention.day_count != "Actual/365 (Fixed)":
        day = convention.since + datetime.timedelta(days=round(365 * time))
        years = year_fraction(convention.day_count, convention.since, day)
    match convention.compounding:
        case "annual":
            return -years * np.log1p(rate)
        case "simple":
            return -np.log1p(rate * years)
    return -rate * years


def _log(curve: Curve, time: float, value: float, spot: float) -> float:
    match curve.form:
        case "zero":
            return _zero_log(curve.convention, time, value)
        case "discount":
            return np.log(value)
        case "forward":
            return np.log(value / spot)
    raise ValueError(f"no curve of discount factors: {curve.form}")
