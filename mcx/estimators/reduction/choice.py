"""`auto`: the methods with the smallest variance times cost in a pilot that is short for the run it serves.

Costs come from the fixed table of `machine/sizes.py`, never from a clock, so that one seed has one answer; so do the
prices of trials. All trials together may cost a small share of what plain sampling would cost, and none more than the
best so far still leaves to do: a run of a few seconds tries what is cheap to try, a run of hours everything. The pilot
has a stream of its own. Scrambled points are judged by what they do on as few points as the pilot has; on more they do
better, so that the choice errs on the side of plain sampling.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

from mcx.estimators.estimate import NORMAL_95
from mcx.estimators.plan import DEFAULT_PATHS, FEWEST_UNLIKE, Precision, unlike, upper_variance
from mcx.estimators.reduction.catalogue import BY_NAME, scheme_of
from mcx.estimators.reduction.sample import Sampler
from mcx.estimators.reduction.scheme import Case, Scheme, Stage
from mcx.faults import Refusal
from mcx.machine.prepare import prepare
from mcx.machine.run import Stream
from mcx.machine.sizes import nanoseconds, plan_cost

CHOICES: tuple[tuple[str, ...], ...] = (  # first what needs no other tape, then what most often pays
    (),
    ("sobol-bridge",),
    ("sobol-components",),
    ("controls",),
    ("controls", "sobol-bridge"),
    ("controls", "sobol-components"),
    ("antithetic",),
    ("controls", "antithetic"),
    ("stratified",),
    ("importance",),
    ("controls", "importance"),
)
EXACT = 1e-20  # of plain sampling's variance times cost: what is left is rounding, which must decide nothing
MARGIN = 1.1  # plain sampling is left only for what is clearly better
MOST_PATHS, FEWEST_PATHS = 1 << 13, 1 << 11  # of a trial
SECOND = 2e9  # of plain sampling on one core, by the table, which was made on narrower vectors
SHARE = 0.03  # of the cost of plain sampling, or of a second of it, that all trials may cost: about 6 % of its time
# Prices of trials beside their paths, in the table's nanoseconds: the whole, for each instruction, for each normal.
TRIAL = (0.3e6, 4e3, 0.0)
PRICES = {
    "sobol-bridge": (0.9e6, 0.0, 50e3),
    "sobol-components": (0.9e6, 0.0, 60e3),
    "stratified": (0.1e6, 0.0, 10e3),
    "antithetic": (0.7e6, 25e3, 0.0),
    "controls": (2.5e6, 80e3, 0.0),
    "importance": (3e6, 100e3, 0.0),
}


@dataclass(frozen=True, slots=True)
class Trial:
    """A scheme with its variance times what a path of the contract costs by it; `few`: too few of the pilot's means
    differ to say."""

    scheme: Scheme
    burden: float
    few: bool


@dataclass(slots=True)
class Pilot:
    """Trials of one contract, each on so many `paths`, with what they have in common: fitted schemes and the costs of
    their programs."""

    case: Case
    paths: int
    fitted: dict[tuple[str, ...], Scheme] = field(default_factory=dict)
    costs: dict[tuple[str, ...], float] = field(default_factory=dict)

    def price(self, names: tuple[str, ...], plain: float) -> float:
        """What a trial will cost, given the `plain` cost of a path: what is fitted already is free."""
        kept = _fitting(names) in self.fitted
        parts = [TRIAL, *(PRICES[name] for name in names if not (kept and name in _fitting(names)))]
        whole, instruction, normal = (sum(column) for column in zip(*parts, strict=True))
        unrolled = self.case.ready.unrolled
        return self.paths * plain + whole + instruction * len(unrolled.tape.instructions) + normal * unrolled.tape.normals

    def tried(self, names: tuple[str, ...], most: float) -> Trial | None:
        """What a choice does in the pilot, its coefficients for at most so much; None where it does not apply."""
        try:
            scheme = scheme_of(replace(self.case, most=most), names, self.fitted)
        except Refusal:
            return None
        if scheme.program.outputs[0] < 0:
            return Trial(scheme, 0.0, few=False)
        case, price = self.case, self._cost(scheme) / scheme.each
        found = Sampler(scheme, case.seed, case.threads, case.notice).independent(self.paths, Stream.CHOICE)
        few = unlike(found.values) < min(FEWEST_UNLIKE, len(found.values) // 4)
        return Trial(scheme, upper_variance(found.values) * found.size * price, few)

    def _cost(self, scheme: Scheme) -> float:
        """Of a path of the price alone."""
        key = _fitting(scheme.names)
        if key not in self.costs:
            self.costs[key] = nanoseconds(prepare(replace(scheme.program, outputs=scheme.program.outputs[:1])))
        return self.costs[key] + plan_cost(scheme.program, scheme.plan)


def best(case: Case, asked: Precision | None = None) -> Scheme:
    """The scheme to take for what is asked, with a note that compares it with plain sampling."""
    asked = asked or Precision()
    each = nanoseconds(prepare(replace(case.ready.program, outputs=case.ready.program.outputs[:1])))
    purse = SHARE * max(SECOND, _worth(asked, each))
    paths = MOST_PATHS
    while paths > FEWEST_PATHS and len(CHOICES) * paths * each > purse:
        paths //= 2
    pilot = Pilot(case, paths, costs={(): each})
    spent = pilot.price((), each)
    if asked.within is None and spent + min(pilot.price(names, each) for names in CHOICES[1:]) > purse:
        return scheme_of(case, ()).noted("auto: plain sampling, since a pilot would cost too much for this run")
    plain = pilot.tried((), purse)
    worth = _worth(asked, each, plain)
    purse = SHARE * max(SECOND, worth)
    trials, untried = [plain], []
    for names in CHOICES[1:]:
        price = pilot.price(names, each)
        rest = worth * _found(trials).burden / plain.burden if plain.burden > 0.0 else 0.0
        if spent + price > purse or price > max(rest, SHARE * SECOND):
            untried.append(",".join(names))
            continue
        spent += price
        if trial := pilot.tried(names, purse - spent + price):
            trials.append(trial)
    return _noted(trials, paths, untried)


def _worth(asked: Precision, each: float, plain: Trial | None = None) -> float:
    """What plain sampling costs to give what is asked, where a path costs `each`; 0 where only a trial can tell."""
    if asked.seconds is not None:
        return asked.seconds * SECOND
    if asked.within is None:
        return (asked.paths or DEFAULT_PATHS) * each
    return 0.0 if plain is None else (NORMAL_95 / asked.within) ** 2 * plain.burden


def _fitting(names: tuple[str, ...]) -> tuple[str, ...]:
    """Those that need a tape of their own."""
    return tuple(name for name in names if BY_NAME[name].stage is not Stage.DRAWS)


def _found(trials: list[Trial]) -> Trial:
    """The best of the trials: plain sampling, the first, unless another is clearly better."""
    plain = trials[0]
    known = [trial for trial in trials if not trial.few]
    found = min(known, key=lambda trial: max(trial.burden, EXACT * plain.burden), default=plain)  # the first of equals
    return plain if not plain.few and found.burden * MARGIN > plain.burden else found


def _noted(trials: list[Trial], paths: int, untried: list[str]) -> Scheme:
    """The best of the trials, with a note on it."""
    plain, found = trials[0], _found(trials)
    if all(trial.few for trial in trials):
        note = "auto: too few paths of the pilot differ to choose by"
    elif found is plain:
        note = "auto: nothing beats plain sampling here"
    else:
        if plain.few:
            gain = "plain sampling sees too little of what is paid"
        elif found.burden <= EXACT * plain.burden:
            gain = "exact"
        else:
            gain = f"plain sampling has {plain.burden / found.burden:.3g} times the variance times cost"
        note = f"auto: {found.scheme.label} by a pilot of {paths:,} paths; {gain}"
    if untried:
        note += f"; not tried, since a pilot would cost too much for this run: {' and '.join(untried)}"
    return found.scheme.noted(note)
