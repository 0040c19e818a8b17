"""`mcx methods`."""

from __future__ import annotations

from typing import TYPE_CHECKING

from mcx.api.request import made_ready, read_request
from mcx.api.sampling import File, Notice, means_of, sampling_of
from mcx.faults import RequestError

if TYPE_CHECKING:
    from mcx.report.method_results import MethodsResult, MethodsTable

METHOD_SECONDS = 1.0  # for each choice of methods, where nothing is asked


def methods(
    *files: File,
    paths: int | None = None,
    seconds: float | None = None,
    seed: int | None = None,
    threads: int | None = None,
    picture: File | None = None,
    notice: Notice | None = None,
) -> MethodsResult | MethodsTable:
    """Which variance reduction pays on every contract in the files: one result, or a table of several.

    Every choice of methods that applies runs for `seconds` (1 without), or for `paths`. `picture` names a file, .png or
    .svg, to draw the error against time in, for one contract. Raises InputError, RequestError, Refusal.
    """
    asked_for_none = paths is None and seconds is None
    sampling = sampling_of(paths, None, METHOD_SECONDS if asked_for_none else seconds, seed)
    means = means_of(threads, notice=notice)
    if picture is not None:
        from mcx.report.picture import check_picture

        check_picture(picture)
    made, dated = read_request(files, with_market=True)
    if picture is not None and len(dated) > 1:
        raise RequestError(f"a picture shows one contract; the files hold {len(dated)}")
    from mcx.estimators.finite import finite
    from mcx.estimators.reduction.comparison import compare
    from mcx.estimators.reduction.scheme import Case
    from mcx.report.method_results import MethodsTable
    from mcx.report.method_summary import methods_result

    asked, results = sampling.precision, []
    for ready in made_ready(made, dated):
        with finite(ready):
            case = Case(ready, sampling.seed, means.threads, means.notice)
            found, refused = compare(case, asked.seconds, asked.paths)
        results.append(methods_result(ready, made.market, found, refused, sampling.seed, asked.words))
    if picture is not None:
        from mcx.report.picture import draw_methods

        draw_methods(results[0], picture)
    return results[0] if len(results) == 1 else MethodsTable(tuple(results))
