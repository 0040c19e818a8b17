"""The sheet of a quote: the verdict, the gap beside what may hold it, and what would have to be true."""

from __future__ import annotations

from collections.abc import Iterator

from mcx.estimators.verify import MODEL
from mcx.report.page.blocks import Facts, Notes, Picture, Sheet, Table, cut, notes
from mcx.report.page.price_sheet import INTERVALS, evidence, model_table, surroundings
from mcx.report.pictures.draw import Bar, bars, gap_ladder
from mcx.report.price_view import Scale
from mcx.report.scene import Scene
from mcx.report.verify_results import VerifyResult
from mcx.report.verify_view import ANSWERS, implied_row

MOST_INPUTS, MOST_IMPLIED = 12, 18


def verify_sheet(result: VerifyResult, scene: Scene | None) -> Sheet:
    """Whether a quote can be right, and what it hangs on."""
    scale = Scale(result)
    places = scale.places(result.standard_error)
    quote, gap = result.quote, result.gap
    price, mid, apart = (f"{scale.show(number, places)} {scale.unit}"
                         for number in (result.price, result.mid, gap.price))
    blocks = [Facts("quote and price", (
        ("quote", f"{quote.dealer}, {quote.at}, {quote.side}, {quote.accrual}, {quote.commitment}"),
        ("on our footing", mid),
        ("our price", f"{price}, standard error {scale.show(result.standard_error, places)}"),
        ("gap", f"{apart}, standard error {scale.show(gap.standard_error, places)} (quote less our price)"),
        ("valued on", result.valuation or "time 0"),
        ("paths", f"{result.paths:,}; seed {result.seed}; variance reduction: {result.reduction}"))),
        *_ladder(result, scale, places)]
    blocks += notes(("what closes it", result.leads))
    blocks += [*_implied(result), *_inputs(result, scale, places), *_readings(result, scale, places)]
    blocks += model_table(result.model_bracket, scale, result.standard_error)
    blocks += surroundings(scene, scale.unit) if scene else ()
    blocks += notes(("warnings", result.warnings), ("assumptions", result.assumptions or ("none",)))
    blocks += evidence(scene) if scene else ()
    blocks += notes(("not in the model", result.limits), ("read it with care", result.cautions))
    return Sheet(result.contract, result.verdict, "Errors are those of sampling only.", tuple(blocks))


def _ladder(result: VerifyResult, scale: Scale, places: int) -> Iterator[Picture | Table]:
    """The gap against each band; a band that was not stated, and the model bracket, which does not lie evenly about the
    price, are in the table only."""
    bands = [(band.name, scale.factor * band.half_width, ANSWERS[band.holds])
             for band in result.bands if band.half_width is not None and band.name != MODEL]
    gap, bar, words = result.gap.price, "gap", "the gap"
    if result.gap.rest is not None:  # each strike at its own vol is the price
        gap, bar, words = result.gap.rest, "left of the gap", "what each strike at its own vol leaves of the gap"
    apart, error = scale.factor * gap, scale.factor * result.gap.standard_error
    shown = scale.show(gap, places)
    said = f"{words[0].upper()}{words[1:]}: {shown} {scale.unit}; " + "; ".join(
        f"{name} ± {half:.4g}: holds it: {holds}" for name, half, holds in bands) + "."
    yield Picture(f"{words} and what may hold it, each by itself",
                  gap_ladder(f"{words} and what may hold it", said, Bar(bar, apart, error, shown), bands), said)
    yield Table("in numbers", ("", f"half-width, {scale.unit}", "holds it"), tuple(
        (band.name, "not stated" if band.half_width is None else scale.show(band.half_width, places),
         ANSWERS[band.holds]) for band in result.bands), tail=2)


def _implied(result: VerifyResult) -> Iterator[Table | Notes]:
    rows, left = cut([implied_row(each) for each in result.implied], MOST_IMPLIED)
    heads = ("input", "", "value", "error", "move", "inside its doubt")
    yield Table("what would have to be true, each input alone", heads, rows, words=2, tail=5, note=left)
    if result.joint is not None:
        moves = (f"{' '.join(filter(None, (each.input, each.asset)))} by {each.half_widths:+.2f} of its half-width"
                 for each in result.joint.moves)
        yield Notes(f"smallest joint move: {result.joint.half_widths:.2f} half-widths in all", tuple(moves))


def _inputs(result: VerifyResult, scale: Scale, places: int) -> Iterator[Picture]:
    """What each stated half-width does to the price, the largest first."""
    order = sorted(result.inputs, key=lambda each: -abs(each.change))[:MOST_INPUTS]
    if order:
        rows = [Bar(" ".join(filter(None, (each.input, each.asset))), scale.factor * each.change,
                    scale.factor * each.standard_error, scale.show(each.change, places)) for each in order]
        said = f"In {scale.unit}: " + ", ".join(f"{row.name} {row.shown}" for row in rows) + "."
        title = "what each input's half-width does to the price"
        yield Picture(title, bars(title, said, rows), INTERVALS)


def _readings(result: VerifyResult, scale: Scale, places: int) -> Iterator[Table]:
    rows = tuple((each.reading, scale.show(each.price, places), scale.show(each.left, places),
                  "yes" if each.closes_gap else "") for each in result.readings
                 if each.price is not None and each.left is not None)
    if rows:
        yield Table("other readings of the contract", ("reading", scale.unit, "gap left", "closes it"), rows, tail=3)
