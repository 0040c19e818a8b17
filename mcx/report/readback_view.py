"""The terminal views of `mcx readback`, `mcx payoffs` and `mcx replay`."""

from __future__ import annotations

from mcx.report.results import Library, MarketDate, PathResult, Readback, Replay
from mcx.report.terminal import Page, fixed

ASSETS = 2  # beside one another in the market table


def show_readback(result: Readback, page: Page) -> None:
    """What the contract says: sentences first, then everything by date."""
    page.line(result.contract, style="bold")
    page.line(f"{result.payoff}: {result.about}" if result.about else result.payoff)
    page.line()
    page.named((fact.name, fact.text) for fact in result.facts)
    page.heading("terms")
    page.named((term.name, f"{term.value}{f'  ({term.about})' if term.about else ''}") for term in result.terms)
    for title, sentences in (("names", result.lets), ("running values", result.running)):
        if sentences:
            page.heading(title)
            page.named((sentence.name, sentence.text) for sentence in sentences)
    page.heading("events, in this order on each date")
    for number, event in enumerate(result.events, start=1):
        page.line(f"{number}. {event.name}", style="bold")
        page.items((" ".join((event.text, *event.ends_here)),), sign=" ")
    if result.watches:
        page.heading("watches")
        page.items(f"{watch.name}, {watch.when}: {watch.law} ({watch.reason})" for watch in result.watches)
    page.heading("everything that is observed, decided and paid")
    page.table(("date", "no.", "what", "terms of the date", "paid on"), (
        (line.date, str(line.nth) if line.nth else "", line.what, line.terms, line.paid) for line in result.dates),
        words=5)
    if result.warnings:
        page.heading("warnings")
        page.items(result.warnings)
    if result.assumptions:
        page.heading("assumptions")
        page.items(result.assumptions)
    if result.quotes:
        page.heading("the market today")
        page.named((quote.name, quote.text) for quote in result.quotes)
    if result.market:
        _market(result.market, page)
    if result.path:
        _path(result, result.path, page)


def _market(dates: tuple[MarketDate, ...], page: Page) -> None:
    page.heading("discount factors")
    page.table(("date", "discount factor", "with funding"), (
        (line.date, f"{line.discount_factor:.8f}", f"{line.funded_discount_factor:.8f}") for line in dates))
    observed = [line for line in dates if line.assets]
    names = [asset.asset for asset in observed[0].assets] if observed else []
    page.heading("forwards, and vols from the valuation date")
    for first in range(0, len(names), ASSETS):
        heads = [head for name in names[first:first + ASSETS] for head in (name, "vol")]
        page.table(("date", *heads), (
            [line.date, *(cell for asset in line.assets[first:first + ASSETS]
                          for cell in (fixed(asset.forward, 4), fixed(100.0 * asset.vol, 4, "%")))]
            for line in observed))


def _path(result: Readback, path: PathResult, page: Page) -> None:
    page.heading("on the given levels")
    page.items(path.notes)
    page.table(("paid on", "leg", "amount", "in currency"), [
        *((each.date, each.leg, f"{each.amount:.10g}", fixed(each.value, 2)) for each in path.payments),
        ("sum", "undiscounted", f"{path.total:.10g}", fixed(sum(each.value for each in path.payments), 2)),
    ], words=2)
    for condition in path.conditions:
        on = f" on {', '.join(condition.dates)}" if condition.dates else ""
        page.line(f"  {condition.name}: {'yes' if condition.held else 'no'}{on}")
    page.line(f"  ended early: {path.ended or 'no'}")


def show_library(library: Library, page: Page) -> None:
    """Every definition with a line about it."""
    page.named((each.name, each.about) for each in library.payoffs)
    page.line()
    page.line("mcx payoffs NAME prints one in full; with --blank --assets a,b a contract and market to fill in")


def show_replay(replay: Replay, page: Page) -> None:
    """Identical, or the first difference."""
    page.line("identical" if replay.identical else "not identical", style="bold")
    facts = [("largest difference", f"{replay.largest_difference:.3g}")]
    if replay.first_difference:
        facts.append(("first difference", f"{replay.first_difference}: {replay.stored} stored, {replay.found} found"))
    page.named(facts)
    if replay.changed:
        page.heading("not as it was when the record was written")
        page.items(replay.changed)
