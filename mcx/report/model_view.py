"""The model bracket in a terminal, for `mcx price` and `mcx verify`."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from mcx.report.model_results import ModelBracketResult, StrikeAsset, StrikePrice
from mcx.report.price_scale import Scale
from mcx.report.terminal import Page

HEADS = ("vols of", "vol")
MOST_ASSETS = 4  # named in a row; more are in --json


def model_places(found: ModelBracketResult, scale: Scale, standard_error: float) -> int:
    """Decimals by the larger error: that of the price or of a difference from it."""
    return scale.places(max([standard_error, *(one.difference_standard_error for one in found.strikes)]))


def model_line(found: ModelBracketResult, scale: Scale, standard_error: float) -> str:
    """'102.43 to 104.40 %; the headline takes the vol of 100% of the spot': one line beside a price."""
    if found.lower is None:
        return f"none: the price refers to no level; the headline takes {_headline(found)}"
    places = model_places(found, scale, standard_error)
    low, high = scale.show(found.lower, places), scale.show(found.upper, places)
    tail = "; indicative only" if found.indicative else ""
    outside = ", which is no level of the contract, and lies outside" if found.headline_outside else ""
    return (f"{low} to {high}{scale.sign} by the vols of the levels that the contract refers to{tail}; the headline "
            f"takes {_headline(found)}{outside}")


def show_model(found: ModelBracketResult, scale: Scale, standard_error: float, page: Page) -> None:
    """The price at the vol of each level, what skew does at jumps, and how far the bracket may be trusted."""
    page.heading("model bracket (apart from sampling and inputs)")
    page.table(HEADS + (scale.unit, "error"), model_rows(found, scale, standard_error), words=1)
    if found.strikes:
        page.line(f"  errors are those of the difference from the headline price, on the same {found.paths:,} paths")
    if found.exact:
        beyond = any(each.beyond for one in found.strikes for each in one.assets)
        page.line("  every payment depends on one level of one date: at the vols of its own strikes the price needs no "
                  "model of levels, only the vols between the strikes that are quoted"
                  f"{', and beyond them, where they are taken as flat' if beyond else ''}")
    if found.indicative:
        page.line("  indicative only:")
        page.items(found.indicative)


def model_rows(found: ModelBracketResult, scale: Scale, standard_error: float) -> Iterator[tuple[str, str, str, str]]:
    """Every price that the bracket spans, under `HEADS`, the unit of the price and 'error'."""
    places = model_places(found, scale, standard_error)
    for one in found.strikes:
        vols = ", ".join(f"{100.0 * each.vol:.2f} %" for each in one.assets[:MOST_ASSETS])
        yield _level(one), vols, scale.show(one.price, places), scale.show(one.difference_standard_error, places)
        for side, price, error in _sides(one.skewed, one.skewed_standard_errors, scale, places):
            yield f"  its jump with the slope of vol{side}", "", price, error
    for end, price, _ in _sides(found.strip, (0.0,) * len(found.strip), scale, places, (", lowest", ", highest")):
        yield f"each strike its own, with the slopes of vol{end}", "", price, ""


def _sides(prices: Sequence[float], errors: Sequence[float], scale: Scale, places: int,
           names: tuple[str, str] = (" below", " above")) -> list[tuple[str, str, str]]:
    """A price with the slope of vol on each side of a strike; once where both are the same within the error."""
    shown = [(scale.show(price, places), scale.show(error, places))
             for price, error in zip(prices, errors, strict=True)]
    if shown and (shown[0][0] == shown[-1][0] or abs(prices[0] - prices[-1]) <= errors[0]):
        return [("", *shown[0])]
    return [(side, *each) for side, each in zip(names, shown, strict=True)] if shown else []


def _level(one: StrikePrice) -> str:
    shown = ", ".join(_strike(each, one.forward_start) for each in one.assets[:MOST_ASSETS])
    more = f" and {len(one.assets) - MOST_ASSETS} more" if len(one.assets) > MOST_ASSETS else ""
    return f"{shown}{more}"


def _strike(each: StrikeAsset, forward_start: bool) -> str:
    if forward_start:
        return f"{each.asset} as of {each.strike or f'{each.level:,.8g}'}, of one to come"
    if not each.strike:
        return f"{each.asset} {each.level:,.8g} (one vol)"
    beyond = ", beyond the strikes given" if each.beyond else ""
    return f"{each.asset} {each.level:,.8g} ({each.strike}{beyond})"


def _headline(found: ModelBracketResult) -> str:
    own = [each for each in found.headline if each.strike]
    return ", ".join(f"the {100.0 * each.vol:.2f} % of {each.asset} at {each.strike}" for each in own)
