"""How the paths of sensitivities are drawn: the methods of variance reduction that say nothing but that.

Pairs, strata and scrambled points leave every path's law as it is, so they serve the price and all its derivatives
alike. The scores of a likelihood ratio are made of the normals of the steps, which stand where they always do when an
order has mixed what was drawn. What counts paths in one dimension alone, as the pathwise delta of an option on one
level does, has a weakness on points: where nearly a whole number of them lies below the strike, the scrambles nearly
agree, and 32 of them may show too small an error. Methods that are fitted to the price serve nothing else, and are
refused.
"""

from __future__ import annotations

from dataclasses import dataclass

from mcx.estimators.batches import FEWEST_PATHS, Sampling
from mcx.estimators.ready import Ready
from mcx.estimators.reduction.catalogue import scheme_of
from mcx.estimators.reduction.names import AUTO, NAMES
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case
from mcx.faults import RequestError
from mcx.machine.run import Notice, Stream

_FITTED = "its coefficients are fitted to the price; estimators of sensitivities bring controls of their own"
NOT_OF_SENSITIVITIES = {
    AUTO: "it measures the variance of the price, not that of each sensitivity",
    "controls": _FITTED,
    "hedge": _FITTED,
    "importance": "its drift is found for the price, and would take paths away from where its sensitivities arise",
}
SUPPORTED = tuple(name for name in NAMES if name not in NOT_OF_SENSITIVITIES)


def check_draws(names: tuple[str, ...]) -> None:
    """Raises RequestError for methods that do not serve sensitivities."""
    for name in names:
        if name in NOT_OF_SENSITIVITIES:
            raise RequestError(f"no variance reduction '{name}' of sensitivities, since {NOT_OF_SENSITIVITIES[name]}; "
                               f"known here: {', '.join(SUPPORTED)}")


@dataclass(frozen=True, slots=True)
class Drawn:
    """How paths are drawn by these methods."""

    names: tuple[str, ...]
    seed: int
    threads: int | None = None
    notice: Notice | None = None

    def sampler(self, ready: Ready) -> Sampler:
        """The price alone, drawn so. Raises RequestError and Refusal as `scheme_of` does."""
        return Sampler(scheme_of(Case(ready, self.seed, self.threads), self.names), self.seed, self.threads)

    def sampling(self, ready: Ready, paths: int, stream: int = Stream.MAIN) -> Sampling:
        """So many paths of a contract, or the next number that there can be, as many as parts need."""
        sampler = self.sampler(ready)
        return Sampling(self.seed, sampler.paths(max(paths, FEWEST_PATHS)), stream, self.threads, notice=self.notice,
                        plan=sampler.scheme.plan, each=sampler.scheme.each)
