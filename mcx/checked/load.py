"""From files to a checked request: every contract, the market, and every fault of all documents at once.

`request` gives what it could make of the files with the faults it found; `load` raises them. What no single
document can show is checked here, by small functions in `CROSS_CHECKS`, each returning its own faults.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from itertools import combinations
from pathlib import Path

from mcx.checked.contract import Contract
from mcx.checked.conversions import conversion_faults, conversions, read_conversion, simulated_rates
from mcx.checked.curves import valuation_of
from mcx.checked.dealer_quote import TEXTBOOK, DealerQuote, read_quote
from mcx.checked.fixings import file_of
from mcx.checked.library import Definitions, clashes, stands_for_shipped
from mcx.checked.market import Market
from mcx.checked.payoff import BOND, MULTIPLES
from mcx.checked.read_contract import asset_names, read_contract
from mcx.checked.read_market import read_market
from mcx.checked.read_payoff import read_payoff
from mcx.checked.reading import listed, read, text_of
from mcx.checked.term_values import DATED_TYPES
from mcx.checked.values import currency_code
from mcx.faults import Fault, InputError, Place, did_you_mean
from mcx.text.documents import read_documents
from mcx.text.located import Document, Mapping, Node

NO_FUNDING = "no issuer funding spread: the amounts are discounted at the market's rates alone"


@dataclass(frozen=True, slots=True)
class Request:
    """What was asked about: contracts in order of the files, the market if one was given, the definitions
    used or given along, all documents, and the dealers' quotes. Beside faults, contracts and market hold what could be
    read of them."""

    contracts: tuple[Contract, ...]
    market: Market | None
    payoffs: tuple[Document, ...]
    documents: tuple[Document, ...]
    quotes: tuple[DealerQuote, ...] = ()


@dataclass(frozen=True, slots=True)
class Pair:
    """A contract beside the market, with the documents that both come from.

    `title`, `currency` ('' where it is at fault) and `assets` (none where one is at fault) are known even where the
    contract's payoff could not be read and `contract` is None.
    """

    title: str
    currency: str
    assets: tuple[str, ...]
    contract: Contract | None
    market: Market
    contract_body: Mapping
    market_body: Mapping

    def stated(self, key: str) -> tuple[str, ...] | None:
        """What the market states under a key, sound or not: () if the key is absent, None if that is no mapping."""
        node = self.market_body.get(key)
        return node.keys() if isinstance(node, Mapping) else None if node else ()


def load(files: Iterable[str | Path]) -> Request:
    """The checked documents of the files; raises InputError with every fault found."""
    made, faults = request(files)
    if faults:
        raise InputError(faults)
    return made


def request(files: Iterable[str | Path]) -> tuple[Request, list[Fault]]:
    """The checked documents of the files as far as they could be read, and every fault found."""
    documents, faults = read_documents(files)
    return checked_request(documents, faults)


def checked_request(
    documents: Iterable[Document], faults: Iterable[Fault] = ()
) -> tuple[Request, list[Fault]]:
    """As `request`, from documents that are read already."""
    documents, faults = tuple(documents), list(faults)
    kinds: dict[str, list[Document]] = {}
    for document in documents:
        kinds.setdefault(document.kind, []).append(document)
    own = kinds.get("payoff", [])
    definitions = Definitions(own)
    faults += clashes(own)
    faults += _only_one_market(kinds.get("market", []))
    faults += _same_title(kinds.get("contract", []))
    used: dict[str, Document] = {}
    titled: dict[str, Contract | None] = {}
    contracts: list[Contract] = []
    markets = kinds.get("market", [])
    tables, wrong = _tables(markets, kinds.get("fixings", []))
    documents += tuple(table for table in tables if table not in documents)
    faults += wrong
    market, wrong = read_market(markets[0], tables[0] if tables else None) if markets else (None, [])
    faults += wrong
    for document in kinds.get("contract", []):
        contract, wrong = read_contract(document, definitions)
        faults += wrong
        if contract:
            used[contract.payoff.name] = definitions[contract.payoff.name]
            contract = _with_origin(contract, used[contract.payoff.name])
        if market:
            pair = _pair(document.body, markets[0].body, contract, market)
            faults += [fault for check in CROSS_CHECKS for fault in check(pair)]
        titled[contract.title if contract else text_of(document.body, "contract", [])] = contract
        if contract:
            contracts.append(_with_assumptions(contract, market) if market else contract)
    for document in own:
        if document not in used.values():
            faults += read_payoff(document)[1]
    payoffs = dict.fromkeys((*own, *used.values()))
    quotes, wrong = _quotes(kinds.get("quote", []), titled, market)
    return Request(tuple(contracts), market, tuple(payoffs), documents, quotes), sorted(set(faults + wrong))


def _quotes(
    documents: list[Document], contracts: dict[str, Contract | None], market: Market | None
) -> tuple[tuple[DealerQuote, ...], list[Fault]]:
    """The quotes, each of its own time and for one of the contracts."""
    found, faults = [], []
    for document in documents:
        quote, wrong = read_quote(document, contracts.items())
        faults += wrong
        if quote is None:
            continue
        if market is not None and (quote.at == TEXTBOOK) != (market.valuation is None):
            wanted = f"'{TEXTBOOK}', as the market is of time 0"
            wanted = "a date, as the market is of one" if market.valuation else wanted
            faults.append(Fault(document.body.get("at").place, f"expected {wanted}, found '{quote.at}'"))
        found.append(quote)
    return tuple(found), faults


def _pair(contract_body: Mapping, market_body: Mapping, contract: Contract | None, market: Market) -> Pair:
    """A contract beside the market. What is wrong in either by itself has been said."""
    said: list[Fault] = []
    return Pair(
        title=text_of(contract_body, "contract", said),
        currency=read(contract_body, "currency", currency_code, said) or "",
        assets=asset_names(contract_body.get("assets"), said),
        contract=contract, market=market, contract_body=contract_body, market_body=market_body)


def _tables(markets: list[Document], given: list[Document]) -> tuple[list[Document], list[Fault]]:
    """The CSV file of fixings that the market names, taken from those given or read from its place."""
    wanted = file_of(markets[0]) if markets else ""
    found = [table for table in given if Path(table.file).absolute() == Path(wanted).absolute()] if wanted else []
    faults = [Fault(Place(table.file, 1, 1), "no market names this file of fixings; write 'fixings: NAME.csv' in it")
              for table in given if table not in found]
    if wanted and not found:
        found, wrong = read_documents([wanted])
        place = markets[0].body.get("fixings").place
        faults += wrong if Path(wanted).is_file() else [
            Fault(place, f"the fixings in '{wanted}': {fault.text}") for fault in wrong]
    return found, faults


def _only_one_market(markets: list[Document]) -> list[Fault]:
    first = [document.body.key("market").place for document in markets[:1]]
    return [Fault(document.body.key("market").place, f"a second market; the first stands at {first[0]}")
            for document in markets[1:]]


def _same_title(contracts: list[Document]) -> list[Fault]:
    seen: dict[str, Place] = {}
    faults = []
    for document in contracts:
        node = document.body.get("contract")
        title = " ".join(getattr(node, "text", "").split())
        if title in seen:
            text = f"the contract '{title}' stands at {seen[title]} already; each needs its own title"
            faults.append(Fault(node.place, text))
        elif title:
            seen[title] = node.place
    return faults


def _with_origin(contract: Contract, definition: Document) -> Contract:
    """The contract with a word about a definition of the user's own that stands for a shipped one."""
    if not stands_for_shipped(definition):
        return contract
    payoff = contract.payoff
    said = f"'{payoff.name}' is defined at {payoff.place}; the shipped definition of that name is not used"
    return replace(contract, assumptions=(*contract.assumptions, said))


def _with_assumptions(contract: Contract, market: Market) -> Contract:
    """The contract with what is assumed because the market does not say it."""
    conversion, said = conversions(contract.conversion, contract.currency, contract.assets, market)
    if contract.units is not None and contract.currency not in market.funding:
        said = (*said, NO_FUNDING)
    others = tuple(replace(other, contract=other.contract and replace(other.contract, conversion=conversion))
                   for other in contract.otherwise)
    return replace(contract, conversion=conversion, otherwise=others, assumptions=(*contract.assumptions, *said))


def conversions_known(pair: Pair) -> list[Fault]:
    """Every asset in another currency counts in a stated way, and the market has what that needs."""
    return conversion_faults(pair.title, pair.currency, pair.assets, pair.market, pair.contract_body,
                             bool(pair.stated("fx")) and not pair.market.fx)


def _place(body: Mapping, key: str) -> Place:
    node: Node | None = body.get(key)
    return node.place if node is not None else body.place


def one_kind_of_time(pair: Pair) -> list[Fault]:
    """Textbook contracts go with textbook markets, calendar contracts with dated ones."""
    valuation, textbook = valuation_of(pair.market_body.get("market"), [])
    contract = pair.contract
    if contract is None or (valuation is None and not textbook) or contract.textbook == textbook:
        return []
    if any(term.type in DATED_TYPES and term.name in contract.at_fault for term in contract.payoff.terms):
        return []  # the one that cannot be read may settle it
    uses = "times, and needs a market that begins 'market: 0y'" if contract.textbook else \
        "calendar dates, and needs a market of a date"
    return [Fault(_place(pair.market_body, "market"), f"'{pair.title}' uses {uses}")]


def rates_known(pair: Pair) -> list[Fault]:
    """The market has rates for the contract's currency."""
    rates = pair.stated("rates")
    if not pair.currency or not rates or pair.currency in rates:
        return []
    text = f"the market has no rates for '{pair.currency}'; it has {listed(rates)}"
    return [Fault(_place(pair.contract_body, "currency"), text)]


def funding_stated(pair: Pair) -> list[Fault]:
    """A note's funding spread is stated, be it nil: of what pays multiples of a notional, or has a bond in it."""
    currency, funding = pair.currency, pair.stated("funding")
    if not _is_note(pair) or not currency or funding is None or currency in funding:
        return []
    text = (f"no funding spread for '{currency}', the currency of the note '{pair.title}'; write "
            f"'funding: {{{currency}: 0 bp}}' to value it without the issuer's spread")
    return [Fault(_place(pair.market_body, "funding" if "funding" in pair.market_body else "market"), text)]


def _is_note(pair: Pair) -> bool:
    """Whether the contract's payments are promises of an issuer."""
    if "notional" in pair.contract_body or pair.contract is None:
        return "notional" in pair.contract_body
    payoff = pair.contract.payoff
    return payoff.pays == MULTIPLES or any(pay.part == BOND for pay in payoff.payments())


def assets_known(pair: Pair) -> list[Fault]:
    """Every asset of the contract is in the market."""
    stated = pair.stated("assets")
    if not stated or not pair.assets:
        return []
    faults = []
    for name, node in zip(pair.assets, pair.contract_body.get("assets"), strict=True):
        if name not in stated:
            near = did_you_mean(name, stated) or f"; it has {listed(stated)}"
            faults.append(Fault(node.place, f"the market has no asset '{name}'{near}"))
    return faults


def correlations_known(pair: Pair) -> list[Fault]:
    """Every pair of the contract's assets has its correlation, and together they make a correlation
    matrix."""
    pairs = pair.stated("correlation")
    known = [name for name in pair.assets if name in (pair.stated("assets") or ())]
    known += simulated_rates(read_conversion(pair.contract_body.get("conversion"), pair.assets, []), pair.currency,
                             pair.market)
    if pairs is None or len(known) < 2:
        return []
    stated = [tuple(part.strip() for part in each.split("/")) for each in pairs]
    named = {*pair.stated("assets"), *(pair.stated("fx") or ())}
    if any(len(names) != 2 or not set(names) <= named for names in stated):
        return []  # a pair that was misspelt is not missing as well
    place = _place(pair.market_body, "correlation" if "correlation" in pair.market_body else "market")
    missing = [f"{a}/{b}" for a, b in combinations(known, 2) if (a, b) not in stated and (b, a) not in stated]
    if missing:
        lines = [f"{names}: NUMBER%" for names in missing]
        line = f"{listed(lines)} under 'correlation'" if "correlation" in pair.market_body else \
            f"'correlation: {{{', '.join(lines)}}}'"
        return [Fault(place, f"no correlation for {listed(missing)}; write {line}")]
    quoted = pair.market.correlation | {names[::-1]: one for names, one in pair.market.correlation.items()}
    if len(known) < 3 or any(names not in quoted for names in combinations(known, 2)):
        return []
    from mcx.checked.nearest_correlation import nearest_correlation, smallest_eigenvalue

    rows = [[1.0 if a == b else quoted[a, b].value for b in known] for a in known]
    smallest = smallest_eigenvalue(rows)
    if smallest >= 0:
        return []
    nearest = nearest_correlation(rows)
    told = ", ".join(f"{a}/{b}: {100 * nearest[i][j]:.4f}%"
                     for (i, a), (j, b) in combinations(enumerate(known), 2))
    return [Fault(place, "no assets can be correlated like this (the smallest eigenvalue of the matrix is "
                         f"{smallest:.3g}); the nearest correlations that can be: {told}")]


CROSS_CHECKS: tuple[Callable[[Pair], list[Fault]], ...] = (
    one_kind_of_time, rates_known, funding_stated, assets_known, conversions_known, correlations_known,
)
