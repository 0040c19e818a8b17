"""The command that finds a result again, to the last digit."""

from __future__ import annotations

import shlex
from collections.abc import Iterator, Sequence
from pathlib import Path

from mcx.report.greek_results import GreeksResult
from mcx.report.method_results import MethodsResult
from mcx.report.results import PriceResult
from mcx.report.verify_results import VerifyResult


Valued = PriceResult | GreeksResult | VerifyResult


def command(verb: str, files: Sequence[str | Path], result: Valued | MethodsResult) -> str:
    """With the number of paths that was drawn, however it was asked for."""
    return shlex.join(["mcx", verb, *map(str, files), *_options(result)])


def _options(result: Valued | MethodsResult) -> Iterator[str]:
    """What decides the digits; what one verb has and the others have not comes last."""
    if isinstance(result, MethodsResult):
        number, unit = result.each.replace(",", "").split()[:2]  # '20,000 paths' or '0.5 seconds', as asked
        yield from (f"--{unit}", number, "--seed", str(result.seed))
        return
    yield from ("--paths", str(result.paths), "--seed", str(result.seed), "--reduction", result.reduction)
    if isinstance(result, GreeksResult):
        yield from _of_greeks(result)
    elif isinstance(result, VerifyResult) and result.solve:
        yield from ("--solve", result.solve)
        yield from () if result.target is None else ("--target", repr(result.target))


def _of_greeks(result: GreeksResult) -> Iterator[str]:
    yield from ("--estimator", result.estimator)
    if result.bump is not None:
        yield from ("--bump", repr(result.bump))
    for asset in result.assets:
        yield from ("--asset", asset)
    if result.vol_moves:
        yield "--grid"
    elif result.spot_moves:
        yield "--ladder"
    for name, moves in (("--spot-moves", result.spot_moves), ("--vol-moves", result.vol_moves)):
        if moves:
            yield f"{name}={','.join(map(repr, moves))}"
