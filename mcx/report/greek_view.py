"""The terminal view of `mcx greeks`."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from mcx.report.greek_results import Greek, GreeksResult, Rung
from mcx.report.price_view import Scale, bounds
from mcx.report.terminal import Page, decimals, fixed

JUMP = "jump"
JUMPS = "the payoff jumps here, or has no bounded slope: no pathwise estimate of the payments behind it"


def show_greeks(result: GreeksResult, page: Page) -> None:
    """The sensitivities, what they were taken by, and the ladders."""
    percent = result.notional is not None
    factor, unit = (100.0, "%") if percent else (1.0, f"{result.currency} per unit")
    places = decimals(result.standard_error * factor, 2, 2 if percent else 4)
    if result.interrupted:
        page.line("interrupted: the estimates so far", style="bold")
    page.line(f"{result.contract} ({result.payoff})", style="bold")
    page.named((
        ("valued on", result.valuation or "time 0"),
        ("price", f"{fixed(result.price * factor, places)} {unit}, standard error "
                  f"{fixed(result.standard_error * factor, places)}"),
        *([("bounds", f"{bounds(result, Scale(result))}; sensitivities are those of the middle")]
          if result.bracket else []),
        ("paths", f"{result.paths:,} in {result.seconds:.2f} s; asked for: {result.planned.asked}"),
        ("seed", f"{result.seed}; variance reduction: {result.reduction}; estimator asked for: {result.estimator}"),
    ))
    page.heading("sensitivities (sampling error only)")
    page.table(("", "value", "error", "unit", "by"), (greek_row(one, one.estimator) for one in result.greeks), last=2)
    if result.refused:
        page.heading("not given")
        page.items(refused(result))
    if result.comparison:
        page.heading("for comparison: revaluation on the same random numbers, biased by the size of the move")
        page.table(("", "value", "error", "unit", ""), (greek_row(one, one.note) for one in result.comparison), last=2)
    if result.jumps:
        page.heading(JUMPS)
        page.items(f"{jump.kind} at {jump.place or 'an unnamed place'}" for jump in result.jumps)
    if result.ladder:
        named = "spots moved together" if not result.assets else f"only the spot of {', '.join(result.assets)} moved"
        page.heading(f"{named}, same random numbers")
        heads = [f"delta {delta.asset}" for delta in result.ladder[0].deltas]
        page.table(("spot", unit, f"change, {result.currency}", "error", *heads, ""),
                   (rung_row(rung, factor, places) for rung in result.ladder), words=0, last=1)
    if result.grid:
        _grid(result, factor, places, page)
    for title, texts in (("choice of estimators", result.choices), ("warnings", result.warnings),
                         ("assumptions", result.assumptions), ("not in the model", result.limits),
                         ("read it with care", result.cautions)):
        if texts:
            page.heading(title)
            page.items(texts)


def refused(result: GreeksResult) -> Iterator[str]:
    """Sensitivities that are not given, those with one reason together."""
    said: dict[str, list[str]] = {}
    for each in result.refused:
        said.setdefault(each.reason, []).append(" ".join(filter(None, (each.name, each.asset, each.tenor))))
    yield from (f"{', '.join(names)}: {reason}" for reason, names in said.items())


def greek_row(greek: Greek, words: str) -> tuple[str, ...]:
    """A sensitivity with its error, and what is said of it."""
    places = decimals(greek.standard_error, 2, 2)
    said = "; ".join(filter(None, (words, "" if greek.resolved else "not resolved")))
    name = " ".join(filter(None, (greek.name, greek.asset, greek.tenor)))
    return name, fixed(greek.value, places), fixed(greek.standard_error, places), greek.unit, said


def rung_row(rung: Rung, factor: float, places: int) -> tuple[str, ...]:
    deltas = (f"{fixed(delta.value, decimals(delta.standard_error, 2, 2))} ± "
              f"{fixed(delta.standard_error, decimals(delta.standard_error, 2, 2))}" for delta in rung.deltas)
    jump = f"{JUMP} above: {', '.join(rung.jumps)}" if rung.jumps else ""
    return (move(rung.spot_move), fixed(rung.price * factor, places), fixed(rung.change, 2),
            fixed(rung.change_standard_error, 2), *deltas, jump)


def _grid(result: GreeksResult, factor: float, places: int, page: Page) -> None:
    moved = "all" if not result.assets else f"{', '.join(result.assets)} only:"
    page.heading(f"price by move of {moved} spots (down) and vols (across), same random numbers")
    vols: Sequence[float] = result.vol_moves
    at = {(point.spot_move, point.vol_move): point for point in result.grid}

    def rows() -> Iterator[tuple[str, ...]]:
        for spot in result.spot_moves:
            found = [at[spot, vol] for vol in vols]
            yield (move(spot), *("none" if point.refused else fixed(point.price * factor, places) for point in found))

    page.table(("spot", *(f"vol {points(vol)}" for vol in vols)), rows(), words=0)
    errors = [point.standard_error for point in result.grid if not point.refused]
    if errors:
        page.line(f"  standard errors of at most {fixed(max(errors) * factor, places)}")
    page.items(dict.fromkeys(f"vol {points(point.vol_move)}, spot {move(point.spot_move)}: {point.refused}"
                             for point in result.grid if point.refused))


def move(share: float) -> str:
    """A move as '+2.5 %'."""
    return f"{100.0 * share:+.4g} %" if share else "0 %"


def points(change: float) -> str:
    """A change of a vol as '+2 points'."""
    return f"{100.0 * change:+.4g} points" if change else "0"
