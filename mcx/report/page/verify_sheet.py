"""The sheet of a quote: the verdict, the gap beside what may hold it, and what would have to be true."""

from __future__ import annotations

from collections.abc import Iterator

from mcx.estimators.verify import MODEL
from mcx.report.page.blocks import Facts, Notes, Picture, Sheet, Table, cut, notes
from mcx.report.page.price_sheet import INTERVALS, evidence, leg_bars, model_table, surroundings
from mcx.report.pictures.draw import Bar, Rung, bars, gap_ladder, moves
from mcx.report.price_scale import Scale
from mcx.report.scene import Scene
from mcx.report.verify_results import ImpliedInput, VerifyResult
from mcx.report.verify_view import (
    ANSWERS,
    IN_PERCENT,
    MONEY,
    band_rows,
    corner,
    footed,
    implied_row,
    money_rows,
    nowhere,
    rest_row,
    solved,
)

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
        *rest_row(gap, scale, places),
        ("valued on", result.valuation or "time 0"),
        ("paths", f"{result.paths:,}; seed {result.seed}; variance reduction: {result.reduction}"))),
        *_ladder(result, scale, places)]
    blocks += notes(("what closes it", result.leads))
    blocks += [*_implied(result), *_inputs(result, scale, places), *_readings(result, scale, places),
               *model_table(result.model_bracket, scale, result.standard_error), *_footing(result, scale),
               *_money(result, scale, places)]
    blocks += surroundings(scene, scale.unit) if scene else ()
    blocks += notes(("warnings", result.warnings), ("assumptions", result.assumptions or ("none",)))
    blocks += evidence(scene) if scene else ()
    blocks += notes(("not in the model", result.limits), ("read it with care", result.cautions))
    return Sheet(result.contract, result.verdict, f"Errors are those of sampling only. {INTERVALS}",
                 tuple(blocks))


def _ladder(result: VerifyResult, scale: Scale, places: int) -> Iterator[Picture | Table]:
    """The gap against each band, the model bracket where it lies; one that was not stated is in the table only."""
    bands = [Rung(band.name, -scale.factor * band.half_width, scale.factor * band.half_width, ANSWERS[band.holds])
             for band in result.bands if band.half_width is not None and band.name != MODEL]
    gap, bar, words, model = result.gap.price, "gap", "the gap", result.model_bracket
    if result.gap.rest is not None:  # each strike at its own vol is the price, and no other end of the bracket
        gap, bar, words, model = result.gap.rest, "left of the gap", "what is left of the gap", None
    bands += [Rung(band.name, *(scale.factor * (end - result.compared) for end in (model.lower, model.upper)),
                   ANSWERS[band.holds]) for band in result.bands
              if band.name == MODEL and model is not None and model.lower is not None]
    apart, error = scale.factor * gap, scale.factor * result.gap.standard_error
    shown = scale.show(gap, places)
    said = f"{bar[0].upper()}{bar[1:]}: {shown} {scale.unit}; " + "; ".join(
        f"{band.name} from {band.low:.4g} to {band.high:.4g}: holds it: {band.said}" for band in bands) + "."
    title = f"{words} and what may hold it, each by itself"
    yield Picture(title, gap_ladder(title, said, Bar(bar, apart, error, shown), bands, scale.unit),
                  "The gap is held where its broken line meets the band.")
    yield Table("in numbers", ("", f"half-width, {scale.unit}", "holds it"), tuple(band_rows(result, scale, places)),
                tail=2, note="" if result.worst_corner is None else corner(result.worst_corner, result.gap, scale, places))


def _implied(result: VerifyResult) -> Iterator[Picture | Table | Notes]:
    """Where each input alone meets the quote, against the band that was stated for it."""
    halves = {(each.input, each.asset): each.half_width for each in result.inputs if each.half_width}
    drawn = [_in_halves(each, halves[each.input, each.asset]) for each in result.implied
             if each.move is not None and (each.input, each.asset) in halves][:MOST_INPUTS]
    if drawn:
        title = "implied inputs, in half-widths of their stated bands"
        said = "Half-widths from the market to where the input alone meets the quote: " + ", ".join(
            f"{row.name} {row.value:+.2f}" for row in drawn) + "."
        yield Picture(title, moves(title, said, drawn, "half-widths; shaded: inside the band"))
    rows, left = cut([_told(each, halves.get((each.input, each.asset))) for each in result.implied], MOST_IMPLIED)
    heads = ("input", "value", "error", "move", "± stated", "inside")
    yield Table("what would have to be true, each input alone", heads, rows, tail=5,
                note="; ".join(filter(None, (left, *nowhere(result.implied)))))
    if result.joint is not None:
        found = (f"{' '.join(filter(None, (each.input, each.asset)))} by {each.half_widths:+.2f} of its half-width"
                 for each in result.joint.moves)
        yield Notes(f"smallest joint move: {result.joint.half_widths:.2f} half-widths in all", tuple(found))


def _told(each: ImpliedInput, half: float | None) -> tuple[str, ...]:
    """A row of the page, which is narrower than a terminal: the input in one cell."""
    _, _, value, error, move, inside = implied_row(each)
    return _named(each), value, error, move, _move(half), inside


def _named(each: ImpliedInput) -> str:
    return " ".join(filter(None, (each.input, each.asset)))


def _in_halves(each: ImpliedInput, half: float) -> Bar:
    """A move in half-widths; the error of a forward's level as a share, as its move is."""
    share = 1.0 if each.input in IN_PERCENT or each.measure == "move" else (1.0 + each.move) / each.value
    return Bar(_named(each), each.move / half,
               abs(each.standard_error * share / half), implied_row(each)[2].split(" at ")[0])


def _move(share: float | None) -> str:
    return "" if share is None else f"{100.0 * share:.4g} %"


def _footing(result: VerifyResult, scale: Scale) -> Iterator[Table]:
    """How the quote was brought on our footing."""
    yield Table("the quote on our footing", ("step", "", "quote"), tuple(
        (line.step, line.text, footed(line.quote, line.standard_error, scale, result, number))
        for number, line in enumerate(result.footing)), words=2)


def _money(result: VerifyResult, scale: Scale, places: int) -> Iterator[Picture | Table | Notes]:
    """Legs, floor, ceiling and margin; and what a term would have to be."""
    if len(result.money.legs) > 1:
        rows = [(leg.name, scale.show(leg.price, places)) for leg in result.money.legs]
        yield from leg_bars("legs", result.money.legs, rows, scale)
    yield Table(MONEY, ("", scale.unit, "error"), tuple(money_rows(result, scale, places)))
    if result.solved:
        first = result.solved[0]
        yield Notes(f"the {first.term} at which the contract is worth {scale.show(first.target, places)} {scale.unit}",
                    tuple(solved(each, scale) for each in result.solved))


def _inputs(result: VerifyResult, scale: Scale, places: int) -> Iterator[Picture]:
    """What each stated half-width does to the price, the largest first."""
    order = sorted(result.inputs, key=lambda each: -abs(each.change))[:MOST_INPUTS]
    if order:
        rows = [Bar(" ".join(filter(None, (each.input, each.asset))), scale.factor * each.change,
                    scale.factor * each.standard_error, scale.show(each.change, places)) for each in order]
        said = f"In {scale.unit}: " + ", ".join(f"{row.name} {row.shown}" for row in rows) + "."
        title = "what each input's half-width does to the price"
        yield Picture(f"{title}, {scale.unit}", bars(title, said, rows))


def _readings(result: VerifyResult, scale: Scale, places: int) -> Iterator[Table]:
    """Those that differ from the contract, as the text has them: each price is on paths over the dates of all readings,
    so that only its difference can be held against the price of the contract."""
    rows = tuple((each.reading, scale.show(each.price, places), scale.show(each.difference, places),
                  scale.show(each.left, places), "yes" if each.closes_gap else "") for each in result.readings
                 if each.price is not None and not each.note)
    if rows:
        heads = ("reading", scale.unit, "difference", "gap left", "closes it")
        yield Table("other readings of the contract", heads, rows, tail=4)
