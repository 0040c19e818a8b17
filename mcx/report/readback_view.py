"""The terminal views of `mcx readback`, `mcx payoffs` and `mcx replay`."""

from __future__ import annotations

from mcx.report.results import Library, MarketDate, PathResult, Readback, Replay
from mcx.report.state_results import CalendarView, Fixed, StateView
from mcx.report.terminal import Page, fixed

LATEST = 20  # dates with fixings that are shown
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
    if result.state:
        _state(result.state, page)
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


def _state(state: StateView, page: Page) -> None:
    """What has become of the contract; nothing where nothing has happened yet but the distances."""
    page.heading(f"state on {state.valuation}")
    if state.not_followed:
        page.line("not followed, since the contract cannot be valued:")
        page.items(state.not_followed)
    if state.ended:
        page.line(f"ended on {state.ended}", style="bold")
    if state.past:
        page.table(("date", "what", "happened"), (
            (each.date, each.what, each.happened) for each in state.past), words=3)
    if state.stated:
        page.heading("stated by the contract, not computed: as of the close of the date")
        page.table(("date", "what", "value"), ((each.date, each.what, each.value) for each in state.stated), words=2)
    if state.fixings:
        _fixings(state.fixings, page)
    if state.running:
        page.heading("running values so far")
        page.named((each.name, each.text) for each in state.running)
    if state.paid or state.owed:
        page.heading("paid and owed")
        page.table(("date", "leg", "", "amount", "in currency"), [
            *((each.date, each.leg, "paid", f"{each.amount:.10g}", fixed(each.value, 2)) for each in state.paid),
            *((each.date, each.leg, "owed", f"{each.amount:.10g}", fixed(each.value, 2)) for each in state.owed),
        ], words=3)
    page.items(state.to_deliver)
    if state.accrued:
        page.line(f"  accrued: {state.accrued:.10g}")
    if state.next:
        page.heading("next")
        page.named((each.name, each.text) for each in state.next)
    if state.distances:
        page.heading("distance of today's levels to those that matter")
        page.table(("what", "next on", "asset", "level", "today", "distance"), (
            (each.what, each.date, each.asset, f"{each.level:.6g}", f"{each.today:.6g}",
             fixed(100.0 * each.distance, 2, "%")) for each in state.distances), words=3)


def _fixings(fixings: tuple[Fixed, ...], page: Page) -> None:
    """The latest fixings that were read, a line for each date."""
    dates = list(dict.fromkeys(each.date for each in fixings))
    names = list(dict.fromkeys(each.asset for each in fixings))
    levels = {(each.date, each.asset): f"{each.level:.10g}" for each in fixings}
    left = f" (the last {LATEST} of {len(dates)} dates; all of them: --json)" if len(dates) > LATEST else ""
    page.heading(f"fixings used, as they count{left}")
    page.table(("date", *names), (
        [date, *(levels.get((date, name), "") for name in names)] for date in dates[-LATEST:]))


def show_calendar(result: CalendarView, page: Page) -> None:
    """Everything to come, in order of time."""
    page.table(("date", "contract", "what", "of"), (
        (each.date, each.contract, each.kind, each.of) for each in result.lines), words=4)
    page.items(f"holidays as listed by {version}" for version in result.calendar_versions)


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
