"""From files to contracts that can be valued: read, checked, dated, unrolled; every fault of all documents at once."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from mcx.api.sampling import File
from mcx.checked.load import Request, checked_request
from mcx.dates.dated_contract import DatedContract
from mcx.dates.dating import date_on
from mcx.faults import Fault, InputError, Place, RequestError
from mcx.text.documents import read_documents
from mcx.text.located import Document

if TYPE_CHECKING:
    from mcx.estimators.ready import Ready

CONTRACT_BEGINS = "a document that begins 'contract: TITLE'"
QUOTE_BEGINS = "a document that begins 'quote: DEALER'"
MARKET_BEGINS = "a document that begins 'market: DATE'"


def read_request(
    files: Sequence[File], *, with_market: bool, with_quote: bool = False
) -> tuple[Request, list[DatedContract]]:
    """The documents of the files and their contracts with every date, all sound; raises InputError, RequestError."""
    if not files:
        raise RequestError("no files are given")
    if others := [each for each in files if not isinstance(each, File)]:
        raise RequestError(f"expected the name of a file, one argument for each, found {others[0]!r}")
    documents, unread = read_documents(files)
    made, faults = checked_request(documents, unread)
    kinds = {document.kind for document in made.documents}
    names = ", ".join(map(str, files))
    wanted = [("contract", CONTRACT_BEGINS), ("market", MARKET_BEGINS), ("quote", QUOTE_BEGINS)]
    missing = wanted[: 1 + with_market + with_quote]
    for kind, begins in missing:
        if kind not in kinds and not unread:  # else it may stand in what could not be read
            faults.append(Fault(Place(str(files[0]), 1, 1), f"no {kind} in {names}; expected {begins}"))
    return made, dated_contracts(made, faults)


def dated_contracts(made: Request, faults: Iterable[Fault]) -> list[DatedContract]:
    """Every contract of a request with its dates; raises InputError with all faults."""
    faults, dated = list(faults), []
    for contract in made.contracts:
        found, wrong = date_on(contract, made.market)
        faults += wrong
        if found is not None:
            dated.append(found)
    if faults:
        raise InputError([*faults, *_refused(dated)])
    return dated


def _refused(dated: Iterable[DatedContract]) -> list[Fault]:
    """Continuous watches that cannot be simulated and fixings that are missing, so that they are told beside the faults
    of the documents."""
    watched = [each for each in dated if each.watches or each.begun]
    if not watched:
        return []
    from mcx.tape.unroll import unroll

    return [fault for each in watched for fault in unroll(each, nodes=()).faults
            if each.history.sound or fault.place != each.history.place]  # what was misspelt is not missing as well


def made_ready(made: Request, dated: Sequence[DatedContract], apart: bool = False) -> list[Ready]:
    """Every contract as a program on the market (`apart`: see `prepare`); raises InputError with all that the tape
    refuses."""
    from mcx.estimators.ready import prepare

    found = [prepare(each, made.market, apart) for each in dated]
    faults = [fault for _, wrong in found for fault in wrong]
    if faults:
        raise InputError(faults)
    return [ready for ready, _ in found]


def sources(made: Request) -> tuple[Document, ...]:
    """Every document of a request, the definitions of the library that it used included."""
    return tuple(dict.fromkeys((*made.documents, *made.payoffs)))
