"""A dated contract becomes a tape that is ready for the machine, or the faults that forbid it.

`walk.py` puts on the tape what the contract means; here it is held against what is known of the past and against the
laws of the market's assets, and the levels that it reads become draws. Every later stage takes a contract's meaning
from here.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from mcx.dates.dated_contract import DatedContract, Day
from mcx.faults import Fault
from mcx.tape.builder import Builder
from mcx.tape.formulas import fixed_values
from mcx.tape.hits import Span
from mcx.tape.ledger import Payment
from mcx.tape.observations import Observations
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Bound, Instruction, LevelKey, Output, Tape
from mcx.tape.running import Watched
from mcx.tape.state import State
from mcx.tape.steps import PLAIN, SAME_TIME, Grid, Makeup, expand_levels
from mcx.tape.walk import Walk
from mcx.tape.watching import conflicts
from mcx.tape.weights import Weighted, weigh

UNKNOWN_SUM = ("an asset with cash dividends that is converted at the rate of the day cannot be watched continuously: "
               "its law between two dates is not known; name the dates on which it is watched")
UNKNOWN_MOMENT = ("the moment of a hit is not known where cash dividends are still to come or a dividend on an ex date "
                  "may bring the hit about; name the dates on which the level is watched")


BESIDE_BOUNDS = ("the moment of this hit is not known at a time at which levels of several assets are watched together, "
                 "which is done in finer and finer steps; watch one of them on dates")


@dataclass(frozen=True, slots=True)
class WatchNote:
    """How a continuously watched running value enters: by which extremes of which assets, and by which law.

    `sides` are (asset, 'low' or 'high'), empty where nothing reads it; `law` is 'exact', 'nearly exact' (cash dividends
    to come enter at their mean over a step), 'bracketed' or 'unread'; `drawn` whether extremes are drawn instead of
    entering by their chances.
    """

    name: str
    sides: tuple[tuple[str, str], ...]
    law: str
    drawn: bool = False


@dataclass(frozen=True, slots=True)
class Unrolled:
    """A contract as a tape. With faults the tapes are empty.

    tape      reads normals and uniforms only: ready for `lower`
    bracketed whether outputs are the middle between two bounds, as far apart as their 'gap' outputs say
    joined    the assets that are watched together as one, since they move as one
    observed  the same contract still reading LEVEL, LOW and HIGH: its meaning on given levels
    grid      the simulated times and assets
    levels    for each 'level' output, by its name, the asset's number and the time: its mean is the forward
    state     what fixings have settled already
    """

    tape: Tape
    observed: Tape
    grid: Grid
    levels: dict[str, tuple[int, float]]
    watches: tuple[WatchNote, ...]
    state: State
    faults: tuple[Fault, ...] = ()
    bracketed: bool = False
    joined: frozenset[int] = frozenset()


def unroll(
    dated: DatedContract, *, nodes: Sequence[float], makeup: Makeup = PLAIN, given: bool = False, pieces: int = 1,
    everything_drawn: bool = False,
) -> Unrolled:
    """The tape of a contract; `nodes` are the times of the market's curve points (`MarketMap.nodes`), `makeup` how
    levels come about (`MarketMap.makeup`). A missing fixing is a fault unless levels will be `given`.

    `pieces` refines the steps in which several assets are watched together; `everything_drawn` makes flags of
    continuous watches draws on each path where they could be probabilities.
    """
    walk = Walk(dated, nodes=nodes)
    walk.run()
    observed = drop_dead_code(walk.builder.tape(walk.ledger.outputs()))
    missing = walk.observations.missing(observed, given)
    wrong = walk.faults or unknown_laws(observed, makeup)
    faults = [*wrong, *walk.observations.unstated.values(), *missing]
    if faults:
        return _refused(faults)
    weighted = weigh(observed, fixed_values(observed, dated.contract), everything_drawn, makeup.leaders)
    if faults := [*conflicts(weighted.tape), *_moments_in_finer_steps(weighted.tape)]:
        return _refused(faults)
    notes = _notes(walk, weighted, makeup)
    if given:
        return Unrolled(Tape((), ()), observed, Grid((0.0,), ()), {}, notes, walk.state)
    observed, levels = _with_last_levels(observed, dated.contract.assets)
    weighted = weigh(observed, fixed_values(observed, dated.contract), everything_drawn, makeup.leaders)
    tape, grid = expand_levels(weighted.tape, nodes, makeup, pieces)
    return Unrolled(tape, observed, grid, levels, notes, walk.state, (), bool(weighted.bracketed),
                    frozenset(one.key.asset for one in weighted.joined))


def _notes(walk: Walk, weighted: Weighted, makeup: Makeup) -> tuple[WatchNote, ...]:
    names, found = walk.dated.contract.assets, []
    for name, state in walk.observed.items():
        if isinstance(state, Watched):
            sides = dict.fromkeys((names[one.key.asset], one.op.name.lower()) for one in state.barriers)
            nearly = any(one.key.asset in makeup.cash for one in state.barriers)
            law = "bracketed" if weighted.bracketed & set(state.barriers) else "nearly exact" if nearly else "exact"
            law = law if sides else "unread"
            found.append(WatchNote(name, tuple(sides), law, bool(weighted.drawn & set(state.barriers))))
    return tuple(found)


def _moments_in_finer_steps(tape: Tape) -> Iterator[Fault]:
    """Moments of hits in stretches that may be cut, where they are drawn as a part of one step."""
    cut = {(one.key.start, one.key.time) for step in tape.instructions
           if step.op is Op.UNHIT and step.payload.bound is not Bound.EXACT for one in step.payload.barriers}
    for step in tape.instructions:
        if step.op is Op.MOMENT and any(start < step.payload.time and step.payload.start < end for start, end in cut):
            yield Fault(step.place, BESIDE_BOUNDS)


def _refused(faults: Iterable[Fault]) -> Unrolled:
    return Unrolled(Tape((), ()), Tape((), ()), Grid((0.0,), ()), {}, (), State(), tuple(sorted(set(faults))))


def last_read(dated: DatedContract) -> float:
    """The last time at which the contract reads a level, in years; 0 if it reads none later."""
    walk = Walk(dated)
    walk.run()
    observed = drop_dead_code(walk.builder.tape(walk.ledger.outputs()))
    return max((step.payload.time for step in observed.instructions if isinstance(step.payload, LevelKey)), default=0.0)


def unknown_laws(tape: Tape, makeup: Makeup) -> list[Fault]:
    """Continuous watches of an asset with cash dividends that is converted at the rate of the day, and moments of hits
    that a dividend may bring about."""
    faults = []
    for step in tape.instructions:
        if step.op in (Op.LOW, Op.HIGH) and step.payload.asset in set(makeup.cash) & set(makeup.rates):
            faults.append(Fault(step.place, UNKNOWN_SUM))
        if step.op is Op.MOMENT:
            asset, start, end = step.payload.asset, step.payload.start, step.payload.time
            falls = any(asset == other and start < when < end + SAME_TIME for other, when in makeup.ex)
            if falls or asset in makeup.cash:
                faults.append(Fault(step.place, UNKNOWN_MOMENT))
    return faults


@dataclass(frozen=True, slots=True)
class Walked:
    """A contract on a tape that may hold others beside it, as values of that tape.

    outputs   all named results but the levels, price first
    payments  every amount that may be owed, in the order in which it is decided
    ends      for each day on which the contract may end early, whether it does; at most one of them is true
    observations  what it observes, and which fixings are missing
    """

    outputs: tuple[Output, ...]
    payments: tuple[Payment, ...]
    ends: dict[Day | Span, int]
    observations: Observations
    faults: tuple[Fault, ...]


def walked(dated: DatedContract, builder: Builder, nodes: Sequence[float]) -> Walked:
    """A contract put on a tape under construction, still reading levels. Contracts that share a builder share what
    they have in common; continuous watches are not checked against each other."""
    walk = Walk(dated, builder, nodes)
    walk.run()
    ledger = walk.ledger
    return Walked(tuple(ledger.outputs()), tuple(ledger.payments), dict(ledger.ends), walk.observations,
                  tuple(walk.faults))


def _with_last_levels(tape: Tape, assets: Sequence[str]) -> tuple[Tape, dict[str, tuple[int, float]]]:
    """The tape with each simulated asset's level at its last observed time as an output, for the martingale test."""
    last: dict[int, float] = {}
    known: dict[LevelKey, int] = {}
    for number, step in enumerate(tape.instructions):
        if isinstance(step.payload, LevelKey):
            last[step.payload.asset] = max(last.get(step.payload.asset, 0.0), step.payload.time)
            if step.op is Op.LEVEL:
                known[step.payload] = number
    instructions, outputs = list(tape.instructions), list(tape.outputs)
    levels: dict[str, tuple[int, float]] = {}
    for asset, time in sorted(last.items()):
        key = LevelKey(asset, time)
        if time > 0.0 and key not in known:
            known[key] = len(instructions)
            instructions.append(Instruction(Op.LEVEL, (), key))
        if time > 0.0:
            output = Output.of("level", known[key], assets[asset])
            outputs.append(output)
            levels[output.name] = (asset, time)
    return Tape(tuple(instructions), tuple(outputs)), levels
