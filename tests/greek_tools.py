"""Tools for tests of sensitivities: contracts from text to sensitivities by name, and derivatives of closed forms."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from helpers import Estimate, request_of
from mcx.dates.dating import date_on
from mcx.estimators.greeks import Found, Wish, sensitivities
from mcx.estimators.plan import Precision
from mcx.estimators.ready import Ready, prepare

Key = tuple[str, str, str]  # name, asset or pair or currency, tenor


def ready(text: str, number: int = 0) -> tuple[Ready, object]:
    """A contract of a text made ready as the package does it, and the market."""
    request = request_of(text)
    dated, faults = date_on(request.contracts[number], request.market)
    made, refused = prepare(dated, request.market)
    assert not faults and not refused, "\n".join(map(str, (*faults, *refused)))
    return made, request.market


def found(text: str, paths: int, seed: int, reduction: tuple[str, ...] = (), threads: int | None = None,
          **wish: object) -> Found:
    """Everything that `mcx greeks` finds about the only contract of a text."""
    made, market = ready(text)
    return sensitivities(made, market, Wish(**wish), Precision(paths=paths), seed=seed, reduction=reduction,
                         threads=threads)


def by_name(values) -> dict[Key, Estimate]:
    """Values of a run by name, subject and tenor."""
    return {(value.what.name, value.what.subject, getattr(value.what, "tenor", "")):
            Estimate(value.estimate.value, value.estimate.standard_error) for value in values}


def greeks(text: str, paths: int, seed: int, reduction: tuple[str, ...] = (), **wish: object) -> dict[Key, Estimate]:
    """The sensitivities of the only contract of a text."""
    return by_name(found(text, paths, seed, reduction, **wish).values)


def slope(value: Callable[..., float], at: Mapping[str, float], by: str, step: float = 1e-2) -> float:
    """d value / d `by`, by differences of sixth order: error about 1e-11 for closed forms that bend over steps of 1."""
    h = step * max(abs(at[by]), 0.1)
    weights = {1: 45.0, 2: -9.0, 3: 1.0}
    return sum(w * (value(**{**at, by: at[by] + k * h}) - value(**{**at, by: at[by] - k * h}))
               for k, w in weights.items()) / (60.0 * h)


def bend(value: Callable[..., float], at: Mapping[str, float], by: str, step: float = 6e-3) -> float:
    """d2 value / d `by`2, likewise."""
    h = step * abs(at[by])
    weights = {1: 270.0, 2: -27.0, 3: 2.0}
    here = 490.0 * value(**at)
    return (sum(w * (value(**{**at, by: at[by] + k * h}) + value(**{**at, by: at[by] - k * h}))
                for k, w in weights.items()) - here) / (180.0 * h * h)
