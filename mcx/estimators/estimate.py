"""An estimate: a mean with its standard error, and what can be asked of it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

NORMAL_95 = 1.959963984540054  # the 97.5 % point of the standard normal
ROUNDING = 1e-12  # relative


@dataclass(frozen=True, slots=True)
class Estimate:
    """The mean over `paths` paths and the standard error of that mean.

    `quantile` times the error is half the width of the 95 % interval: that of the normal law for many independent
    paths, that of Student's t where the error is that of a few independent means.
    """

    value: float
    standard_error: float
    paths: int
    quantile: float = NORMAL_95

    @property
    def half_width(self) -> float:
        """Half the width of the 95 % interval."""
        return self.quantile * self.standard_error

    @property
    def interval95(self) -> tuple[float, float]:
        """The 95 % confidence interval."""
        return self.value - self.half_width, self.value + self.half_width

    def z(self, truth: float) -> float:
        """The distance from a known value in standard errors: 0 where it is rounding, infinite for an exact estimate
        that misses."""
        distance = self.value - truth
        if abs(distance) <= ROUNDING * abs(truth):
            return 0.0
        return distance / self.standard_error if self.standard_error > 0.0 else math.copysign(math.inf, distance)

    def times(self, factor: float) -> Estimate:
        """The estimate of a fixed multiple."""
        return replace(self, value=self.value * factor, standard_error=self.standard_error * abs(factor))


def estimates(paths: int, means: Sequence[float], squares: Sequence[float], batch: int = 1) -> tuple[Estimate, ...]:
    """Estimates from means and centred sums of squares, both of shape (outputs,), over at least two batches; `batch`:
    how many paths are one independent draw, the squares then those of the batches' means, each counted `batch` times.
    """
    scale = paths * (paths // batch - 1)
    return tuple(
        Estimate(float(mean), math.sqrt(max(float(square), 0.0) / scale), paths)
        for mean, square in zip(means, squares, strict=True)
    )
