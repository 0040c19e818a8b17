"""The sheet of a price."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from mcx.report.model_results import ModelBracketResult
from mcx.report.model_view import HEADS, model_rows
from mcx.report.page.blocks import Facts, Notes, Picture, Sheet, Table, cut, notes
from mcx.report.pictures.draw import Bar, Fan, Series, bars, curve, fan, intervals, lines
from mcx.report.price_scale import Scale
from mcx.report.price_view import (
    COLUMNS,
    HEDGE_NOTE,
    HEDGED,
    PROBABILITIES,
    amounts,
    by_date,
    facts,
    headline,
    hedge_rows,
    owed_heads,
    owed_rows,
)
from mcx.report.results import Amount, PriceResult
from mcx.report.scene import MOST_FANS, Scene

INTERVALS = "Thin lines in pictures are 95 % intervals, of sampling only."
MOST_ROWS = 14


def price_sheet(result: PriceResult, scene: Scene | None) -> Sheet:
    """Everything that a price says; with its surroundings also pictures of the contract and its inputs."""
    scale = Scale(result)
    interrupted = "Interrupted: the estimate so far. " if result.interrupted else ""
    blocks = [Facts("valuation", tuple(facts(result, scale))), *_legs(result, scale), *_kept(result, scale)]
    blocks += _probabilities(result, scene)
    blocks += model_table(result.model_bracket, scale, result.standard_error)
    blocks += surroundings(scene, scale.unit) if scene else ()
    blocks += _checks(result, scale)
    blocks += notes(("warnings", result.warnings), ("assumptions", result.assumptions or ("none",)))
    blocks += evidence(scene) if scene else ()
    blocks += notes(("not in the model", result.limits), ("read it with care", result.cautions))
    below = f"{interrupted}± is the half-width of the 95 % interval. {INTERVALS}"
    return Sheet(result.contract, headline(result), below, tuple(blocks))


def surroundings(scene: Scene, unit: str) -> Iterator[Picture | Notes]:
    """What the contract would pay, and how far the levels may go."""
    base = scene.base.replace("_", " ")
    if scene.profile:
        low, high = scene.profile[0], scene.profile[-1]
        across = f"final level{' of every asset' if len(scene.fans) > 1 else ''}, % of {base or 'today'}"
        said = (f"Undiscounted payments in {unit} where every asset moves along a straight line to one final "
                f"performance: {low[1]:.4g} at {low[0]:.4g} %, {high[1]:.4g} at {high[0]:.4g} %.")
        title = "paid in all, by final performance"
        yield Picture(title, curve(title, said, scene.profile, across, f"paid, {unit}", scene.marked),
                      "Undiscounted, if every asset moves along a straight line from today's level to this one; other "
                      "paths to the same end may pay otherwise.")
    for each in scene.fans:
        yield _fan(each, scene, f"% of {base}" if base else "level")
    if scene.left_out:
        said = f"No picture of {', '.join(scene.left_out)}: a page has room for {MOST_FANS}."
        yield Notes("other assets", (said,))


def _fan(each: Fan, scene: Scene, unit: str) -> Picture:
    ends = ", ".join(f"{100 * share:g} % below {each.quantiles[share][-1]:.4g}" for share in sorted(each.quantiles))
    seen = ", ".join(f"{one.name} from {one.points[0][1]:.4g} to {one.points[-1][1]:.4g}" for one in each.barriers)
    said = f"Quantiles of {each.name} in the model, {unit}; at the end {ends}." + (
        f" The contract looks at: {seen}." if seen else "")
    drawn = "Shaded: half and nine tenths of all paths; solid: the median" + (
        "; broken: what the contract compares with." if seen else ".")
    return Picture(f"how far {each.name} may go (risk-neutral, not a forecast)",
                   fan(f"how far {each.name} may go", said, each, scene.ticks, unit), drawn)


def model_table(found: ModelBracketResult | None, scale: Scale, standard_error: float) -> Iterator[Table]:
    """The price at the vol of each level that the contract refers to, where the market states vols by strike."""
    if found is not None:
        rows, left = cut(list(model_rows(found, scale, standard_error)), MOST_ROWS)
        why = " ".join(f"Indicative only: {text}." for text in found.indicative)
        yield Table("model bracket, apart from sampling and inputs", (*HEADS, scale.unit, "error"), rows,
                    note=" ".join(filter(None, (why, left))))


def evidence(scene: Scene) -> Iterator[Facts | Notes]:
    """The contract's terms, the inputs, where both were read, and how to find the number again."""
    yield Facts("terms of the contract", scene.terms)
    yield Facts("market, as stated", scene.inputs)
    yield Notes("files and their SHA-256", tuple(f"{file}: {digest}" for file, digest in scene.sources))
    yield Notes("to repeat it", (scene.command,), kind="command")


def _legs(result: PriceResult, scale: Scale) -> Iterator[Picture | Table]:
    """Legs as bars and numbers; parts where they are not the legs under other names."""
    numbers = [(leg.price, leg.standard_error) for leg in result.legs]
    for title, found in (("legs", result.legs), ("parts", result.parts)):
        if found and (title == "legs" or [(each.price, each.standard_error) for each in found] != numbers):
            rows = tuple(amounts(found, result, scale))
            if len(found) > 1:
                yield from leg_bars(title, found, rows, scale)
            yield Table(f"{title} in numbers", (title[:-1], scale.unit, "std error", result.currency), rows)


def leg_bars(title: str, found: Sequence[Amount], rows: Sequence[tuple[str, ...]], scale: Scale) -> Iterator[Picture]:
    """Amounts beside one another, as they are written in their rows."""
    drawn = [Bar(row[0], scale.factor * each.price, scale.factor * each.standard_error, row[1])
             for row, each in zip(rows, found, strict=False)]
    said = f"In {scale.unit}: " + ", ".join(f"{bar.name} {bar.shown}" for bar in drawn) + "."
    yield Picture(f"{title}, {scale.unit}", bars(title, said, drawn))


def _kept(result: PriceResult, scale: Scale) -> Iterator[Table]:
    """What is owed already, and what a hedger is left with."""
    if result.owed:
        yield Table("owed already (part of the value)", owed_heads(result, scale), tuple(owed_rows(result, scale)),
                    words=3)
    if result.hedge:
        yield Table(HEDGED, ("traded on", scale.unit, "std error"), tuple(hedge_rows(result, scale)), note=HEDGE_NOTE)


def _probabilities(result: PriceResult, scene: Scene | None) -> Iterator[Picture | Table]:
    if not result.conditions and not result.ends:
        return
    shown = result.conditions[:COLUMNS]
    times = {words: time for time, words in scene.ticks} if scene else {}
    named = [(each.name, each.dates) for each in shown if len(each.dates) > 1]
    named += [("ends here", result.ends)] if len(result.ends) > 1 else []
    series = [Series(name, tuple((times[one.date], 100.0 * one.probability) for one in dates if one.date in times))
              for name, dates in named]
    series = list({each.points: each for each in reversed(series) if len(each.points) > 1}.values())[::-1]
    if series:
        said = "Percent of paths: " + "; ".join(
            f"{each.name} from {each.points[0][1]:.3g} to {each.points[-1][1]:.3g}" for each in series) + "."
        yield Picture(PROBABILITIES, lines("probabilities by date", said, series, scene.ticks, "% of paths"))
    rows, left = cut([tuple(row) for row in by_date(shown, result if result.ends else None)], MOST_ROWS)
    heads = ("", *(each.name for each in shown), *(["ends here"] if result.ends else []))
    yield Table("probabilities in numbers", heads, rows, note=left)


def _checks(result: PriceResult, scale: Scale) -> Iterator[Picture | Table]:
    stages = [Bar(f"{stage.paths:,} paths", scale.factor * stage.price, scale.factor * stage.standard_error, "")
              for stage in result.checks.convergence]
    if len(stages) > 1:
        said = f"95 % intervals in {scale.unit}: " + ", ".join(
            f"{stage.name} {stage.value:.6g} ± {1.96 * stage.error:.2g}" for stage in stages) + "."
        yield Picture("check: price as paths are added",
                      intervals("price as paths are added", said, stages, scale.unit))
    if result.checks.martingale:
        yield Table("check: mean level over forward", ("asset", "on", "ratio", "std error", "z"), tuple(
            (test.asset, test.date, f"{test.mean_over_forward:.6f}", f"{test.standard_error:.6f}", f"{test.z:+.2f}")
            for test in result.checks.martingale), words=2)
