"""Dated contracts made by hand: a payoff's parts and the times of its dates, with no document behind them."""

from __future__ import annotations

import ast
import itertools
from collections.abc import Iterable, Mapping

from mcx.checked import formula as trees
from mcx.checked.contract import Contract, Figures, TermValue, Word
from mcx.checked.kinds import Kind
from mcx.checked.payoff import Action, Assign, At, Continuous, End, Event, Let, Pay, Payoff, Running, Term
from mcx.dates.dated_contract import DatedContract, DatedEvent, Day, Moment, Occasion, Update, Watch
from mcx.faults import Place

LINES = itertools.count(1)


def here() -> Place:
    """A place of its own for each thing made."""
    return Place("made.yaml", next(LINES), 1)


def formula(text: str) -> trees.Formula:
    """A formula from its text. Kinds do not matter to the tape: all are numbers here."""
    return _tree(ast.parse(text, mode="eval").body)


def _tree(node: ast.expr) -> trees.Formula:
    place, kind = here(), Kind.NUMBER
    match node:
        case ast.Constant(value=number):
            return trees.Number(float(number), place)
        case ast.Name(id=name):
            return trees.Name(name, place, kind)
        case ast.UnaryOp(op=op, operand=x):
            return trees.Unary("-" if isinstance(op, ast.USub) else "not", _tree(x), place, kind)
        case ast.BoolOp(op=op, values=[a, b]):
            return trees.Binary("and" if isinstance(op, ast.And) else "or", _tree(a), _tree(b), place, kind)
        case ast.BinOp(left=a, op=op, right=b):
            return trees.Binary(SYMBOLS[type(op)], _tree(a), _tree(b), place, kind)
        case ast.Compare(left=ast.Name(id=term), ops=[op], comparators=[ast.Constant(value=str() as word)]):
            return trees.ChoiceIs(term, word, isinstance(op, ast.NotEq), place)
        case ast.Compare(left=a, ops=[op], comparators=[b]):
            return trees.Binary(SYMBOLS[type(op)], _tree(a), _tree(b), place, kind)
        case ast.IfExp(test=c, body=a, orelse=b):
            return trees.IfElse(_tree(c), _tree(a), _tree(b), place, kind)
        case ast.Call(func=ast.Name(id="given"), args=[ast.Name(id=term)]):
            return trees.Given(term, place)
        case ast.Call(func=ast.Name(id="of"), args=[x, ast.Name(id=asset)]):
            return trees.OfAsset(_tree(x), asset, place, kind)
        case ast.Call(func=ast.Name(id="previous"), args=[x, first]):
            return trees.Previous(_tree(x), _tree(first), place, kind)
        case ast.Call(func=ast.Name(id=name), args=arguments):
            return trees.Call(name, tuple(map(_tree, arguments)), place, kind)
    raise ValueError(ast.dump(node))


SYMBOLS = {
    ast.Add: "+", ast.Sub: "-", ast.Mult: "*", ast.Div: "/", ast.Pow: "**", ast.Lt: "<", ast.LtE: "<=",
    ast.Gt: ">", ast.GtE: ">=", ast.Eq: "==", ast.NotEq: "!=",
}


def pay(amount: str, leg: str = "payment", part: str = "", due: str = "") -> Pay:
    return Pay(formula(amount), here(), leg, part, due)


def set_to(**values: str) -> Assign:
    return Assign(tuple((name, formula(text)) for name, text in values.items()), here())


def end() -> End:
    return End(here())


def event(at: str, *then: Action, condition: str = "", otherwise: tuple[Action, ...] = (), name: str = "",
          part: str = "") -> Event:
    asked = formula(condition) if condition else None
    return Event(At(at, here(), part), here(), then, otherwise, asked, name)


def running(name: str, how: str, what: str = "", at: str = "", start: str = "") -> Running:
    return Running(name, how, here(), formula(what) if what else None, At(at, here()) if at else None,
                   formula(start) if start else None)


def figures(*rows: tuple[float, ...] | float, per_date: bool = False) -> Figures:
    """Numbers of a term: one row for each date; a row is one number or one for each asset."""
    full = tuple(row if isinstance(row, tuple) else (row,) for row in rows)
    return Figures(full, here(), per_date=per_date, per_asset=len(full[0]) > 1)


def word(text: str) -> Word:
    return Word(text, here())


def made(
    dates: Mapping[str, tuple[float, ...]],
    events: Iterable[Event],
    running: Iterable[Running] = (),
    terms: Mapping[str, TermValue] | None = None,
    lets: Mapping[str, str] | None = None,
    assets: tuple[str, ...] = ("north",),
    per: Mapping[str, str] | None = None,
    watched: Mapping[str, tuple[float, float]] | None = None,
    lag: float = 0.0,
) -> DatedContract:
    """A contract whose schedules are these times. `per` names the schedule of a per-date term; the running values in
    `watched` are watched continuously over the times given; `lag` is the time from each date to its payment."""
    events, running, watched = tuple(events), tuple(running), dict(watched or {})
    payoff = Payoff(
        "made up", "",
        tuple(Term(name, "number", here(), per=(per or {}).get(name, "")) for name in terms or {}),
        tuple(Let(name, formula(text), here()) for name, text in (lets or {}).items()),
        running, events, here(),
    )
    contract = Contract("trade", "EUR", assets, payoff, dict(terms or {}), here(), notional=1.0, textbook=True)
    updates = [(time, Update(one, occasion(dates, one.at, time), time == dates[one.at.name][0]))
               for one in running if isinstance(one.at, At) and one.name not in watched
               for time in dates[one.at.name]]
    happening = [(time, DatedEvent(one, occasion(dates, one.at, time), due_days(one, dates, time, lag)))
                 for one in events for time in part_of(dates[one.at.name], one.at.part)]
    moments = tuple(
        Moment(Day(time), tuple(u for at, u in updates if at == time), tuple(e for at, e in happening if at == time))
        for time in sorted({at for at, _ in (*updates, *happening)})
    )
    watches = tuple(Watch(one, *map(Day, watched[one.name])) for one in running if one.name in watched)
    schedules = {name: tuple(map(Day, times)) for name, times in dates.items()}
    return DatedContract(contract, None, Day(0.0), schedules, moments, watches)


def part_of(times: tuple[float, ...], part: str) -> tuple[float, ...]:
    parts = {"": times, "last": times[-1:], "first": times[:1], "but_first": times[1:], "but_last": times[:-1]}
    return parts[part]


def due_days(one: Event, dates: Mapping[str, tuple[float, ...]], time: float, lag: float) -> dict[Pay, Day]:
    pays = [action for action in (*one.then, *one.otherwise) if isinstance(action, Pay)]
    return {action: Day(dates[action.due][-1] if action.due else time + lag) for action in pays}


def occasion(dates: Mapping[str, tuple[float, ...]], at: At | Continuous, time: float) -> Occasion:
    times = dates[at.name]
    nth = times.index(time) + 1
    earlier = part_of(times, at.part)
    before = earlier.index(time) - 1
    return Occasion(
        Day(time), at.name, nth, len(times), time - (times[nth - 2] if nth > 1 else 0.0), time,
        {name: days.index(time) for name, days in dates.items() if time in days},
        Day(earlier[before]) if before >= 0 else None,
    )
