"""Vols by strike of a market document, and the curve of vols at any strike.

At a tenor vols are linear in strike between the strikes given and flat beyond them; at a strike total variance is
linear in time, as for any curve of vols. So no total variance falls in time between two strikes where it falls at
neither.
"""

from __future__ import annotations

from bisect import bisect_right
from dataclasses import replace

from mcx.checked.curves import STRIKES_WRITTEN, MarketReader
from mcx.checked.market import AssetMarket, Curve, Node as Point, Quoted, StrikeVols
from mcx.checked.reading import check_keys
from mcx.faults import Fault
from mcx.text.located import Mapping, Node, Scalar
from mcx.text.scalars import expected, number

FEWEST = 2
LEAST_STRIKE, MOST_STRIKE = 0.05, 20.0  # shares of the spot, to catch a unit that is wrong
SPOT = "spot"
UNITS = "a strike as '80%' of the spot or as a level such as '51.5'"


def read_strike_vols(reader: MarketReader, node: Mapping, spot: Quoted | None) -> StrikeVols | None:
    """`{strikes: {80%: ..., 100%: ...}, priced_at: 100%}`: strikes in percent of the spot, or as levels, all of them
    the same way. `priced_at`: the strike whose vols price a contract, or 'spot'. None where anything is wrong."""
    faults, before = reader.faults, len(reader.faults)
    check_keys(node, (), ("strikes", "priced_at"), faults, "the vols")
    inner = node.get("strikes")
    if not isinstance(inner, Mapping) or len(inner.entries) < FEWEST:
        faults.append(expected(f"vols at {FEWEST} strikes or more, as {STRIKES_WRITTEN}", inner,
                               "with one strike give the vol alone" if isinstance(inner, Mapping) else ""))
        return None
    strikes = [_strike(key, spot, faults) for key, _ in inner.entries]
    known = [one for one in strikes if one is not None]
    relative = known[0][1] if known else True
    for (key, _), found in zip(inner.entries, strikes, strict=True):
        if found is not None and found[1] != relative:
            faults.append(Fault(key.place, f"'{key}' is {_unit(found[1])}, the strikes before it are "
                                           f"{_unit(relative)}; keep to one of the two"))
    _check_order(inner, strikes, faults)
    curves = [_curve(reader, key, value) for key, value in inner.entries]
    _check_tenors(inner, curves, faults)
    priced_at = _priced_at(node.get("priced_at"), spot, relative, faults) if "priced_at" in node else None
    if len(faults) > before:
        return None
    return StrikeVols(tuple(value for value, _ in known), tuple(curves), relative, priced_at,
                      node.key("strikes").place)


def curve_at(vols: StrikeVols, strike: float) -> Curve:
    """The curve of vols at a strike in the unit of the strikes given."""
    strikes = vols.strikes
    if strike <= strikes[0] or strike >= strikes[-1]:
        return vols.curves[0 if strike <= strikes[0] else -1]
    above = bisect_right(strikes, strike)
    share = (strike - strikes[above - 1]) / (strikes[above] - strikes[above - 1])
    low, high = vols.curves[above - 1:above + 1]
    if share == 0.0:
        return low
    nodes = tuple(replace(node, quoted=_between(node.quoted, other.quoted, share))
                  for node, other in zip(low.nodes, high.nodes, strict=True))
    return replace(low, nodes=nodes)


def strike_of(asset: AssetMarket, level: float) -> float:
    """A level of an asset in the unit of its strikes."""
    return level / asset.spot.value if asset.by_strike.relative else level


def priced_curve(vols: StrikeVols) -> Curve:
    """The curve of vols that prices a contract."""
    return curve_at(vols, vols.priced_at)


def shown_strike(vols: StrikeVols, strike: float) -> str:
    """A strike as it would be written."""
    return f"{100.0 * strike:.6g}% of the spot" if vols.relative else f"{strike:.8g}"


def _between(low: Quoted, high: Quoted, share: float) -> Quoted:
    """A number between two, with what was said of both."""
    def mixed(a: float, b: float) -> float:
        return a + (b - a) * share

    stated = low.uncertain is not None and high.uncertain is not None
    return Quoted(mixed(low.value, high.value), low.place, mixed(low.uncertain, high.uncertain) if stated else None,
                  *(a if a == b else "" for a, b in ((low.source, high.source), (low.as_of, high.as_of))))


def _strike(node: Node, spot: Quoted | None, faults: list[Fault]) -> tuple[float, bool] | None:
    """A strike and whether it is a share of the spot."""
    value = number(node)
    if isinstance(value, Fault) or node.text.endswith("bp"):
        faults.append(expected(UNITS, node))
        return None
    relative = node.text.endswith("%")
    share = value if relative else value / spot.value if spot else None
    if value <= 0.0 or (share is not None and not LEAST_STRIKE <= share <= MOST_STRIKE):
        near = f"a strike from {LEAST_STRIKE:.0%} to {MOST_STRIKE:.0%} of the spot"
        hint = f"is the unit right? The spot is {spot.value:.10g}" if spot and not relative else "is the unit right?"
        faults.append(expected(near, node, hint if value > 0.0 else ""))
        return None
    return value, relative


def _unit(relative: bool) -> str:
    return "in percent of the spot" if relative else "as a level"


def _check_order(inner: Mapping, strikes: list[tuple[float, bool] | None], faults: list[Fault]) -> None:
    pairs = [(key, found) for (key, _), found in zip(inner.entries, strikes, strict=True) if found is not None]
    for (before, low), (key, high) in zip(pairs, pairs[1:], strict=False):
        if low[1] == high[1] and high[0] <= low[0]:
            faults.append(Fault(key.place, f"'{key}' is not above '{before}'; strikes go upwards"))


def _curve(reader: MarketReader, strike: Scalar, node: Node) -> Curve | None:
    """The vols of one strike: a flat number, or numbers by tenor."""
    if isinstance(node, Mapping) and "value" not in node:
        return reader.curve_of(node, "vol", f" of the strike '{strike}'")
    return reader.curve(node, "vol")


def _check_tenors(inner: Mapping, curves: list[Curve | None], faults: list[Fault]) -> None:
    """Every strike has the tenors of the first."""
    read = [(key, curve) for (key, _), curve in zip(inner.entries, curves, strict=True) if curve is not None]
    for key, curve in read[1:]:
        if _tenors(curve.nodes) != _tenors(read[0][1].nodes):
            faults.append(Fault(curve.place, f"the strike '{key}' has {_listed(curve)}, the strike '{read[0][0]}' has "
                                             f"{_listed(read[0][1])}; give each strike the same tenors"))


def _tenors(nodes: tuple[Point, ...]) -> list[str]:
    return [node.label for node in nodes]


def _listed(curve: Curve) -> str:
    return "one vol for all" if curve.flat else ", ".join(f"'{label}'" for label in _tenors(curve.nodes))


def _priced_at(node: Node, spot: Quoted | None, relative: bool, faults: list[Fault]) -> float | None:
    if isinstance(node, Scalar) and node.text == SPOT:
        return 1.0 if relative or spot is None else spot.value
    if not isinstance(node, Scalar) or node.absent:
        faults.append(expected("the strike whose vols price a contract, or 'spot'", node))
        return None
    found = _strike(node, spot, faults)
    if found is not None and found[1] != relative:
        faults.append(expected(f"a strike {_unit(relative)}, as the strikes are, or 'spot'", node))
        return None
    return found and found[0]
