"""One barrier, watched continuously, where rate, yield and vol change in time: exact by quadrature.

Between two changes the log of the asset is a Brownian motion with constant drift and variance per unit of time, so the
density of the paths that have not touched is the normal one less its image (Merton 1973), and one piece follows the
other by an integral over the level at the change. A `Piece` is all that matters of such a stretch.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import exp, inf, log, sqrt

import numpy as np
from closed_forms import slice_of_payoff, untouched_slice
from scipy.integrate import quad


@dataclass(frozen=True)
class Piece:
    """A stretch with constant coefficients: `growth` is the integral of rate less yield, `variance` that of vol**2."""

    growth: float
    variance: float
    watched: bool = True

    @property
    def market(self) -> dict[str, float]:
        """The same stretch as one year without discounting, for the closed forms."""
        return {"maturity": 1.0, "rate": 0.0, "dividend_yield": -self.growth, "vol": sqrt(self.variance)}


def pieces_between(rates: Sequence[float], yields: Sequence[float], vols: Sequence[float],
                   lengths: Sequence[float]) -> list[Piece]:
    """Pieces from forward rates, forward yields and forward vols that hold for the given lengths of time."""
    return [Piece((r - q) * t, v * v * t) for r, q, v, t in zip(rates, yields, vols, lengths, strict=True)]


def unsplit(pieces: Sequence[Piece]) -> list[Piece]:
    """The same stretch as if the drift were constant in the variance clock: the mistake that splitting avoids."""
    return [Piece(sum(p.growth for p in pieces), sum(p.variance for p in pieces))]


def untouched(direction: str, barrier: float, spot: float, pieces: Sequence[Piece], share: float = 0.0,
              cash: float = 1.0, lower: float = 0.0, upper: float = inf, nodes: int = 600) -> float:
    """E of `share * S + cash` at the end, if lower < S < upper there and the barrier was never touched; undiscounted.

    Without the last four arguments it is the probability of no touch.
    """
    *before, last = pieces
    edge, sign = log(barrier), 1.0 if direction == "down" else -1.0
    reach = 9 * sqrt(sum(piece.variance for piece in pieces)) + abs(sum(piece.growth for piece in pieces))
    points, weights = np.polynomial.legendre.leggauss(nodes)
    length = max(sign * (log(spot) - edge), 0.0) + reach
    gaps, weights = length * (points + 1) / 2, length * weights / 2  # distance to the barrier, always positive
    mass, from_gaps = np.ones(1), np.array([sign * (log(spot) - edge)])
    for piece in before:
        mean = from_gaps + sign * (piece.growth - piece.variance / 2)
        spread = gaps[:, None] - mean[None, :]
        kernel = np.exp(-(spread**2) / (2 * piece.variance)) / sqrt(2 * np.pi * piece.variance)
        if piece.watched:
            images = -np.expm1(-2 * gaps[:, None] * np.maximum(from_gaps[None, :], 0.0) / piece.variance)
            kernel = kernel * images
        mass, from_gaps = weights * (kernel @ mass), gaps
    levels = np.exp(edge + sign * from_gaps)
    if last.watched:
        values = untouched_slice(direction, barrier, share, cash, lower, upper, levels, **last.market)
    else:
        values = slice_of_payoff(share, cash, lower, upper, levels, **last.market)
    return float(np.dot(mass, values))


def extreme_beyond(kind: str, strike: float, spot: float, pieces: Sequence[Piece]) -> float:
    """E max(highest - strike, 0) (call) or E max(strike - lowest, 0) (put), watched over all pieces; undiscounted."""
    if kind == "call":
        start = max(strike, spot)
        reach = start * exp(9 * sqrt(sum(p.variance for p in pieces)))
        tail = quad(lambda h: 1 - untouched("up", h, spot, pieces, nodes=200), start, reach, epsrel=1e-7, limit=200)
        return max(spot - strike, 0.0) + tail[0]
    start = min(strike, spot)
    reach = start * exp(-9 * sqrt(sum(p.variance for p in pieces)))
    tail = quad(lambda h: 1 - untouched("down", h, spot, pieces, nodes=200), reach, start, epsrel=1e-7, limit=200)
    return max(strike - spot, 0.0) + tail[0]
