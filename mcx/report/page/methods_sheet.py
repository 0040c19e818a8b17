"""The sheet of a comparison of methods: which pays, in numbers and as error against time."""

from __future__ import annotations

from collections.abc import Iterator

from mcx.estimators.reduction.names import NONE
from mcx.report.method_results import MethodsResult
from mcx.report.method_view import HEADS, against_closed_form, explained, found, method_row, refused, short
from mcx.report.page.blocks import Facts, Picture, Sheet, Table, notes
from mcx.report.page.price_sheet import evidence
from mcx.report.pictures.draw import Series, errors
from mcx.report.scene import Scene

TITLE = "standard error against time, both on logarithmic scales"


def methods_sheet(result: MethodsResult, scene: Scene | None) -> Sheet:
    """The choices as the text has them, their lines, what they found, and those that do not apply."""
    percent = result.notional is not None
    unit, factor = ("%", 100.0) if percent else (f"{result.currency} per unit", 1.0)
    first = result.methods[0]
    best = (f"{_plus(first.method)} is exact here" if first.efficiency is None else
            "plain sampling: no method beats it here" if first.method == NONE else
            f"{_plus(first.method)}: plain sampling takes {short(first.efficiency)} times the processor time to the same "
            "error")
    rows = tuple(tuple(method_row(line, factor, percent)) for line in result.methods)
    blocks = [Table("variance reduction, the most efficient first", (HEADS[0], unit, *HEADS[1:-1], f"{HEADS[-1]}, s"),
                    rows, note=explained(percent), wide=True), *_lines(result, factor, unit)]
    head = [("contract", f"{result.contract} ({result.payoff})"), ("seed", str(result.seed)),
            ("each choice for", result.each), ("seconds", "those of one machine, as busy as it was")]
    if result.closed_form is not None:
        head.append(("closed form", against_closed_form(result, factor, unit)))
    blocks.append(Facts("comparison", tuple(head)))
    blocks += notes(("what they found", found(result)), ("not applicable", refused(result)),
                    ("assumptions", result.assumptions))
    blocks += evidence(scene) if scene else ()
    blocks += notes(("not in the model", result.limits), ("read it with care", result.cautions))
    return Sheet(result.contract, best, "Errors are those of sampling only.", tuple(blocks))


def _lines(result: MethodsResult, factor: float, unit: str) -> Iterator[Picture]:
    """Each choice's error as its paths are added; not of an exact one, which has none."""
    drawn = [line for line in result.methods if line.efficiency is not None]
    series = [Series(_plus(line.method), tuple((point.seconds, factor * point.standard_error)
                                               for point in line.convergence
                                               if point.standard_error > 0.0 and point.seconds > 0.0))
              for line in drawn]
    series = [each for each in series if each.points]
    if series:
        exact = [_plus(line.method) for line in result.methods if line.efficiency is None]
        more = f"; exact, and so not drawn: {', '.join(exact)}" if exact else ""
        said = f"Standard error in {unit} after so many seconds: " + "; ".join(
            f"{each.name} {each.points[-1][1]:.2g} after {each.points[-1][0]:.2g} s" for each in series) + f"{more}."
        yield Picture(TITLE, errors(TITLE, said, series, "seconds", f"standard error, {unit}{more}"),
                      "Lower and further to the left is better; the errors of short runs are rough themselves.",
                      wide=True)


def _plus(method: str) -> str:
    return method.replace(",", " + ")
