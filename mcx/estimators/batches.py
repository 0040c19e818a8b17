"""Batch means: sums over independent parts of a run, and the estimates of anything linear in them.

Paths are spread over 64 parts by their numbers, so that two runs with one seed hold the same paths in the same parts:
what is a difference of runs, or a sum of many sums, has its error from how the parts differ (L. Schmeiser, "Batch size
effects in the analysis of simulation output", 1982). That needs no covariances and stays right after any chain rule.
Of scrambled points each scramble is a part: within one nothing is independent. Pairs and strata never reach over the
end of a group of 64, so that the parts stay independent.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from mcx.estimators.estimate import Estimate, estimates
from mcx.estimators.nets import Net, least_deviation, net_estimates, on_net
from mcx.faults import RequestError
from mcx.machine.draw_plan import PLAIN, DrawPlan
from mcx.machine.run import Notice, Stream, run
from mcx.machine.sizes import BATCHES, GROUP
from mcx.tape.program import Program

FEWEST_PATHS = BATCHES * GROUP  # so that every part has a whole group, or half of them a group of pairs


@dataclass(frozen=True, slots=True)
class Batches:
    """paths (parts,) of each part; means (parts, quantities) over the paths of each part.

    shares  of scrambles and strata (quantities,): about how far one path moves the mean of a part; None elsewhere.
            Paths may be so even that most parts agree, which says little about the error then (`nets.least_deviation`).
    """

    paths: np.ndarray
    means: np.ndarray
    shares: np.ndarray | None = None

    def through(self, matrix: np.ndarray) -> Batches:
        """Linear combinations of the quantities: matrix (quantities, results)."""
        return Batches(self.paths, self.means @ matrix, None if self.shares is None else self.shares @ np.abs(matrix))

    def less(self, other: Batches) -> Batches:
        """The differences from the same quantities on the same paths."""
        return replace(self, means=self.means - other.means)

    def last(self) -> Batches:
        """The last quantity alone."""
        return Batches(self.paths, self.means[:, -1:], None if self.shares is None else self.shares[-1:])

    def others(self, means: np.ndarray) -> Batches:
        """Other quantities of the same run (parts, others): their paths scatter, beside their means, as those of the
        first quantity here do."""
        if self.shares is None:
            return Batches(self.paths, means)
        mean = abs(float(self.means[:, 0].mean()))
        return Batches(self.paths, means, np.abs(means.mean(axis=0)) * (self.shares[0] / mean if mean > 0.0 else 0.0))

    def estimates(self) -> tuple[Estimate, ...]:
        """The mean of each quantity over all paths, with its error and Student's t for the number of parts."""
        from scipy.special import stdtrit

        total, parts = int(self.paths.sum()), len(self.paths)
        share = self.paths / total
        mean = share @ self.means
        error = np.sqrt(((share[:, None] * (self.means - mean)) ** 2).sum(axis=0) * parts / (parts - 1))
        if self.shares is not None:
            least = [least_deviation(*each) for each in zip(self.means.T, self.shares, strict=True)]
            error = np.maximum(error, np.array(least) / np.sqrt(parts))
        quantile = float(stdtrit(parts - 1, 0.975))
        return tuple(Estimate(float(m), float(e), total, quantile) for m, e in zip(mean, error, strict=True))

    def estimate(self, weights: np.ndarray) -> Estimate:
        """One linear combination of the quantities."""
        return self.through(np.reshape(weights, (-1, 1))).estimates()[0]


def joined(found: Sequence[Batches]) -> Batches:
    """The quantities of several, all on the same paths, in their order."""
    shares = None if found[0].shares is None else np.concatenate([each.shares for each in found])
    return Batches(found[0].paths, np.concatenate([each.means for each in found], axis=1), shares)


@dataclass(frozen=True, slots=True)
class Sampling:
    """Which paths, the same for every program that is compared with another, and how they are drawn.

    each  how many paths of the contract one path of a program is: 2 for programs of pairs; `paths` counts those of the
          contract, whole pairs, strata and points
    """

    seed: int
    paths: int
    stream: int = Stream.MAIN
    threads: int | None = None
    progress: Callable[[int, float, float], None] | None = None
    notice: Notice | None = None
    plan: DrawPlan = PLAIN
    each: int = 1

    def sums(self, program: Program) -> tuple[Batches, Estimate]:
        """The means of all sums that a program takes, the last of them its price, and its first output, the price, with
        the error of single paths, pairs, strata or scrambles.

        After an interruption those of the paths so far, fewer than asked for. Raises NonFinitePath and NonFiniteSum of
        `machine.run`, and KeyboardInterrupt where the interruption came before every part had paths.
        """
        how = {"seed": self.seed, "stream": self.stream, "threads": self.threads, "notice": self.notice,
               "progress": self.progress and self._counted}
        batches, price = (self._scrambles if self.plan.scrambles else self._groups)(program, how)
        return replace(batches, paths=self.each * batches.paths), replace(price, paths=self.each * price.paths)

    def _groups(self, program: Program, how: dict) -> tuple[Batches, Estimate]:
        number = self.paths // self.each
        found = run(program, paths=number, plan=self.plan, **how)
        parts = slice(min(BATCHES, -(-number // GROUP)))
        paths, sums = found.batch_paths[parts], found.sums[parts]
        if found.interrupted and not paths.all():
            raise KeyboardInterrupt
        price = estimates(found.paths, found.mean[:1], found.m2[:1], self.plan.strata or 1)[0]
        means = sums / paths[:, None]
        spread = np.full(1, abs(price.value) / paths.mean()) if self.plan.strata else None
        return Batches(paths, means[:, -1:], spread).others(means), price

    def _scrambles(self, program: Program, how: dict) -> tuple[Batches, Estimate]:
        scrambles = self.plan.scrambles
        found = on_net(program, Net(self.paths // self.each // scrambles, scrambles), self.plan, **how)
        price = net_estimates(found)[0]
        means = found.sums / found.points
        spread = np.sqrt(found.squares[:, 0].mean() / found.points) / found.points
        base = Batches(np.full(len(means), found.points), means[:, -1:], np.array([spread]))
        return base.others(means), price

    def _counted(self, done: int, mean: float, error: float) -> None:
        self.progress(self.each * done, mean, error)


def check_paths(paths: int | None) -> None:
    """Raises RequestError for too few paths to have batches of."""
    if paths is not None and paths < FEWEST_PATHS:
        raise RequestError(f"'greeks' and 'verify' need at least {FEWEST_PATHS:,} paths, since their errors come from "
                           f"{BATCHES} parts of the run; asked for were {paths:,}")
