"""Vols: Black vols by tenor, total variance linear between them.

Total variance w(t) = vol(t)^2 t starts at 0, is linear between the points and beyond the last keeps its vol; so the
instantaneous vol is constant on each piece, and the integral of the product of two of them is an exact finite sum.
Vols may be complex: sensitivities are taken by a complex step (`jacobian.py`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from mcx.checked.market import Curve


@dataclass(frozen=True, slots=True)
class VolCurve:
    """`vols[k]` is the instantaneous vol from `times[k]` to the next; the first time is 0, the last piece open."""

    times: tuple[float, ...]
    vols: tuple[float, ...]

    def total_variance(self, time: float) -> float:
        """The integral of vol^2 from 0 to a time in years."""
        return covariance_integral(self, self, 0.0, time)

    def vol_to(self, time: float) -> float:
        """The Black vol to a time in years; at 0 the instantaneous one."""
        return math.sqrt(self.total_variance(time) / time) if time > 0.0 else self.vols[0]

    def at(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The instantaneous vol just after a time."""
        return np.array(self.vols)[np.searchsorted(self.times, time, side="right") - 1]


def vol_curve(curve: Curve) -> VolCurve:
    """The instantaneous vols of a curve of Black vols. Total variance must not fall (the checker sees to it)."""
    if curve.flat:
        return VolCurve((0.0,), (curve.nodes[0].quoted.value,))
    times, vols, variance = [0.0], [], 0.0
    for node in curve.nodes:
        total = node.quoted.value**2 * node.time
        rise = total - variance
        vols.append(np.sqrt(rise / (node.time - times[-1])) if rise.real > 0.0 else 0.0)
        times.append(node.time)
        variance = total
    return VolCurve(tuple(times), (*vols, curve.nodes[-1].quoted.value))


def covariance_integral(
    a: VolCurve, b: VolCurve, start: float | np.ndarray, end: float | np.ndarray
) -> np.number | np.ndarray:
    """The integral of a's vol times b's vol from `start` to `end`, in years: exact, piece by piece."""
    begins = np.union1d(a.times, b.times)
    ends = np.append(begins[1:], np.inf)
    lengths = np.minimum(np.expand_dims(end, -1), ends) - np.maximum(np.expand_dims(start, -1), begins)
    return np.maximum(lengths, 0.0) @ (a.at(begins) * b.at(begins))
