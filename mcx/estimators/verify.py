"""Can a dealer's quote be right? The gap on one footing, what holds it, what would have to be true, other readings of
the contract, and where the money is.

Everything but the readings is a revaluation of one tape on the same paths. What is compared is our price at the spots
the quote was made at; the footing shows what that moves.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

from mcx.checked.dealer_quote import DealerQuote
from mcx.checked.market import Market
from mcx.estimators.bands import Corner, Effect, corner, direction, effects, joint_shifts, root_of_squares
from mcx.estimators.batches import Batches, Sampling
from mcx.estimators.estimate import Estimate
from mcx.estimators.footing import Footing, footing, reference_shifts
from mcx.estimators.levers import Lever, alone, levers
from mcx.estimators.margin import Margin, day_one_margin
from mcx.estimators.model_bracket import ModelBracket, model_bracket
from mcx.estimators.plan import Precision
from mcx.estimators.price import Valuation, value
from mcx.estimators.ready import Ready
from mcx.estimators.readings import ReadingsValuation, ReadingValue, value_readings
from mcx.estimators.revalue import Revaluer, impossible
from mcx.estimators.roots import SCANNED, Solution, Solutions, solutions
from mcx.estimators.term import Solved, numeric_term, solve_term
from mcx.leaves.jacobian import Input, moved
from mcx.machine.run import Notice, Stream
from mcx.tape.floor import Certain, Extreme, PaymentRange, certain

NOT_MOVED = ("spot",)  # kinds of input that are stated with the quote, not implied by it
DIRECTIONS = 3  # times that the direction of the smallest joint move is found anew where the last one led
FURTHEST = 3.0  # a joint move is looked for this many times as far as to first order
CLEAR = 4.0  # a reading closes the gap where what is left is within this many errors, or within the dealer's own width
SAMPLING, BID_OFFER, INPUTS, TOLERANCE = "sampling error", "half the bid-offer", "input band", "tolerance"
MODEL = "model bracket"


@dataclass(frozen=True, slots=True)
class Band:
    """A half-width, in the unit of the price, and whether it holds the gap, or what is left of it where each strike at
    its own vol is the price; None where it was not stated. Of the model bracket, which does not lie evenly about the
    price: how far it reaches towards the quote."""

    name: str
    half_width: float | None
    holds: bool | None


@dataclass(frozen=True, slots=True)
class Implied:
    """At which moves of one lever the model meets the quote."""

    lever: Lever
    solutions: Solutions

    def plausible(self, solution: Solution) -> bool | None:
        """Whether a solution lies inside the stated half-width; None where that is not stated."""
        return None if self.lever.width is None else abs(solution.move) <= self.lever.width


@dataclass(frozen=True, slots=True)
class Joint:
    """The smallest joint move that meets the quote: each lever by a share of its half-width, `size` their root of
    squares. `fresh` is the distance from the quote on numbers that were not used to find it."""

    shares: tuple[tuple[Lever, float], ...]
    size: float
    fresh: Estimate
    z: float


@dataclass(frozen=True, slots=True)
class Money:
    """Where the value lies, in the unit of the price: the certain minimum of all payments on the issuer's curve and,
    where there is one, the certain maximum; every payment; what the funding spread takes off (None without one)."""

    floor: Extreme
    most: Extreme
    payments: tuple[PaymentRange, ...]
    funding: Estimate | None
    margin: Margin | None


@dataclass(frozen=True, slots=True)
class Verification:
    """Everything about one quote. `compared` is our price at the quote's spots, `model` the bracket about it where the
    market states vols by strike; `gap` the quote less `compared`; `rest` what each strike at its own vol leaves of it,
    where that is the price and so the gap of one vol says nothing; None elsewhere."""

    quote: DealerQuote
    footing: Footing
    valuation: Valuation
    compared: Estimate
    gap: Estimate
    bands: tuple[Band, ...]
    effects: tuple[Effect, ...]
    unstated: tuple[Lever, ...]
    corner: Corner | None
    implied: tuple[Implied, ...]
    joint: Joint | None
    readings: ReadingsValuation
    closing: tuple[str, ...]
    money: Money
    solved: Solved | None
    seconds: float
    model: ModelBracket | None = None
    rest: float | None = None

    def left(self, reading: ReadingValue) -> Estimate:
        """The quote less the price in a reading."""
        return replace(reading.price, value=self.footing.at_reference - reading.price.value)


class Bench:
    """One contract on a market, priced once and then again and again on the same paths."""

    def __init__(self, ready: Ready, market: Market, asked: Precision, *, seed: int, threads: int | None = None,
                 progress: Callable[[int, int, float], None] | None = None, notice: Notice | None = None):
        self.market, self.contract = market, ready.dated.contract
        self.valuation = value(ready, asked, seed=seed, threads=threads, progress=progress, notice=notice)
        if self.valuation.interrupted:
            raise KeyboardInterrupt
        self.ready = self.valuation.ready  # where the price lies between bounds, with steps that bring them together
        self.sampling = Sampling(seed, self.valuation.price.paths, Stream.MAIN, threads, notice=notice)
        self.revaluer = Revaluer.of(self.ready.unrolled.tape, self.contract)
        self._seen: dict[tuple[tuple[Input, float], ...], Compared] = {}

    def at(self, shifts: Mapping[Input, float]) -> Compared:
        """What is the same for all quotes made at the same spots."""
        key = tuple(shifts.items())
        if key not in self._seen:
            self._seen[key] = Compared(self, moved(self.market, shifts))
        return self._seen[key]

    @cached_property
    def certain(self) -> Certain:
        return certain(self.ready.dated, self.ready.market.nodes())

    @cached_property
    def funding(self) -> Estimate | None:
        """What the issuer's spread takes off the price."""
        if self.contract.currency not in self.market.funding:
            return None
        free = self.revaluer.by_parts(replace(self.market, funding={}), self.sampling)
        own = self.revaluer.by_parts(self.market, self.sampling)
        parts = self.revaluer.price(self.market, self.sampling)[0]
        return Batches(parts.paths, own - free).estimates()[0]

    def verify(self, quote: DealerQuote, solve: str = "", target: float | None = None) -> Verification:
        """Everything about one quote; `solve` names a numeric term, `target` a price for it other than the quote's."""
        begun = time.perf_counter()
        if solve:
            numeric_term(self.contract, solve)
        here = self.at({})
        there = self.at(reference_shifts(quote, self.market, self.contract))
        moved_by = Batches(here.parts.paths, here.parts.means - there.parts.means).estimates()[0]
        foot = footing(quote, self.contract, moved_by)
        meets = foot.at_reference
        gap = replace(there.price, value=meets - there.price.value)
        band = root_of_squares(there.effects) if there.effects else None
        settled = None if there.model is None else there.model.settled
        rest = None if settled is None else beyond(gap.value, *settled)
        open_gap = gap if rest is None else replace(gap, value=rest)
        bands = tuple(_band(name, width, open_gap.value) for name, width in (
            (SAMPLING, gap.half_width), (BID_OFFER, foot.half_width), (INPUTS, band), (TOLERANCE, quote.tolerance)))
        if there.model is not None:
            held = None if settled is None else any(band.holds for band in bands)
            bands = (*bands, model_band(there.model, gap.value, held))
        far = None
        if there.effects:
            far = corner(self.revaluer, there.market, there.effects, open_gap.value, self.sampling)
        threshold = max(foot.half_width or 0.0, quote.tolerance or 0.0)
        closing = self.closing(there, open_gap, meets, threshold)
        solved = None
        if solve:
            wanted = foot.mid if target is None else target
            solved = solve_term(self.ready, self.market, solve, wanted, self.sampling)
        return Verification(
            quote, foot, self.valuation, there.price, gap, bands, there.effects, there.unstated, far,
            tuple(there.implied(lever, meets) for lever in there.levers if lever.kind not in NOT_MOVED),
            there.joint(meets), there.readings, closing, self._money(quote), solved, time.perf_counter() - begun,
            there.model, rest)

    def closing(self, there: Compared, gap: Estimate, meets: float, threshold: float) -> tuple[str, ...]:
        """The readings in which an open gap (or what is left of it) would not be there; up to `threshold` nobody calls
        it one."""
        return tuple(each.name for each in there.readings.readings
                     if each.differs and _closes(gap, replace(each.price, value=meets - each.price.value), threshold))

    def _money(self, quote: DealerQuote) -> Money:
        discount = self.ready.market.funded_discount
        life = next(estimate for _, estimate in self.valuation.of("life"))
        margin = None
        if quote.issue_price is not None and life.value > 0.0:
            margin = day_one_margin(quote.issue_price, self.valuation.price, life, self.contract.size)
        found = self.certain
        return Money(found.least(discount), found.most(discount), found.payments(), self.funding, margin)


class Compared:
    """The contract at the spots of a quote."""

    def __init__(self, bench: Bench, market: Market):
        self.bench, self.market = bench, market
        self.parts, self.price = bench.revaluer.price(market, bench.sampling)
        self.levers = levers(market, bench.contract)

    @cached_property
    def effects(self) -> tuple[Effect, ...]:
        return effects(self.bench.revaluer, self.market, tuple(alone(self.levers)), self.bench.sampling, self.parts)

    @cached_property
    def model(self) -> ModelBracket | None:
        """How far vols by strike leave the price open; a strike in percent goes along with a spot."""
        if self.market == self.bench.market:
            return self.bench.valuation.model
        return model_bracket(self.bench.ready, self.market, self.bench.sampling)

    @cached_property
    def unstated(self) -> tuple[Lever, ...]:
        """The inputs of which no half-width is stated; spots are taken as they are unless one is."""
        return tuple(lever for lever in alone(self.levers) if lever.width is None and lever.kind not in NOT_MOVED)

    @cached_property
    def readings(self) -> ReadingsValuation:
        sampling, ready = self.bench.sampling, self.bench.ready
        found = value_readings(ready.dated, self.market, paths=sampling.paths, seed=sampling.seed,
                               pieces=ready.pieces, apart=ready.apart, threads=sampling.threads,
                               notice=sampling.notice)
        if found.interrupted:
            raise KeyboardInterrupt
        return found

    def distance(self, shifts: Mapping[Input, float], meets: float, sampling: Sampling) -> Estimate:
        """The price with some numbers moved, less what it should be."""
        price = self.bench.revaluer.price(moved(self.market, shifts), sampling)[1]
        return replace(price, value=price.value - meets)

    def possible(self, shifts: Mapping[Input, float]) -> bool:
        return not impossible(self.market, self.bench.contract, shifts)

    def implied(self, lever: Lever, meets: float) -> Implied:
        """Where the model meets a price by one lever alone."""
        return Implied(lever, solutions(
            lambda move, sampling: self.distance(lever.shifts(move), meets, sampling), lever.low, lever.high,
            self.bench.sampling, lambda move: self.possible(lever.shifts(move))))

    def joint(self, meets: float) -> Joint | None:
        """The smallest joint move in half-widths. Its direction is that of the slopes where it ends (R. Rackwitz &
        B. Fiessler, "Structural reliability under combined random load sequences", 1978), found on the first paths; its
        length is found on all."""
        kept = [effect.lever for effect in self.effects if effect.change.value and not effect.note]
        first = replace(self.bench.sampling, paths=min(self.bench.sampling.paths, SCANNED))
        shares = [0.0] * len(kept)
        for _ in range(DIRECTIONS if kept else 0):
            market = moved(self.market, joint_shifts(list(zip(kept, shares, strict=True))))
            parts, price = self.bench.revaluer.price(market, first)
            slopes = effects(self.bench.revaluer, market, kept, first, parts)
            ahead = sum(effect.change.value * share for effect, share in zip(slopes, shares, strict=True))
            found = direction(slopes, meets - price.value + ahead)
            if not self.possible(joint_shifts(list(zip(kept, found, strict=True)))):
                break
            shares = [float(share) for share in found]
        return self._as_far_as_it_takes(list(zip(kept, shares, strict=True)), meets)

    def _as_far_as_it_takes(self, shares: Sequence[tuple[Lever, float]], meets: float) -> Joint | None:
        if not any(share for _, share in shares):
            return None
        found = solutions(
            lambda scale, sampling: self.distance(joint_shifts(shares, scale), meets, sampling), 0.0, FURTHEST,
            self.bench.sampling, lambda scale: self.possible(joint_shifts(shares, scale))).found
        if not found:
            return None
        nearest = found[0]
        scaled = tuple((lever, share * nearest.move) for lever, share in shares)
        return Joint(scaled, sum(share**2 for _, share in scaled) ** 0.5, nearest.fresh, nearest.z)


def _band(name: str, half_width: float | None, gap: float) -> Band:
    return Band(name, half_width, None if half_width is None else abs(gap) <= half_width)


def model_band(model: ModelBracket, gap: float, held: bool | None = None) -> Band:
    """How far the model bracket reaches from the headline price towards a quote, and whether the quote is inside it: it
    may lie beside the headline price altogether. Where the strip is the price the other ends are known to be wrong: it
    is a correction then, and holds the gap if anything stated has `held` what it leaves."""
    if not model.changes:
        return Band(MODEL, None, None)
    low, high = model.settled or (model.low.value, model.high.value)
    return Band(MODEL, max(high if gap >= 0.0 else -low, 0.0), low <= gap <= high if held is None else held)


def beyond(gap: float, low: float, high: float) -> float:
    """What a price anywhere between two leaves of a gap at best."""
    return gap - min(max(gap, low), high)


def _closes(gap: Estimate, left: Estimate, threshold: float) -> bool:
    """Whether a gap that is open would not be there."""
    def inside(one: Estimate) -> bool:
        return abs(one.value) <= max(threshold, CLEAR * one.standard_error)

    return inside(left) and not inside(gap)
