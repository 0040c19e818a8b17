"""`mcx payoffs`: the library of definitions, what there is to fill in, and schemas for editors."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from mcx.faults import InputError, RequestError, did_you_mean

if TYPE_CHECKING:
    from mcx.checked.payoff import Payoff
    from mcx.report.results import Definition, Library


def payoffs() -> Library:
    """Every definition of the library."""
    from mcx.checked.library import shipped_names
    from mcx.report.results import Library

    return Library(tuple(definition(name) for name in shipped_names()))


def definition(name: str) -> Definition:
    """One definition of the library; raises RequestError for an unknown name."""
    from mcx.checked.library import shipped_text
    from mcx.report.results import Definition

    payoff = _shipped(name)
    fewest, most = payoff.assets
    number = f"{fewest}" if most == fewest else f"{fewest} or more" if most is None else f"{fewest} to {most}"
    return Definition(name, payoff.about, number, shipped_text(name))


def blank(name: str, assets: Sequence[str]) -> str:
    """Contract, market and quote to fill in for a definition, as YAML; raises RequestError for what does not fit."""
    from mcx.checked.values import ASSET
    from mcx.report.blank import blank as fill_in

    payoff = _shipped(name)
    wrong = [asset for asset in assets if not ASSET.fullmatch(asset)]
    if wrong or not assets:
        raise RequestError(f"the assets are names of letters, digits and . _ - &, parted by commas; not "
                           f"'{wrong[0] if wrong else ''}'")
    if len(set(assets)) < len(assets):
        raise RequestError("an asset is named twice")
    fewest, most = payoff.assets
    if len(assets) < fewest or (most is not None and len(assets) > most):
        wanted = f"{fewest}" if most == fewest else f"{fewest} or more"
        raise RequestError(f"'{name}' takes {wanted} asset{'' if wanted == '1' else 's'}, not {len(assets)}")
    return fill_in(payoff, assets)


def schema(name: str | None = None) -> dict:
    """The JSON schema of documents, for editors: with contracts on one definition of the library, or on any.

    Raises RequestError for an unknown name.
    """
    from mcx.checked.library import shipped_names
    from mcx.report.schemas.documents import schema as schema_of

    names = shipped_names() if name is None else (name,)
    title = "contracts, markets and payoff definitions" if name is None else f"a contract on '{name}', and its market"
    return schema_of([_shipped(each) for each in names], title, only=name is not None)


def _shipped(name: str) -> Payoff:
    """A definition of the library, checked."""
    from mcx.checked.library import shipped, shipped_names
    from mcx.checked.read_payoff import read_payoff

    if name not in shipped_names():
        near = did_you_mean(name, shipped_names()) or "; 'mcx payoffs' lists those there are"
        raise RequestError(f"there is no payoff '{name}' in the library{near}")
    payoff, faults = read_payoff(shipped(name))
    if faults:
        raise InputError(faults)
    return payoff
