"""What may be asked about sensitivities, read from texts and numbers."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence

from mcx.estimators.greeks import ESTIMATORS, Wish
from mcx.faults import RequestError, did_you_mean

SHARE = re.compile(r"([+-]?[0-9]*\.?[0-9]+(?:[eE][+-]?[0-9]+)?)\s*(%|bp)?")
UNITS = {"%": 1e-2, "bp": 1e-4}
LARGEST_BUMP = 0.5
MOST_MOVES = 101


def wish_of(estimator: str, bump: str | float | None, assets: Sequence[str], spot_moves: Sequence[str | float],
            vol_moves: Sequence[str | float]) -> Wish:
    """A whole request; several names or moves may be one text, parted by commas. Raises RequestError for what has no
    meaning."""
    return Wish(estimator_of(estimator), bump_of(bump), tuple(_parted(assets)), moves_of(_parted(spot_moves), "spot"),
                moves_of(_parted(vol_moves), "vol"))


def estimator_of(name: str) -> str:
    """The name of an estimator; raises RequestError for any other."""
    if name not in ESTIMATORS:
        raise RequestError(f"there is no estimator '{name}'{did_you_mean(str(name), ESTIMATORS)}; there are "
                           f"{', '.join(ESTIMATORS)}")
    return name


def bump_of(size: str | float | None) -> float | None:
    """How far numbers are moved for a revaluation, as a share; raises RequestError for what moves nothing or too
    far."""
    if size is None:
        return None
    share = _share(size)
    if share is None or not 0.0 < share <= LARGEST_BUMP:
        raise RequestError(f"'bump' is a size above 0 and up to {LARGEST_BUMP:.0%}, as '1%', not '{size}'")
    return share


def moves_of(moves: Sequence[str | float], what: str) -> tuple[float, ...]:
    """Moves of all spots, or of all vols, in rising order; raises RequestError for what is no move."""
    found = []
    for move in moves:
        share = _share(move)
        if share is None:
            raise RequestError(f"the {what} moves are sizes such as '-5%', '0' or '2.5%', not '{move}'")
        if what == "spot" and share <= -1.0:
            raise RequestError(f"the spot cannot move by '{move}': it stays above 0")
        found.append(share)
    if len(set(found)) < len(found):
        raise RequestError(f"one of the {what} moves is named twice")
    if len(found) > MOST_MOVES:
        raise RequestError(f"at most {MOST_MOVES} {what} moves at a time, not {len(found)}")
    return tuple(sorted(found))


def target_of(target: str | float | None) -> float | None:
    """A price to solve a term for, in the unit of the contract's price: '99.5%' of the notional, or money per unit."""
    if target is None:
        return None
    found = _share(target)
    if found is None:
        raise RequestError(f"'target' is a price such as '99.5%' of the notional, or money per unit, not '{target}'")
    return found


def check_target(target: str | float | None, *, notional: bool, title: str) -> None:
    """Raises RequestError where a target is written in a unit that the contract's price does not have. A bare number of
    a program is in the unit of the price; a text says which it is."""
    if not isinstance(target, str):
        return
    share = target.strip().endswith(tuple(UNITS))
    if notional and not share:
        raise RequestError(f"'{title}' is priced in parts of its notional; write the target in % or bp, as '99.5%', "
                           f"not '{target}'")
    if share and not notional:
        raise RequestError(f"'{title}' has no notional to take a share of; write the target as money per unit, not "
                           f"'{target}'")


def _parted(values: str | Sequence) -> Sequence:
    return [part.strip() for part in values.split(",")] if isinstance(values, str) else values


def _share(size: str | float) -> float | None:
    found = SHARE.fullmatch(str(size).strip())
    share = float(found[1]) * UNITS.get(found[2], 1.0) if found and not isinstance(size, bool) else math.nan
    return share if math.isfinite(share) else None
