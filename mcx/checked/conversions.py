"""Assets in other currencies: how their levels count in the contract's, and what the market must say for it.

'quanto': the level counts as it is quoted, at a fixed rate of exchange; 'composite': it is converted at the rate of
exchange of the same day, which is simulated as well.
"""

from __future__ import annotations

from collections.abc import Sequence

from mcx.checked.market import AssetMarket, Market
from mcx.checked.reading import check_keys, mapping_of, one_of
from mcx.faults import Fault
from mcx.text.located import Mapping, Node

CONVERSIONS = ("quanto", "composite")


def read_conversion(node: Node | None, assets: Sequence[str], faults: list[Fault]) -> dict[str, str]:
    """What a contract's `conversion` says of its assets."""
    mapping = mapping_of(node, faults, "how assets in other currencies count, as '{lantern: quanto}'")
    if mapping is None or not assets or not check_keys(mapping, assets, (), faults, "the conversion"):
        return {}
    found = {name.text: one_of(how, CONVERSIONS, faults, "a conversion") for name, how in mapping.entries}
    return {name: how for name, how in found.items() if how is not None}


def conversions(
    stated: dict[str, str], currency: str, assets: Sequence[str], market: Market
) -> tuple[dict[str, str], tuple[str, ...]]:
    """The conversion of every asset in another currency, and a sentence for each that only the market implies."""
    found, said = dict(stated), []
    for name in assets:
        asset = market.assets.get(name)
        if asset and _foreign(asset, currency) and asset.quanto and name not in found:
            found[name] = "quanto"
            said.append(f"{name} is quoted in {asset.currency} and taken to be paid in {currency} at a fixed rate "
                        "(quanto), as the market's 'quanto' suggests; the contract states no 'conversion'")
    return found, tuple(said)


def simulated_rates(conversion: dict[str, str], currency: str, market: Market) -> list[str]:
    """The names of the rates of exchange that composite assets are converted at, each once."""
    wanted = [market.assets[name].currency for name, how in conversion.items()
              if how == "composite" and name in market.assets]
    rates = [market.fx_between(currency, other) for other in dict.fromkeys(wanted)]
    return [rate.name for rate in rates if rate is not None]


def conversion_faults(
    title: str, currency: str, assets: Sequence[str], market: Market, body: Mapping, fx_stated: bool
) -> list[Fault]:
    """What is missing, or stated without need, for the assets of a contract (`body`); `fx_stated`: the market states
    rates of exchange, be they at fault."""
    faults: list[Fault] = []
    node = body.get("conversion")
    stated = read_conversion(node, assets, [])
    found = conversions(stated, currency, assets, market)[0]
    for name in assets:
        asset = market.assets.get(name)
        if asset is None or not currency:
            continue
        if _foreign(asset, currency):
            if found.get(name) or not (node is not None and (not isinstance(node, Mapping) or name in node)):
                faults += _needs(asset, found.get(name), title, currency, market, fx_stated)
        elif name in stated:
            faults.append(Fault(node.key(name).place, f"'{name}' is quoted in {currency}, the contract's currency: "
                                                      "there is nothing to convert"))
    return faults


def _foreign(asset: AssetMarket, currency: str) -> bool:
    return asset.currency not in ("", currency)


def _needs(
    asset: AssetMarket, how: str | None, title: str, paid: str, market: Market, fx_stated: bool
) -> list[Fault]:
    """What an asset in another currency still needs."""
    name, own = asset.name, asset.currency
    if how is None:
        return [Fault(asset.place, f"'{name}' is quoted in {own}, but '{title}' pays in {paid}; write in the contract "
                                   f"'conversion: {{{name}: quanto}}' (paid at a fixed rate) or '{{{name}: "
                                   f"composite}}' (converted at the rate of the day)")]
    if own not in market.rates and (asset.forwards is None or how == "composite") and market.rates:
        return [Fault(asset.place, f"the market has no rates for '{own}', the currency of '{name}'")]
    if how == "composite":
        if market.fx_between(own, paid) is None and not fx_stated:
            return [Fault(asset.place, f"'{name}' is converted from {own} to {paid}, but the market has no rate of "
                                       f"exchange; write 'fx: {{{paid} per {own}: {{spot: ..., vol: ...}}}}'")]
        return []
    if asset.quanto is None:
        return [Fault(asset.place, f"'{name}' is paid in {paid} at a fixed rate; its market needs 'quanto: {{fx_vol: "
                                   f"..., fx_correlation: ..., fx: {paid} per {own}}}'")]
    if set(asset.quanto.per) != {own, paid}:
        return [Fault(asset.quanto.place, f"the quanto of '{name}' is about {' per '.join(asset.quanto.per)}; expected "
                                          f"'{paid} per {own}' or '{own} per {paid}'")]
    return []
