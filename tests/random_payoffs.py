"""Hypothesis strategies for whole payoffs in the grammar's text: random formulas of the right kind, running values of
every kind, events with conditions, payments, assignments and endings.

Formulas are bounded away from where they have no value, and levels are compared with odd decimals only, so that no
comparison hangs on the last bit.
"""

from __future__ import annotations

from hypothesis import strategies as st

HOWS = ("average", "total", "product", "lowest", "highest", "latest")
FLAG_HOWS = ("ever", "always", "total")
ODD = ("0.9137", "1.0371", "1.1719", "0.8353", "-0.2477", "0.4129")

HEAD = """payoff: random
about: Whatever came up.
assets: {assets}
terms:
  initial: {{type: level}}
  dates: {{type: dates}}
  by_date: {{type: number, per: dates}}
  fixed: {{type: number}}
  weights: {{type: number, per: assets}}
  style: {{type: choice, of: [one, two]}}
  on: {{type: flag}}
  chosen: {{type: asset}}
  later: {{type: dates, per: dates}}
"""
EVERY_TERM = ("  - {at: dates, pay: \"fixed + by_date + of(spot / initial, chosen) + basket(spot, weights)\", "
              "as: every term, due: later}\n"
              "  - {at: dates.last, pay: 1 if style == 'one' and on else 2, as: words}\n")
MARKET = """market: 0y
rates: {EUR: {0.3y: 1%, 2y: 3%}}
funding: {EUR: 40 bp}
assets:
  harbour: {spot: 100, currency: EUR, yield: {1y: 2%, 3y: 1%}, vol: {0.5y: 24%, 1y: 20%, 2y: 21%}}
  lantern: {spot: 80, currency: EUR, yield: 0%, vol: 33%}
  quarry:  {spot: 50, currency: EUR, forwards: {0.5y: 50.6, 1y: 49.2}, vol: {0.4y: 10%, 1.2y: 28%}}
correlation: {harbour/lantern: 55%, harbour/quarry: -20%, quarry/lantern: 10%}
"""


class Kinds:
    """Formula text by kind, given the running values that may be read, each with its kind."""

    def __init__(self, draw: st.DrawFn, readable: dict[str, str], previous: bool = True):
        self.draw, self.readable, self.previous = draw, readable, previous

    def pick(self, *choices: str) -> str:
        return self.draw(st.sampled_from(choices))

    def names(self, kind: str) -> list[str]:
        return [name for name, of in self.readable.items() if of == kind]

    def number(self, depth: int) -> str:
        leaves = [*self.names("number"), "fixed", "by_date", "nth", "years", "n_dates", *ODD]
        if depth == 0:
            return self.pick(*leaves)
        x, y = (lambda: self.number(depth - 1)), (lambda: self.numbers(depth - 1))
        match self.pick("leaf", "over", "over", "arithmetic", "function", "if", "previous", "ranked"):
            case "over":
                return f"{self.pick('worst', 'best', 'mean')}({y()})"
            case "ranked":
                return self.pick(f"ranked({y()}, 1)", f"basket({y()}, weights)", f"of({y()}, chosen)")
            case "arithmetic":
                return f"({x()} {self.pick('+', '-', '*')} {x()})"
            case "function":
                return self.pick(f"min({x()}, {x()})", f"max({x()}, {x()})", f"abs({x()})", f"exp(min({x()}, 1.3))",
                                 f"log(abs({x()}) + 0.7)", f"sqrt(abs({x()}))", f"clip({x()}, -0.5, 1.5)",
                                 f"({x()} / (abs({x()}) + 0.6))", f"(abs({x()}) + 0.1) ** 0.5")
            case "if":
                return f"({x()} if {self.flag(depth - 1)} else {x()})"
            case "previous" if self.previous:
                inner = Kinds(self.draw, self.readable, previous=False)
                return f"previous({inner.number(depth - 1)}, {self.pick(*ODD)})"
        return self.pick(*leaves)

    def numbers(self, depth: int) -> str:
        """One number for each asset."""
        leaves = [*self.names("numbers"), "(spot / initial)"]
        if depth == 0:
            return self.pick(*leaves)
        x = lambda: self.numbers(depth - 1)  # noqa: E731
        return self.pick(*leaves, f"({x()} {self.pick('+', '-', '*')} {self.number(depth - 1)})",
                         f"max({x()}, {self.number(depth - 1)})", f"({x()} if {self.flags(depth - 1)} else {x()})")

    def flag(self, depth: int) -> str:
        compared = f"({self.number(depth)} {self.pick('<', '<=', '>', '>=')} {self.pick(*ODD)})"
        if depth == 0:
            return self.pick(*self.names("flag"), compared, "on", "(style == 'one')")
        return self.pick(compared, f"{self.pick('any', 'all')}({self.flags(depth - 1)})",
                         f"({self.flag(depth - 1)} {self.pick('and', 'or')} {self.flag(depth - 1)})",
                         f"(not {self.flag(depth - 1)})", *self.names("flag"))

    def flags(self, depth: int) -> str:
        return self.pick(*self.names("flags"), f"({self.numbers(depth)} {self.pick('<', '>=')} {self.pick(*ODD)})")

    def of(self, kind: str, depth: int = 2) -> str:
        return {"number": self.number, "numbers": self.numbers, "flag": self.flag, "flags": self.flags}[kind](depth)


def running_values(draw: st.DrawFn) -> tuple[str, dict[str, str], list[str]]:
    """The text of some running values, their kinds, and the names that events may set."""
    readable: dict[str, str] = {}
    settable = [f"s{k}" for k in range(draw(st.integers(0, 2)))]
    lines = [f"  {name}: {{start: {draw(st.sampled_from(ODD))}}}" for name in settable]
    readable |= {name: "number" for name in settable}
    for k in range(draw(st.integers(0, 4))):
        kind = draw(st.sampled_from(["number", "numbers", "flag", "flags"]))
        how = draw(st.sampled_from(FLAG_HOWS if kind.startswith("flag") else HOWS))
        formula = Kinds(draw, dict(readable)).of(kind)
        start = draw(st.booleans()) and kind == "number"
        lines += [f"  r{k}:", f"    {how}: {formula}", "    at: dates", *(["    start: 0.9137"] if start else [])]
        counted = how == "total" and kind.startswith("flag")
        readable[f"r{k}"] = {"flag": "number", "flags": "numbers"}[kind] if counted else kind
    return ("running:\n" + "\n".join(lines) + "\n" if lines else ""), readable, settable


def actions(draw: st.DrawFn, kinds: Kinds, settable: list[str], number: int, indent: str) -> list[str]:
    lines = []
    for k in range(draw(st.integers(1, 2))):
        what = draw(st.sampled_from(["pay", "pay", "set", "end"]))
        if what == "set" and settable:
            lines.append(f"{indent}- set:")
            chosen = draw(st.lists(st.sampled_from(settable), min_size=1, unique=True))
            lines += [f"{indent}    {name}: {kinds.of('number')}" for name in chosen]
        elif what == "end":
            return [*lines, f"{indent}- end"]
        else:
            lines += [f"{indent}- pay: {kinds.of('number')}", f"{indent}  as: leg {number}.{k}"]
            lines += [f"{indent}  due: {draw(st.sampled_from(['later', 'same day']))}"] if draw(st.booleans()) else []
    return lines


@st.composite
def contracts(draw: st.DrawFn) -> str:
    """The text of a payoff, a contract on it and a market."""
    names = draw(st.sampled_from([["harbour"], ["quarry", "harbour"], ["lantern", "quarry", "harbour"]]))
    running, readable, settable = running_values(draw)
    lines = []
    for number in range(draw(st.integers(1, 4))):
        kinds = Kinds(draw, readable)
        lines += [f"  - at: dates{draw(st.sampled_from(['', '', '', '.last', '.but_last']))}",
                  f"    name: event {number}", f"    if: {kinds.of('flag')}", "    then:",
                  *actions(draw, kinds, settable, number, "      ")]
        if draw(st.booleans()):
            lines += ["    else:", *actions(draw, kinds, settable, number + 10, "      ")]
    dates = draw(st.sampled_from([("[0.1y, 0.5y, 1.25y]", "[0.2y, 0.5y, 2y]", 3),
                                  ("{from: 0y, count: 3, until: 1y}", "[0y, 0.4y, 0.7y, 1.5y]", 4)]))
    weights = ", ".join(f"{name}: {0.3 + 0.4 * k}" for k, name in enumerate(names))
    contract = (f"contract: random\ncurrency: EUR\nunits: 1\nassets: [{', '.join(names)}]\npayoff: random\nterms:\n"
                f"  initial: {{{', '.join(f'{name}: {level}' for name, level in zip(names, (95, 52, 77)))}}}\n"
                f"  dates: {dates[0]}\n  later: {dates[1]}\n  by_date: {[0.3, 1.1, -0.2, 0.75][: dates[2]]}\n"
                f"  fixed: 0.8\n  weights: {{{weights}}}\n  style: {draw(st.sampled_from(['one', 'two']))}\n"
                f"  on: {draw(st.sampled_from(['true', 'false']))}\n  chosen: {names[-1]}\n")
    body = HEAD.format(assets=len(names)) + running + "events:\n" + EVERY_TERM + "\n".join(lines) + "\n"
    return f"{body}---\n{contract}---\n{MARKET}"
