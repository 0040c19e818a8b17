"""From results to HTML: a whole page, or the piece that a notebook shows."""

from __future__ import annotations

from collections.abc import Sequence
from importlib import resources
from pathlib import Path

from mcx.faults import RequestError
from mcx.report.greek_results import GreeksResult, GreeksTable
from mcx.report.page.blocks import Sheet
from mcx.report.page.greeks_sheet import greeks_sheet
from mcx.report.page.price_sheet import price_sheet
from mcx.report.page.verify_sheet import verify_sheet
from mcx.report.results import PriceResult, PriceTable, Result
from mcx.report.scene import Scene
from mcx.report.verify_results import VerifyResult, VerifyTable

FOOTER = ("An estimate on the inputs shown and the user's reading of the terms, to be reviewed by a licensed "
          "professional under local rules; not advice and not an offer.")
SHEETS = {PriceResult: price_sheet, GreeksResult: greeks_sheet, VerifyResult: verify_sheet}


def page(title: str, results: Sequence[Result], scenes: Sequence[Scene]) -> str:
    """A page of its own with one sheet for each result, beside its surroundings."""
    sheets = [SHEETS[type(result)](result, scene) for result, scene in zip(results, scenes, strict=True)]
    return _render(title, sheets, whole=True)


def piece(result: Result) -> str | None:
    """What a notebook shows of a result: its sheet, or those of a table's contracts; None where it has none."""
    results = {PriceTable: "prices", GreeksTable: "contracts", VerifyTable: "quotes"}.get(type(result))
    found = getattr(result, results) if results else (result,)
    if any(type(each) not in SHEETS for each in found):
        return None
    return _render("", [SHEETS[type(each)](each, None) for each in found], whole=False)


def check_writable(file: str | Path) -> None:
    """Raises RequestError where a page could not be written: found out before the work, not after."""
    target = Path(file)
    if target.is_dir():
        raise RequestError(f"{target}: this is a folder; expected the name of a file for the report")
    if not target.parent.is_dir():
        raise RequestError(f"{target}: there is no folder '{target.parent}'")


def write_page(file: str | Path, text: str) -> None:
    """Writes a page; raises RequestError if that cannot be."""
    try:
        Path(file).write_text(text, encoding="utf-8")
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise RequestError(f"{file}: the report cannot be written: {reason}") from None


def _render(title: str, sheets: Sequence[Sheet], whole: bool) -> str:
    """The template on sheets; all text is escaped, pictures are our own markup."""
    from jinja2 import Environment, FunctionLoader, StrictUndefined

    environment = Environment(loader=FunctionLoader(_read), autoescape=True, undefined=StrictUndefined)
    template = environment.get_template("page.html")
    return template.render(title=title, sheets=sheets, whole=whole, style=_read("page.css"), footer=FOOTER)


def _read(name: str) -> str:
    return resources.files("mcx.report.page").joinpath(name).read_text(encoding="utf-8")
