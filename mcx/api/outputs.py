"""What a verb writes beside its result: a valuation record, a page, pictures; checked before the work begins."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from mcx.api.request import sources
from mcx.api.sampling import File
from mcx.faults import RequestError

if TYPE_CHECKING:
    from mcx.checked.load import Request
    from mcx.estimators.ready import Ready
    from mcx.report.page.blocks import Sheet
    from mcx.report.results import Result


@dataclass(frozen=True, slots=True)
class Outputs:
    """The files that were asked for: a record, a page of HTML, and the pictures of that page as .png or .svg."""

    record: File | None = None
    report: File | None = None
    picture: File | None = None


def outputs_of(record: File | None = None, report: File | None = None, picture: File | None = None) -> Outputs:
    """Raises RequestError where one of the files could not be written."""
    if record is not None:
        from mcx.report.record import check_free

        check_free(record)
    if report is not None:
        from mcx.report.page.render import check_writable

        check_writable(report)
    if picture is not None:
        from mcx.report.pictures.file import check_picture

        check_picture(picture)
    return Outputs(record, report, picture)


def check_one(wanted: Outputs, count: int, what: str) -> None:
    """Raises RequestError where pictures are asked for of several results: a file shows one."""
    if wanted.picture is not None and count > 1:
        raise RequestError(f"a picture shows one {what}; the files hold {count}")


def write_outputs(
    verb: str,
    files: Sequence[File],
    made: Request,
    contracts: Sequence[Ready],
    results: Sequence[Result],
    wanted: Outputs,
) -> None:
    """Everything that was asked for; raises RequestError."""
    if wanted.record is not None:
        from mcx.report.record import make_record, write_record

        write_record(wanted.record, make_record(sources(made), [each.to_dict() for each in results], verb))
    if wanted.report is None and wanted.picture is None:
        return
    found = _sheets(verb, files, made, contracts, results)
    if wanted.report is not None:
        from mcx.report.page.render import page, write_page

        write_page(wanted.report, page(f"mcx {verb}", found))
    if wanted.picture is not None:
        from mcx.report.pictures.file import write_pictures

        sheet, = found
        write_pictures(wanted.picture, sheet.title, sheet.answer, sheet.pictures)


def _sheets(
    verb: str,
    files: Sequence[File],
    made: Request,
    contracts: Sequence[Ready],
    results: Sequence[Result],
) -> list[Sheet]:
    """What was found beside its surroundings, with the command that finds it again."""
    from mcx.report.page.render import sheets
    from mcx.report.repeat import command
    from mcx.report.scene import scene

    ready = {each.dated.contract.title: each for each in contracts}
    documents = sources(made)
    return sheets(results, [scene(ready[result.contract], documents, command(verb, files, result))
                            for result in results])
