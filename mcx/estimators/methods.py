"""Which estimators of sensitivities are valid for a contract, and why the others are not: the tape decides."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from mcx.checked.contract import Contract
from mcx.checked.conversions import simulated_rates
from mcx.checked.market import Market
from mcx.estimators.batches import Sampling
from mcx.estimators.derivative_tape import DerivativeTape, derivative_tape, without_first_levels
from mcx.estimators.differentiate import Differentiator
from mcx.estimators.proxy import with_proxy
from mcx.estimators.ready import Ready
from mcx.estimators.reduction.antithetic import paired
from mcx.faults import Refusal
from mcx.leaves.market_map import MarketMap
from mcx.machine.run import values_by_path
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Instruction, Leaf, LeafKind, Tape
from mcx.tape.registers import lower, uniform_values
from mcx.tape.smooth import Jump, jumps, payments, split

PATHWISE, LIKELIHOOD, MIXED = "pathwise", "likelihood ratio", "mixed"
GAMMAS = {PATHWISE: "likelihood ratio of the pathwise delta", LIKELIHOOD: "second-order likelihood ratio",
          MIXED: "mixed: likelihood ratio of the pathwise delta, second-order where payments jump"}
ESCROWS = (LeafKind.ESCROW, LeafKind.MEAN_ESCROW)
ESCROWED_BY = ("rate", "yield", "forward", "dividend", "dividend share", "decrement points")  # what the escrow hangs on
COMPARED = (Op.LT, Op.LE, Op.EQ, Op.NE)
SINGULAR = 1e-14  # an own variance below this share of the whole
NOTHING_DRAWN = "nothing is simulated: all that it pays is known"
MOST_DRAWS = 64  # where every payment is smooth; the variance of a likelihood ratio grows with the steps


@dataclass(frozen=True, slots=True)
class Method:
    """A valid estimator. `refusals`: kinds of numbers, and 'gamma', for which it is not, with the reason."""

    name: str
    made: DerivativeTape
    contract: Contract
    refusals: dict[str, str]

    def on(self, market: Market) -> Differentiator:
        return Differentiator.on(self.made, market, self.contract)

    @property
    def gamma(self) -> str:
        return GAMMAS[self.name]


@dataclass(frozen=True, slots=True)
class Methods:
    """The valid estimators, the pathwise one first, and what makes payments jump."""

    valid: tuple[Method, ...]
    jumps: tuple[Jump, ...]
    reason: str  # why there is none

    def for_kind(self, kind: str) -> tuple[Method, ...]:
        return tuple(method for method in self.valid if kind not in method.refusals)

    def why_not(self, kind: str) -> str:
        """Why no estimator gives this kind of number."""
        return next((method.refusals[kind] for method in self.valid if kind in method.refusals), self.reason)


def methods(ready: Ready, market: Market, asked: str, pilot: Sampling | None = None) -> Methods:
    """The valid estimators among those asked for ('auto' for all); with a pilot, likelihood ratios have a smooth
    stand-in as a control, and tapes are of pairs where its paths are. Raises Refusal where what was asked for is not
    valid, with the condition that forbids it."""
    contract, unrolled = ready.dated.contract, ready.unrolled
    price = unrolled.tape.outputs[0]
    tape = without_first_levels(drop_dead_code(replace(unrolled.tape, outputs=(price,), sums=())))
    values = MarketMap(market, contract).values(tape.leaves)
    tape, paid, found = _shared_out(tape, values)
    known = uniform_values(tape, values)
    jumping = [payment for payment in paid if found[payment]]
    smooth = [payment for payment in paid if not found[payment]]
    places = tuple({(jump.kind, jump.place): jump for payment in jumping for jump in found[payment]}.values())
    leaf_values = dict(zip(tape.leaves, values, strict=True))
    simulated = (*contract.assets, *simulated_rates(contract.conversion, contract.currency, market))
    still = without_own_randomness(leaf_values, simulated) if tape.normals + tape.uniforms else NOTHING_DRAWN
    still = still or joint_extremes(tape)
    blended = any(market.assets[name].blend for name in contract.assets)

    def by_path(with_basis: Tape) -> np.ndarray:
        return values_by_path(lower(with_basis, values), seed=pilot.seed, paths=pilot.paths, stream=pilot.stream,
                              threads=pilot.threads)

    def method(name: str, pathwise: list[int], likelihood: list[int]) -> Method:
        own, proxy = tape, None
        if likelihood and pilot and not still:
            logs = {leaf.asset: value for leaf, value in leaf_values.items() if leaf.kind is LeafKind.LOG_SPOT}
            own, proxy = with_proxy(tape, likelihood, logs, by_path)
        compared = dividends_compared(tape, known, blended) if likelihood else ""
        levels = bool(compared) and not in_extremes(tape, blended)
        made = derivative_tape(own, unrolled.grid, len(contract.assets), uniform_values(own, values), pathwise=pathwise,
                               likelihood=likelihood, second=not still, proxy=proxy, levels=levels)
        if pilot and pilot.each == 2:
            made = replace(made, tape=paired(made.tape))
        refusals = {}
        if likelihood and (reason := read_today(tape, known)):
            refusals |= {"spot": reason, "fx spot": reason}
        if compared and not levels:
            refusals |= {kind: compared for kind in (*ESCROWED_BY, *(("spot",) if blended else ()))}
        if reason := still or second_order_trouble(tape, made, blended):
            refusals["gamma"] = reason
        return Method(name, made, contract, refusals)

    reason = f"the payoff jumps, and {still}" if still else ""
    if asked == "pathwise" and jumping:
        raise Refusal(f"'{contract.title}': no pathwise estimate, since the payoff jumps at {_listed(places)}; such an "
                      f"estimate would miss that and show a small error")
    if asked in ("likelihood", "mixed") and still and (jumping or asked == "likelihood"):
        raise Refusal(f"'{contract.title}': no likelihood ratio, since {still}")
    valid = []
    if asked != "likelihood" and not jumping:
        valid.append(method(PATHWISE, smooth, []))
    drawn = [payment for payment in smooth if known[payment] is None]
    if asked in ("auto", "mixed") and jumping and drawn and not still:
        valid.append(method(MIXED, smooth, jumping))
    few = tape.normals + tape.uniforms <= MOST_DRAWS
    wanted = {"pathwise": False, "likelihood": True, "mixed": not valid, "auto": bool(jumping) or few}[asked]
    if wanted and not still:
        valid.append(method(LIKELIHOOD, [], list(paid)))
    return Methods(tuple(valid), places, reason)


def _shared_out(tape: Tape, values: np.ndarray) -> tuple[Tape, tuple[int, ...], dict[int, tuple[Jump, ...]]]:
    """The payments of a price and what makes each jump. Payments that are weighed by one chance stand as one; they are
    split where that leaves something smooth."""
    paid = payments(tape, tape.outputs[0].value)
    found = dict(zip(paid, jumps(tape, values, paid), strict=True))
    builder = Builder.of(tape)
    parts = {payment: split(builder, payment) for payment in found if found[payment]}
    every = [part for payment in parts for part in parts[payment] if len(parts[payment]) > 1]
    longer = Tape(tuple(builder.instructions), tape.outputs, tape.normals, tape.uniforms)
    of_parts = dict(zip(every, jumps(longer, values, every), strict=True))
    worth = {payment for payment in parts if any(not of_parts.get(part, True) for part in parts[payment])}
    if not worth:
        return tape, paid, found
    shared = [part for payment in paid for part in (parts[payment] if payment in worth else (payment,))]
    return longer, tuple(shared), found | of_parts


def without_own_randomness(values: dict[Leaf, float], names: Sequence[str]) -> str:
    """Why the paths have no density: an asset or a rate of exchange (by `names`) that does not move by itself, or as
    good as not; '' where all do."""
    variances: dict[tuple[int, float], float] = {}
    for leaf, value in values.items():
        if leaf.kind is LeafKind.FACTOR:
            variances[leaf.asset, leaf.end] = variances.get((leaf.asset, leaf.end), 0.0) + value**2
    for leaf, value in values.items():
        if leaf.kind is LeafKind.FACTOR and leaf.asset == leaf.other:
            if value**2 <= SINGULAR * variances[leaf.asset, leaf.end]:
                return (f"{names[leaf.asset]} has no randomness of its own between {leaf.start:.6g}y and "
                        f"{leaf.end:.6g}y: no vol there, or a singular correlation matrix")
    return ""


def joint_extremes(tape: Tape) -> str:
    """Why there is no score: an asset's lowest and highest level are drawn together; '' where none are."""
    place = next((step.place for step in tape.instructions if step.op is Op.BRIDGE_RANGE), None)
    if any(step.op is Op.BRIDGE_RANGE for step in tape.instructions):
        return (f"the lowest and the highest level of one asset are drawn together{f' at {place}' if place else ''}, "
                f"and the score of their joint law is not taken; a revaluation gives a value (bump, as in --bump 1%)")
    return ""


def read_today(tape: Tape, known: Sequence[float | None]) -> str:
    """Why a likelihood ratio by a spot would miss something: today's level is compared with one that is drawn, and
    moves while that is held; '' where it is not."""
    today: set[int] = set()
    for number, step in enumerate(tape.instructions):
        if _is_today(step) or any(k in today for k in step.operands):
            today.add(number)
        if step.op in COMPARED and any(k in today for k in step.operands) and known[number] is None:
            return f"today's level is compared with a later one at {step.place}, so a move of the spot moves both"
    return ""


def dividends_compared(tape: Tape, known: Sequence[float | None], blended: bool = False) -> str:
    """Why a likelihood ratio by a rate that holds the logs of levels would miss something: cash dividends still to come
    are part of a level that is compared, and their value moves meanwhile; so do the shares that a blend makes of them,
    which an extreme that is watched up to the ex date looks at. '' where they are not."""
    moved: set[int] = set()
    for number, step in enumerate(tape.instructions):
        kinds = (*ESCROWS, LeafKind.JUMP) if blended else ESCROWS
        escrow = step.op is Op.LEAF and step.payload.kind in kinds and known[number] != 0.0
        if escrow or any(k in moved for k in step.operands):
            moved.add(number)
        if step.op in COMPARED and any(k in moved for k in step.operands) and known[number] is None:
            return (f"cash dividends still to come are part of a level that is compared at {step.place}, and a move of "
                    f"rates moves their value")
    return ""


def in_extremes(tape: Tape, blended: bool) -> bool:
    """Whether dividends are part of an extreme that is watched continuously, whose law given levels then moves too."""
    kinds = (LeafKind.MEAN_ESCROW, LeafKind.JUMP) if blended else (LeafKind.MEAN_ESCROW,)
    return any(leaf.kind in kinds for leaf in tape.leaves)


def second_order_trouble(tape: Tape, made: DerivativeTape, blended: bool = False) -> str:
    """Why there is no gamma; '' where there is one. `blended`: shares of the level that are made of cash dividends."""
    if made.timed:
        return "an amount is paid at the moment of a hit, of whose law the second-order score is not taken"
    if blended:
        return ("dividends are blended from cash into shares of the level, which move with the spot; a second "
                "derivative through both is not taken")
    if any(map(_is_today, tape.instructions)):
        return "the payoff reads today's level itself beside later ones; a second derivative through both is not taken"
    if made.rough:
        return ("a payment that jumps reads a continuously watched extreme itself: its second-order score has no "
                "finite variance")
    return ""


def _is_today(step: Instruction) -> bool:
    return step.op is Op.LEAF and step.payload.kind is LeafKind.FORWARD


def _listed(found: Sequence[Jump]) -> str:
    """Where a payoff jumps, at most three places."""
    shown = [f"{jump.place or 'an unnamed place'} ({jump.kind})" for jump in found[:3]]
    return ", ".join(shown) + (f" and {len(found) - 3} more" if len(found) > 3 else "")
