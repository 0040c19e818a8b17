"""Runs a scheme: as many paths as asked for, or the next number it can have, and the estimates with their errors."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

from mcx.estimators.estimate import Estimate, estimates
from mcx.estimators.nets import FEWEST_POINTS, net_estimates, net_for, on_net
from mcx.estimators.plan import FEWEST_PATHS, Independent
from mcx.estimators.reduction.scheme import Scheme
from mcx.machine.run import Notice, Stream, run, values_by_path
from mcx.tape.program import Program

SHARES = (4, 2)  # the price is also noted at a quarter and at half of the paths

Progress = Callable[[int, float, float], None]  # paths done, mean and standard error so far


@dataclass(frozen=True, slots=True)
class Sampled:
    """results, one for each output; stages, the first output at a quarter, half and all of the paths."""

    results: tuple[Estimate, ...]
    stages: tuple[Estimate, ...]
    interrupted: bool


@dataclass(frozen=True, slots=True)
class Sampler:
    """A scheme, and how it is run."""

    scheme: Scheme
    seed: int
    threads: int | None = None
    notice: Notice | None = None

    def paths(self, wanted: int) -> int:
        """The paths of the contract that are run where so many are wanted: whole pairs, strata and points. Raises
        RequestError where there are too few or too many."""
        scheme = self.scheme
        number = -(-wanted // scheme.each)
        if scheme.plan.scrambles:
            return scheme.each * net_for(number, scheme.plan.scrambles).paths
        return scheme.each * scheme.batch * max(-(-number // scheme.batch), FEWEST_PATHS)

    @property
    def fewest(self) -> int:
        """The fewest paths of the contract that can be asked for: points cannot be made more in silence."""
        return self.scheme.each * self.scheme.plan.scrambles * FEWEST_POINTS if self.scheme.plan.scrambles else 1

    def within_time(self, wanted: int) -> int:
        """The same where a time is to be kept: the next smaller number of points."""
        if not self.scheme.plan.scrambles:
            return self.paths(wanted)
        found = self.paths(max(wanted, self.fewest))
        return found // 2 if found > max(wanted, self.fewest) else found

    def sample(self, wanted: int, *, stream: int = Stream.MAIN, first_output_only: bool = False,
               progress: Progress | None = None) -> Sampled:
        """The estimates from `paths(wanted)` paths. Raises NonFinitePath, and KeyboardInterrupt where that comes
        before there is an estimate."""
        scheme = self.scheme
        program = replace(scheme.program, outputs=scheme.program.outputs[:1]) if first_output_only else scheme.program
        number = self.paths(wanted) // scheme.each
        counted = progress and (lambda done, mean, error: progress(done * scheme.each, mean, error))
        how = {"seed": self.seed, "stream": stream, "threads": self.threads, "notice": self.notice,
               "progress": counted}
        if scheme.plan.scrambles:
            found = self._net(program, number, how)
        else:
            found = self._blocks(program, number, how)
        return Sampled(*(tuple(replace(each, paths=each.paths * scheme.each) for each in part)
                         for part in (found.results, found.stages)), found.interrupted)

    def pilot(self, wanted: int, *, stream: int = Stream.PILOT, first_output_only: bool = False) -> Sampled:
        """As `sample`, where a part of the paths is of no use: raises KeyboardInterrupt wherever that comes."""
        found = self.sample(wanted, stream=stream, first_output_only=first_output_only)
        if found.interrupted:
            raise KeyboardInterrupt
        return found

    def _net(self, program: Program, number: int, how: dict) -> Sampled:
        plan = self.scheme.plan
        sums = on_net(program, net_for(number, plan.scrambles), plan, **how)
        whole = len(sums.means)
        shares = sorted({plan.scrambles // share for share in SHARES if 2 <= plan.scrambles // share < whole})
        results = net_estimates(sums)
        return Sampled(results, (*(net_estimates(sums, share)[0] for share in shares), results[0]), sums.interrupted)

    def _blocks(self, program: Program, number: int, how: dict) -> Sampled:
        batch = self.scheme.batch
        sums = run(program, paths=number, plan=self.scheme.plan, snapshots=[number // share for share in SHARES], **how)
        if sums.paths < FEWEST_PATHS * batch:
            raise KeyboardInterrupt
        reached = {part.paths: part for part in (*sums.snapshots, sums)
                   if FEWEST_PATHS * batch <= part.paths <= sums.paths}
        stages = tuple(estimates(paths, part.mean[:1], part.m2[:1], batch)[0]
                       for paths, part in sorted(reached.items()))
        return Sampled(estimates(sums.paths, sums.mean, sums.m2, batch), stages, sums.interrupted)

    def independent(self, wanted: int, stream: int = Stream.PILOT) -> Independent:
        """The first output as independent means of equally many paths: what a spread can be read off."""
        scheme = self.scheme
        number = self.paths(wanted) // scheme.each
        program = replace(scheme.program, outputs=scheme.program.outputs[:1])
        how = {"seed": self.seed, "stream": stream, "threads": self.threads}
        if scheme.plan.scrambles:
            sums = on_net(program, net_for(number, scheme.plan.scrambles), scheme.plan, **how)
            if sums.interrupted:
                raise KeyboardInterrupt
            (estimate,) = net_estimates(sums)
            means = sums.means[:, 0]
            spread = means.std(ddof=1)  # as the error is reported, where means are nearly all equal
            wider = estimate.standard_error * math.sqrt(len(means)) / spread if spread > 0.0 else 1.0
            return Independent(means.mean() + wider * (means - means.mean()), scheme.each * sums.points,
                               estimate.quantile)
        values = values_by_path(program, paths=number, plan=scheme.plan, **how)[0]
        return Independent(values.reshape(-1, scheme.batch).mean(axis=1), scheme.each * scheme.batch)
