"""The terminal view of `mcx methods`."""

from __future__ import annotations

from collections.abc import Iterator

from mcx.estimators.reduction.names import NONE
from mcx.report.method_results import MethodLine, MethodsResult
from mcx.report.terminal import Page, decimals, fixed

HEADS = ("methods", "std error", "z", "variance ratio", "cost", "efficiency", "to 1 bp")


def show_methods(result: MethodsResult, page: Page) -> None:
    """The choices, the most efficient first, and what the columns mean."""
    percent = result.notional is not None
    unit, factor = ("%", 100.0) if percent else (f"{result.currency} per unit", 1.0)
    page.line(f"{result.contract} ({result.payoff})", style="bold")
    page.line(f"seed {result.seed}; each choice for {result.each}")
    page.heading("variance reduction, the most efficient first")
    page.table((HEADS[0], unit, *HEADS[1:]), (method_row(line, factor, percent) for line in result.methods))
    page.line(explained(percent))
    if result.closed_form is not None:
        page.line(against_closed_form(result, factor, unit))
    for title, texts in (("what they found", found(result)), ("not applicable", refused(result)),
                         ("assumptions", result.assumptions),
                         ("not in the model", result.limits), ("read it with care", result.cautions)):
        if texts:
            page.heading(title)
            page.items(texts)


def explained(percent: bool) -> str:
    """What the columns mean."""
    return ("variance ratio: of plain sampling over this, at equal paths, ± its standard error; cost: processor time "
            "for a path over that of plain sampling; efficiency: variance × time of plain sampling over this; z: distance "
            "from all others pooled; to 1 bp: elapsed seconds until the 95 % half-width is 1 bp of the "
            + ("notional" if percent else "price"))


def against_closed_form(result: MethodsResult, factor: float, unit: str) -> str:
    return f"closed form: {fixed(factor * result.closed_form, 8)} {unit}; z against it: " + ", ".join(
        f"{line.method} {line.z_closed_form:+.2f}" for line in result.methods if line.efficiency is not None)


def found(result: MethodsResult) -> list[str]:
    """What the choices found on their pilots, those that found the same together."""
    said: dict[str, list[str]] = {}
    for line in result.methods:
        notes = "; ".join(note.removeprefix(f"{line.method}: ") for note in line.notes)
        if notes:
            said.setdefault(notes, []).append(line.method.replace(",", " + "))
    return [f"{', '.join(methods)}: {notes}" for notes, methods in said.items()]


def refused(result: MethodsResult) -> list[str]:
    """Choices that have nothing to offer, and why."""
    return [f"{one.method.replace(',', ' + ')}: {one.reason}" for one in result.not_applied]


def method_row(line: MethodLine, factor: float, percent: bool) -> Iterator[str]:
    error = factor * line.standard_error
    places = min(decimals(error, 2, 2 if percent else 4), 8)
    yield line.method.replace(",", ", ")
    yield fixed(factor * line.price, places)
    yield f"{error:.2g}" if line.efficiency is not None else "exact"
    yield f"{line.z:+.2f}"
    yield "" if line.variance_ratio is None else "1" if line.method == NONE else (
        f"{short(line.variance_ratio)} ± {short(line.variance_ratio_error)}")
    yield f"{line.cost_ratio:.2f}"
    yield "" if line.efficiency is None else short(line.efficiency)
    yield "" if line.efficiency is None else to_1bp(line)


def to_1bp(line: MethodLine) -> str:
    """Seconds; no run is shorter than a path, and a price of 0 has no basis points."""
    if not 0.0 < line.paths_to_1bp < 1.0:
        return f"{line.seconds_to_1bp:.2g}" if line.paths_to_1bp else ""
    return "one path"


def short(number: float) -> str:
    """A ratio in a few digits: 2.3, 41.7, 12,345."""
    return f"{number:,.0f}" if number >= 100.0 else f"{number:.2g}" if number < 10.0 else f"{number:.1f}"
