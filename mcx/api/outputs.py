"""What a verb writes beside its result: a valuation record, and a page. Both are checked before the work begins."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from mcx.api.request import made_ready, sources
from mcx.api.sampling import File

if TYPE_CHECKING:
    from mcx.checked.load import Request
    from mcx.dates.dated_contract import DatedContract
    from mcx.report.results import Result


def check_outputs(record: File | None, report: File | None) -> None:
    """Raises RequestError where one of the files could not be written."""
    if record is not None:
        from mcx.report.record import check_free

        check_free(record)
    if report is not None:
        from mcx.report.page.render import check_writable

        check_writable(report)


def write_outputs(
    verb: str,
    files: Sequence[File],
    made: Request,
    dated: Sequence[DatedContract],
    results: Sequence[Result],
    record: File | None,
    report: File | None,
) -> None:
    """A record of what was found, and a page about it; raises RequestError."""
    if record is not None:
        from mcx.report.record import make_record, write_record

        write_record(record, make_record(sources(made), [each.to_dict() for each in results], verb))
    if report is not None:
        _write_report(report, verb, files, made, dated, results)


def _write_report(
    file: File,
    verb: str,
    files: Sequence[File],
    made: Request,
    dated: Sequence[DatedContract],
    results: Sequence[Result],
) -> None:
    """A page about what was found, with the command that finds it again."""
    from mcx.report.page.render import page, write_page
    from mcx.report.repeat import command
    from mcx.report.scene import scene

    wanted = {result.contract for result in results}
    ready = {each.dated.contract.title: each
             for each in made_ready(made, [each for each in dated if each.contract.title in wanted])}
    documents = sources(made)
    scenes = [scene(ready[result.contract], documents, command(verb, files, result)) for result in results]
    write_page(file, page(f"mcx {verb}", results, scenes))
