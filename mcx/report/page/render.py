"""From results to HTML: a whole page, or the piece that a notebook shows."""

from __future__ import annotations

import re
from collections.abc import Sequence
from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING

from mcx.faults import RequestError
from mcx.report.greek_results import GreeksResult, GreeksTable
from mcx.report.method_results import MethodsResult, MethodsTable
from mcx.report.page.blocks import Sheet
from mcx.report.page.greeks_sheet import greeks_sheet
from mcx.report.page.methods_sheet import methods_sheet
from mcx.report.page.price_sheet import price_sheet
from mcx.report.page.verify_sheet import verify_sheet
from mcx.report.pictures.palette import variables
from mcx.report.results import PriceResult, PriceTable, Result
from mcx.report.scene import Scene
from mcx.report.verify_results import VerifyResult, VerifyTable

if TYPE_CHECKING:
    from markupsafe import Markup

FOOTER = ("An estimate on the inputs shown and the user's reading of the terms, to be reviewed by a licensed "
          "professional under local rules; not advice and not an offer.")
DATE = re.compile("[0-9]{4}-[0-9]{2}-[0-9]{2}")
SHEETS = {PriceResult: price_sheet, GreeksResult: greeks_sheet, VerifyResult: verify_sheet,
          MethodsResult: methods_sheet}
ROWS = {PriceTable: "prices", GreeksTable: "contracts", VerifyTable: "quotes", MethodsTable: "contracts"}


def sheets(results: Sequence[Result], scenes: Sequence[Scene | None]) -> list[Sheet]:
    """One for each result, beside its surroundings."""
    return [SHEETS[type(result)](result, scene) for result, scene in zip(results, scenes, strict=True)]


def page(title: str, found: Sequence[Sheet]) -> str:
    """A page of its own; where there are several sheets their answers stand before them."""
    return _render(title, found, whole=True)


def piece(result: Result) -> str | None:
    """What a notebook shows of a result: its sheet, or those of a table's contracts; None where it has none."""
    found = getattr(result, ROWS[type(result)]) if type(result) in ROWS else (result,)
    if any(type(each) not in SHEETS for each in found):
        return None
    return _render("", sheets(found, [None] * len(found)), whole=False)


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
    environment.filters["joined"] = _joined
    template = environment.get_template("page.html")
    style = variables() + _read("page.css")
    return template.render(title=title, sheets=sheets, whole=whole, style=style, footer=FOOTER)


def _joined(text: str) -> Markup:
    """Escaped; a number and its percent sign, the sides of a '±' and a date stay on one line."""
    from markupsafe import Markup, escape

    told = text.replace(" %", "\N{NO-BREAK SPACE}%").replace(" ± ", "\N{NO-BREAK SPACE}±\N{NO-BREAK SPACE}")
    return Markup(DATE.sub(r'<span class="one">\g<0></span>', str(escape(told))))


def _read(name: str) -> str:
    return resources.files("mcx.report.page").joinpath(name).read_text(encoding="utf-8")
