"""The sheet of sensitivities."""

from __future__ import annotations

from collections.abc import Iterator

from mcx.report.greek_results import Greek, GreeksResult
from mcx.report.greek_view import greek_row, move
from mcx.report.page.blocks import Facts, Picture, Sheet, Table, cut, notes
from mcx.report.page.price_sheet import INTERVALS, evidence, surroundings
from mcx.report.pictures.draw import Bar, bars, curve
from mcx.report.scene import Scene
from mcx.report.terminal import decimals, fixed

MOST_ROWS, MOST_GROUPS = 40, 6


def greeks_sheet(result: GreeksResult, scene: Scene | None) -> Sheet:
    """The sensitivities with their errors, in pictures by kind and in numbers; then the ladder and the choices."""
    percent = result.notional is not None
    factor, unit = (100.0, "%") if percent else (1.0, f"{result.currency} per unit")
    places = decimals(result.standard_error * factor, 2, 2 if percent else 4)
    price = f"{fixed(result.price * factor, places)} {unit}"
    head = (("contract", f"{result.contract} ({result.payoff})"), ("valued on", result.valuation or "time 0"),
            ("price", f"{price}, standard error {fixed(result.standard_error * factor, places)}"),
            ("paths", f"{result.paths:,} in {result.seconds:.2f} s; asked for: {result.planned.asked}"),
            ("seed", f"{result.seed}; variance reduction: {result.reduction}; estimator: {result.estimator}"))
    rows, left = cut([greek_row(each, each.estimator) for each in result.greeks], MOST_ROWS)
    blocks = [Facts("valuation", head), *_pictures(result),
              Table("sensitivities (sampling error only)", ("", "value", "error", "unit", "by"), rows, tail=3,
                    note=left)]
    blocks += _ladder(result, factor, unit, places)
    blocks += surroundings(scene, unit) if scene else ()
    refused = [f"{' '.join(filter(None, (each.name, each.asset, each.tenor)))}: {each.reason}"
               for each in result.refused]
    blocks += notes(("not given", refused), ("choice of estimators", result.choices), ("warnings", result.warnings),
                    ("assumptions", result.assumptions or ("none",)))
    blocks += evidence(scene) if scene else ()
    blocks += notes(("not in the model", result.limits), ("read it with care", result.cautions))
    interrupted = "Interrupted: the estimates so far. " if result.interrupted else ""
    return Sheet(result.contract, f"Sensitivities at {price}", f"{interrupted}Errors are those of sampling only.",
                 tuple(blocks))


def _pictures(result: GreeksResult) -> Iterator[Picture]:
    """One picture for each kind of sensitivity in one unit; single numbers are left to the table."""
    groups: dict[tuple[str, str], list[Greek]] = {}
    for greek in result.greeks:
        groups.setdefault((greek.name, greek.unit), []).append(greek)
    for (name, unit), found in [group for group in groups.items() if len(group[1]) > 1][:MOST_GROUPS]:
        rows = [Bar(" ".join(filter(None, (each.asset, each.tenor))), each.value, each.standard_error,
                    fixed(each.value, decimals(each.standard_error, 2, 2))) for each in found]
        said = f"In {unit}: " + ", ".join(f"{row.name} {row.shown}" for row in rows) + "."
        yield Picture(f"{name}, {unit}", bars(name, said, rows), INTERVALS)


def _ladder(result: GreeksResult, factor: float, unit: str, places: int) -> Iterator[Picture | Table]:
    if len(result.ladder) < 2:
        return
    points = tuple((100.0 * rung.spot_move, factor * rung.price) for rung in result.ladder)
    said = f"Price in {unit} as all spots move together: " + ", ".join(
        f"{move(rung.spot_move)} {fixed(factor * rung.price, places)}" for rung in result.ladder) + "."
    yield Picture("spots moved together", curve("spots moved together", said, points, "move of all spots, %", unit),
                  "The same random numbers on every rung.")
    yield Table("spots moved together, in numbers", ("spot", unit, "change", "error"), tuple(
        (move(rung.spot_move), fixed(rung.price * factor, places), fixed(rung.change, 2),
         fixed(rung.change_standard_error, 2)) for rung in result.ladder))
