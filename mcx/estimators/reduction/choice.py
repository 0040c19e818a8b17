"""`auto`: the methods with the smallest variance times cost in a short pilot.

Costs come from the fixed table of `machine/sizes.py`, never from a clock, so that one seed has one answer. The pilot
has a stream of its own. Scrambled points are judged by what they do on as few points as the pilot has; on more they do
better, so that the choice errs on the side of plain sampling.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from mcx.estimators.plan import FEWEST_UNLIKE, unlike, upper_variance
from mcx.estimators.reduction.catalogue import scheme_of
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case, Scheme
from mcx.faults import Refusal
from mcx.machine.run import Stream
from mcx.machine.sizes import cost

PILOT_PATHS = 1 << 13
CHOICES: tuple[tuple[str, ...], ...] = (
    (),
    ("antithetic",),
    ("controls",),
    ("controls", "antithetic"),
    ("stratified",),
    ("sobol-bridge",),
    ("sobol-components",),
    ("controls", "sobol-bridge"),
    ("controls", "sobol-components"),
    ("importance",),
    ("controls", "importance"),
)
MARGIN = 1.1  # plain sampling is left only for what is clearly better


@dataclass(frozen=True, slots=True)
class Trial:
    """A scheme with what a path of the contract costs by it, and its variance times that; `few`: too few of the pilot's
    means differ to say."""

    scheme: Scheme
    burden: float
    few: bool


def best(case: Case) -> Scheme:
    """The scheme to take, with a note that compares it with plain sampling."""
    fitted: dict[tuple[str, ...], Scheme] = {}
    trials = [trial for names in CHOICES if (trial := tried(case, names, fitted))]
    known = [trial for trial in trials if not trial.few]
    plain = trials[0]
    if not known:
        return plain.scheme.noted("auto: too few paths of the pilot differ to choose by")
    found = min(known, key=lambda trial: trial.burden)
    if not plain.few and found.burden * MARGIN > plain.burden:
        found = plain
    if found is plain:
        return found.scheme.noted("auto: nothing beats plain sampling here")
    if plain.few:
        gain = "plain sampling sees too little of what is paid"
    elif found.burden == 0.0:
        gain = "exact"
    else:
        gain = f"plain sampling has {plain.burden / found.burden:.3g} times the variance times cost"
    return found.scheme.noted(f"auto: {found.scheme.label} by a pilot of {PILOT_PATHS:,} paths; {gain}")


def tried(case: Case, names: tuple[str, ...], fitted: dict[tuple[str, ...], Scheme]) -> Trial | None:
    """What a choice does in the pilot; None where it does not apply."""
    try:
        scheme = scheme_of(case, names, fitted)
    except Refusal:
        return None
    price = cost(replace(scheme.program, outputs=scheme.program.outputs[:1]), scheme.plan) / scheme.each
    if scheme.program.outputs[0] < 0:
        return Trial(scheme, 0.0, few=False)
    found = Sampler(scheme, case.seed, case.threads, case.notice).independent(PILOT_PATHS, Stream.CHOICE)
    few = unlike(found.values) < min(FEWEST_UNLIKE, len(found.values) // 4)
    return Trial(scheme, upper_variance(found.values) * found.size * price, few)
