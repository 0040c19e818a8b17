"""The sheet of sensitivities."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator

from mcx.report.greek_results import Greek, GreeksResult
from mcx.report.greek_view import JUMPS, greek_row, move, points, refused, rung_row
from mcx.report.page.blocks import LEFT_OUT, Facts, Picture, Sheet, Table, cut, few, notes
from mcx.report.page.price_sheet import INTERVALS, evidence, surroundings
from mcx.report.pictures.draw import Bar, bars, curve
from mcx.report.price_scale import Scale
from mcx.report.price_view import bounds
from mcx.report.scene import Scene
from mcx.report.terminal import decimals, fixed

MOST_ROWS, MOST_GROUPS, MOST_BARS, MOST_DELTAS, MOST_VOLS = 40, 3, 12, 4, 11
MOST_SAID = 6


def greeks_sheet(result: GreeksResult, scene: Scene | None) -> Sheet:
    """The sensitivities with their errors, in pictures by kind and in numbers; then the ladder and the choices."""
    percent = result.notional is not None
    factor, unit = (100.0, "%") if percent else (1.0, f"{result.currency} per unit")
    places = decimals(result.standard_error * factor, 2, 2 if percent else 4)
    price = f"{fixed(result.price * factor, places)} {unit}"
    head = (("contract", f"{result.contract} ({result.payoff})"), ("valued on", result.valuation or "time 0"),
            ("price", f"{price}, standard error {fixed(result.standard_error * factor, places)}"),
            *([("bounds", f"{bounds(result, Scale(result))}; sensitivities are those of the middle")]
              if result.bracket else []),
            ("paths", f"{result.paths:,} in {result.seconds:.2f} s; asked for: {result.planned.asked}"),
            ("seed", f"{result.seed}; variance reduction: {result.reduction}; estimator: {result.estimator}"))
    blocks = [Facts("valuation", head), *_pictures(result), *_numbers(result), *_curve(result, factor, unit, places)]
    moved = result.ladder or result.grid  # then the levels to come and what is paid are left to the page of the price
    blocks += surroundings(scene, unit) if scene and not moved else ()
    blocks += [*_ladder(result, factor, places, unit), *_grid(result, factor, unit, places)]
    jumps = [f"{jump.kind} at {jump.place or 'an unnamed place'}" for jump in result.jumps]
    blocks += notes(("not given", few(list(refused(result)), MOST_SAID)), (JUMPS, few(jumps, MOST_SAID)),
                    ("choice of estimators", few(result.choices, MOST_SAID)), ("warnings", result.warnings),
                    ("assumptions", result.assumptions or ("none",)))
    blocks += evidence(scene) if scene else ()
    blocks += notes(("not in the model", result.limits), ("read it with care", result.cautions))
    interrupted = "Interrupted: the estimates so far. " if result.interrupted else ""
    below = f"{interrupted}Errors are those of sampling only. {INTERVALS}"
    return Sheet(result.contract, f"Sensitivities at {price}", below, tuple(blocks))


def _pictures(result: GreeksResult) -> Iterator[Picture]:
    """One picture for each kind of sensitivity in one unit, with the largest; single numbers are left to the table.
    Deltas for 1 of each asset's own level cannot be held against each other and have none."""
    groups: dict[tuple[str, str], list[Greek]] = {}
    for greek in result.greeks:
        groups.setdefault((greek.name, greek.unit), []).append(greek)
    shown = [group for group in groups.items() if len(group[1]) > 1 and group[0][0] != "delta"]
    for (name, unit), found in shown[:MOST_GROUPS - bool(result.ladder) - bool(result.grid)]:
        rows = [Bar(" ".join(filter(None, (each.asset, each.tenor))), each.value, each.standard_error,
                    fixed(each.value, decimals(each.standard_error, 2, 2)))
                for each in _largest(found)]
        said = f"In {unit}: " + ", ".join(f"{row.name} {row.shown}" for row in rows) + "."
        yield Picture(f"{name}, {unit}", bars(name, said, rows))


def _largest(found: list[Greek]) -> list[Greek]:
    """Those that there is room for, in their order."""
    kept = {id(each) for each in sorted(found, key=lambda each: -abs(each.value))[:MOST_BARS]}
    return [each for each in found if id(each) in kept]


def _numbers(result: GreeksResult) -> Iterator[Table]:
    """Every sensitivity, the commonest estimator in the note; then what a revaluation says."""
    usual = Counter(each.estimator for each in result.greeks).most_common(1)
    usual = usual[0][0] if usual else ""
    rows, left = cut([greek_row(each, "" if each.estimator == usual else each.estimator) for each in result.greeks],
                     MOST_ROWS)
    yield Table("sensitivities (sampling error only)", ("", "value", "error", "unit", "by"), rows, tail=3,
                note="; ".join(filter(None, (usual and f"by {usual} where nothing else is said", left))), wide=True)
    if result.comparison:
        rows, left = cut([greek_row(each, "") for each in result.comparison], MOST_ROWS)
        yield Table("for comparison: revaluation on the same random numbers", ("", "value", "error", "unit", ""), rows,
                    tail=3, note="; ".join(filter(None, ("biased by the size of the move", left))), wide=True)


def _curve(result: GreeksResult, factor: float, unit: str, places: int) -> Iterator[Picture]:
    """The price along a ladder."""
    if len(result.ladder) > 1:
        points = tuple((100.0 * rung.spot_move, factor * rung.price) for rung in result.ladder)
        said = f"Price in {unit} as spots move: " + ", ".join(
            f"{move(rung.spot_move)} {fixed(factor * rung.price, places)}" for rung in result.ladder) + "."
        title = f"price, {_moved(result)}"
        yield Picture(title, curve(title, said, points, "move of spots, %", f"price, {unit}"))


def _moved(result: GreeksResult) -> str:
    return "spots moved together" if not result.assets else f"only {', '.join(result.assets)} moved"


def _ladder(result: GreeksResult, factor: float, places: int, unit: str) -> Iterator[Table]:
    """The rungs in numbers, with the deltas of as many assets as there is room for."""
    if result.ladder:
        few = result.ladder[0].deltas[:MOST_DELTAS]
        rows = [rung_row(rung, factor, places) for rung in result.ladder]
        heads = ("spot", unit, f"change, {result.currency}", "error", *(f"delta {each.asset}" for each in few), "")
        yield Table(f"{_moved(result)}, in numbers", heads, tuple((*row[:4 + len(few)], row[-1]) for row in rows),
                    tail=len(heads) - 1, note="The same random numbers on every rung.", wide=True)


def _grid(result: GreeksResult, factor: float, unit: str, places: int) -> Iterator[Table]:
    """The price by moves of spots and vols: as many vols as fit, evenly over their range."""
    vols = result.vol_moves
    if not result.grid:
        return
    at = {(point.spot_move, point.vol_move): point for point in result.grid}
    rows = tuple((move(spot), *("none" if at[spot, vol].refused else fixed(at[spot, vol].price * factor, places)
                                for vol in vols[:MOST_VOLS])) for spot in result.spot_moves)
    left = [f"{LEFT_OUT.format(len(vols) - MOST_VOLS)} moves of vols"] if len(vols) > MOST_VOLS else []
    refused_ = dict.fromkeys(f"vol {points(point.vol_move)}, spot {move(point.spot_move)}: {point.refused}"
                             for point in result.grid if point.refused)
    yield Table(f"price in {unit} by moves of spots (down) and vols (across)",
                ("spot", *(f"vol {points(vol)}" for vol in vols[:MOST_VOLS])), rows,
                note="; ".join(("the same random numbers everywhere", *left, *refused_)), wide=True)
