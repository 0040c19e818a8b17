"""What surrounds a number on a page: how far the levels may go, where the contract looks at them, what it would pay,
and the inputs as they were stated.

The quantiles are the model's own, in closed form; the payments are the contract's tape along straight paths.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from mcx.checked.contract import Figures
from mcx.checked.formula import Binary, Formula, Name, Number, walk
from mcx.dates.dated_contract import DatedContract
from mcx.estimators.ready import Ready
from mcx.report.pictures.draw import Fan, Series
from mcx.report.settled import Settled
from mcx.report.wording import COMPARED, Words
from mcx.tape.formulas import figure, fixed_values
from mcx.tape.interpret import interpret, outputs
from mcx.tape.ops import Op
from mcx.tape.program import LeafKind, LevelKey
from mcx.text.located import Document, Mapping, Node, Scalar

SHARES = {0.05: -1.6448536269514722, 0.25: -0.6744897501960817, 0.5: 0.0, 0.75: 0.6744897501960817,
          0.95: 1.6448536269514722}  # normal quantiles
STEPS = 40
WORST = np.linspace(0.0, 1.5, 301)[1:]
MOST_FANS = 3


@dataclass(frozen=True, slots=True)
class Scene:
    """The surroundings of one contract's number.

    `base` names the term that levels are measured by ('' where they are not); then fans are in percent of it.
    `left_out` are assets for whose fans there is no room. `profile` holds (final performance, undiscounted payments), both in
    percent where there is a base and a notional, `marked` the levels on its scale that the contract looks at last.
    `sources` are files with their SHA-256.
    """

    terms: tuple[tuple[str, str], ...]
    inputs: tuple[tuple[str, str], ...]
    sources: tuple[tuple[str, str], ...]
    ticks: tuple[tuple[float, str], ...]
    base: str
    fans: tuple[Fan, ...]
    left_out: tuple[str, ...]
    profile: tuple[tuple[float, float], ...]
    marked: tuple[tuple[str, float], ...]
    command: str


def scene(ready: Ready, documents: Sequence[Document], command: str) -> Scene:
    """The surroundings of a contract that was valued, from the documents that it was read from."""
    dated = ready.dated
    settled, words = Settled(dated.contract), Words(dated)
    base = _base(settled)
    texts = {document.file: document.text for document in documents}
    fans = tuple(_fans(ready, settled, base))
    days = {moment.day.time: str(moment.day) for moment in dated.moments if moment.day.time >= 0.0}
    return Scene(
        terms=tuple((term.name, words.term(term)) for term in dated.contract.payoff.terms),
        inputs=tuple(line for document in documents if document.kind == "market" for line in _lines(document.body)),
        sources=tuple((file, hashlib.sha256(text.encode()).hexdigest()) for file, text in texts.items()),
        ticks=((0.0, "today"), *sorted(days.items())),
        base=base,
        fans=fans,
        left_out=tuple(dated.contract.assets[MOST_FANS:]),
        profile=tuple(_profile(ready, base)),
        marked=_marked(fans) if base else (),
        command=command,
    )


def _formulas(settled: Settled) -> Iterator[Formula]:
    """Everything that a contract computes or asks, as its terms leave it."""
    yield from settled.lets.values()
    yield from (settled.formula(each.formula) for each in settled.running if each.formula is not None)
    for event in settled.contract.payoff.events:
        if event.condition is not None and settled.actions(event):
            yield settled.formula(event.condition)


def _base(settled: Settled) -> str:
    """The term of stated levels that spots are divided by, if it is one."""
    terms = {term.name: term for term in settled.contract.payoff.terms}
    ratios = [part for formula in _formulas(settled) for part in walk(formula)
              if isinstance(part, Binary) and part.symbol == "/" and isinstance(part.left, Name)
              and part.left.name == "spot" and isinstance(part.right, Name)]
    found = {part.right.name for part in ratios if part.right.name in terms and terms[part.right.name].type == "level"
             and isinstance(settled.contract.terms.get(part.right.name), Figures)}
    return found.pop() if len(found) == 1 else ""


def _looked_at(settled: Settled, types: Sequence[str]) -> list[str]:
    """The terms of these types that something other than a number or a term is compared with."""
    terms = {term.name: term for term in settled.contract.payoff.terms}
    found: dict[str, None] = {}
    for formula in _formulas(settled):
        for part in walk(formula):
            if isinstance(part, Binary) and part.symbol in COMPARED:
                for side, other in ((part.left, part.right), (part.right, part.left)):
                    named = isinstance(side, Name) and side.name in terms and terms[side.name].type in types
                    fixed = isinstance(other, Number) or (isinstance(other, Name) and other.name in terms)
                    if named and not fixed:
                        found[side.name] = None
    return list(found)


def _fans(ready: Ready, settled: Settled, base: str) -> Iterator[Fan]:
    """Quantiles of the levels that the contract reads; not of a sum of two lognormals, whose law is not at hand."""
    dated, market = ready.dated, ready.market
    times = np.linspace(0.0, dated.last.time, STEPS + 1)
    for number, asset in enumerate(dated.contract.assets[:MOST_FANS]):
        escrowed = np.array([float(market.escrowed(number, time, market.last or 0.0)) for time in times])
        if dated.last.time <= 0.0 or (escrowed.any() and dated.contract.conversion.get(asset) == "composite"):
            continue
        forward = np.array([market.forward(asset, time) for time in times]) - escrowed
        spread = np.array([market.vol_to(asset, time) * time**0.5 if time else 0.0 for time in times])
        unit = _unit(dated, base, number)
        quantiles = {share: tuple((forward * np.exp(z * spread - 0.5 * spread**2) + escrowed) / unit)
                     for share, z in SHARES.items()}
        yield Fan(asset, tuple(times), quantiles, tuple(_barriers(dated, settled, base, number, times)))


def _unit(dated: DatedContract, base: str, number: int) -> float:
    """What the levels of an asset are shown in: a percent of its base, or as they are."""
    return _of_asset(dated.contract.terms[base].rows[0], number) / 100.0 if base else 1.0


def _of_asset(row: Sequence[float], number: int) -> float:
    return row[number] if len(row) > 1 else row[0]


def _barriers(dated: DatedContract, settled: Settled, base: str, number: int, times: np.ndarray) -> Iterator[Series]:
    """The levels that an asset is compared with: flat, or by the dates of their schedule."""
    terms = {term.name: term for term in dated.contract.payoff.terms}
    for name in _looked_at(settled, ("percent", "level") if base else ("level",)):
        value = dated.contract.terms.get(name)
        if not isinstance(value, Figures) or name == base:
            continue
        scale = 100.0 if terms[name].type == "percent" else 1.0 / _unit(dated, base, number)
        shown = [scale * _of_asset(row, number) for row in value.rows]
        days = [day.time for day in dated.schedules.get(terms[name].per, ())] if len(shown) > 1 else []
        days = days or [float(times[-1])]
        since = [float(times[0]), *days[:-1]]  # a level of one date is drawn from the date before
        points = [(when, level) for first, last, level in zip(since, days, shown, strict=True) if last >= 0.0
                  for when in (max(first, 0.0), last)]
        if points and shown[0] > 0.0:
            yield Series(name.replace("_", " "), tuple(points))


def _marked(fans: Sequence[Fan]) -> tuple[tuple[str, float], ...]:
    """Levels in percent of the base that are the same for all assets."""
    found = [{(f"{each.name} {each.points[-1][1]:.4g}", each.points[-1][1]) for each in fan.barriers} for fan in fans]
    return tuple(sorted(set.intersection(*found), key=lambda named: named[1])) if found else ()


def _profile(ready: Ready, base: str) -> Iterator[tuple[float, float]]:
    """What the contract pays in all, undiscounted, if every asset moves along a straight line (in its log) from today's
    level to one final performance. Along such a line the extremes of a watched stretch stand at its ends."""
    dated, market, tape = ready.dated, ready.market, ready.unrolled.observed
    last = dated.last.time
    if last <= 0.0:
        return

    def level(asset: int, time: float) -> np.ndarray:
        spot = market.forward(dated.contract.assets[asset], 0.0)
        final = WORST * (_unit(dated, base, asset) * 100.0 if base else spot)
        return spot * (final / spot) ** (time / last)

    def read(op: Op, key: LevelKey) -> np.ndarray:
        ends = level(key.asset, key.start), level(key.asset, key.time)
        return {Op.LEVEL: ends[1], Op.LOW: np.minimum(*ends), Op.HIGH: np.maximum(*ends)}[op]

    def moment(key: LevelKey, barrier: float) -> np.ndarray:
        first, gone = level(key.asset, key.start), np.log(level(key.asset, key.time) / level(key.asset, key.start))
        flat = np.abs(gone) < 1e-12  # which part has passed when the line is at the barrier
        return np.clip(np.where(flat, 1.0, np.log(barrier / first) / np.where(flat, 1.0, gone)), 0.0, 1.0)

    fixed = fixed_values(tape, dated.contract)
    found = {(step.op, step.payload): moment(step.payload, fixed[step.operands[0]]) if step.op is Op.MOMENT
             else read(step.op, step.payload) for step in tape.instructions if isinstance(step.payload, LevelKey)}
    leaves = [1.0 if leaf.kind is LeafKind.DISCOUNT else figure(dated.contract, leaf) for leaf in tape.leaves]
    values = interpret(tape, leaves, levels=found)
    name = next(output.name for output in tape.outputs if output.kind == "price")
    paid = np.broadcast_to(outputs(tape, values)[name], WORST.shape)
    scale = 100.0 if dated.contract.notional is not None else 1.0
    yield from zip((100.0 * WORST).tolist(), (scale * paid).tolist(), strict=True)


def _lines(node: Mapping, path: str = "") -> Iterator[tuple[str, str]]:
    """The numbers of a market as they were written: a curve on one line, and all that is said of an asset."""
    for key, value in node.entries:
        name = f"{path} {key}".strip()
        if name == "assets" and isinstance(value, Mapping):
            yield from ((str(asset), "; ".join(f"{what} {_said(one)}".replace("_", " ") for what, one in said.entries))
                        for asset, said in value.entries if isinstance(said, Mapping))
        elif isinstance(value, Mapping) and not all(_is_one(inner) for _, inner in value.entries):
            yield from _lines(value, name)
        elif isinstance(value, Mapping) and "value" not in value:
            yield name, "; ".join(f"{inner} {_said(one)}" for inner, one in value.entries)
        else:
            yield name, _said(value)


def _is_one(node: Node) -> bool:
    return isinstance(node, Scalar) or (isinstance(node, Mapping) and "value" in node)


def _said(node: Node) -> str:
    """A number with what is said of it."""
    match node:
        case Scalar():
            return node.text
        case Mapping() if "value" in node:
            rest = [f"{key} {value}".replace("_", " ") for key, value in node.entries if key.text != "value"]
            return f"{node.get('value')} ({', '.join(rest)})" if rest else str(node.get("value"))
        case Mapping():  # a curve within a curve, as a vol by strike, in brackets
            return ", ".join(f"{key} ({_said(value)})" if isinstance(value, Mapping) and "value" not in value
                             else f"{key} {_said(value)}" for key, value in node.entries)
    return "; ".join(_said(item) for item in node)
