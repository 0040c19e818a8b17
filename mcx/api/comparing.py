"""`mcx methods`."""

from __future__ import annotations

from typing import TYPE_CHECKING

from mcx.api.outputs import check_one, outputs_of, write_outputs
from mcx.api.request import made_ready, read_request
from mcx.api.sampling import File, Notice, means_of, sampling_of

if TYPE_CHECKING:
    from mcx.report.method_results import MethodsResult, MethodsTable

METHOD_SECONDS = 1.0  # for each choice of methods, where nothing is asked


def methods(
    *files: File,
    paths: int | None = None,
    seconds: float | None = None,
    seed: int | None = None,
    threads: int | None = None,
    report: File | None = None,
    picture: File | None = None,
    notice: Notice | None = None,
) -> MethodsResult | MethodsTable:
    """Which variance reduction pays on every contract in the files: one result, or a table of several.

    Every choice of methods that applies runs for `seconds` (1 without), or for `paths`. `report` names a file for a page
    of HTML, `picture` one (.png or .svg) for its picture, the error against time, of one contract. After an
    interruption the choices and contracts so far. Raises InputError, RequestError, Refusal, and KeyboardInterrupt if
    that comes before there is an estimate.
    """
    asked_for_none = paths is None and seconds is None
    sampling = sampling_of(paths, None, METHOD_SECONDS if asked_for_none else seconds, seed)
    means = means_of(threads, notice=notice)
    wanted = outputs_of(None, report, picture)
    made, dated = read_request(files, with_market=True)
    check_one(wanted, len(dated), "contract")
    from mcx.estimators.finite import finite
    from mcx.estimators.reduction.comparison import compare
    from mcx.estimators.reduction.scheme import Case
    from mcx.report.method_results import MethodsTable
    from mcx.report.method_summary import methods_result

    contracts = made_ready(made, dated)
    asked, results = sampling.precision, []
    for ready in contracts:
        try:
            with finite(ready):
                case = Case(ready, sampling.seed, means.threads, means.notice)
                compared = compare(case, asked.seconds, asked.paths)
        except KeyboardInterrupt:
            if not results:
                raise
            break
        results.append(methods_result(ready, made.market, compared, sampling.seed, asked.words))
        if compared.not_reached:
            break
    write_outputs("methods", files, made, contracts[: len(results)], results, wanted)
    left_out = tuple(each.contract.title for each in dated[len(results):])
    return results[0] if len(dated) == 1 else MethodsTable(tuple(results), left_out)
