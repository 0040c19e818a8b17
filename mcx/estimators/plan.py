"""How many paths a request needs, decided before the run that counts.

`--paths` is taken as it is. `--within` asks for a 95 % half-width, and `--seconds` for a time: a pilot run from a
stream of its own finds the spread, or the speed, and fixes the number; the main run then uses fresh numbers. Stopping
a run when its own error looks small would be biased. Reading the request loads nothing heavy: it comes before the
documents are known to be sound.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from mcx.estimators.estimate import NORMAL_95
from mcx.faults import RequestError

if TYPE_CHECKING:
    import numpy as np

DEFAULT_PATHS = 1 << 20
DEFAULT_SEED = 1
FEWEST_PATHS = 2  # one path has no error
MOST_PATHS = 1 << 40
GROUP = 64  # paths are summed in groups of this size; planned numbers are whole groups
FIRST_PILOT = 1 << 14
LARGEST_PILOT = 1 << 20
FEWEST_UNLIKE = 100  # paths of a pilot that must differ from the commonest value
FEWEST_MEANS = 1024
MOST_GROUPED = 2 * GROUP  # paths in a mean that are no scrambled points: strata of pairs
FARTHEST = 16  # times its own paths that a pilot of scrambled points plans for
FEWEST_PLANNED = 1 << 14
LONGEST_SECONDS = 7 * 86400.0
WITHIN = re.compile(r"([0-9]*\.?[0-9]+(?:[eE][+-]?[0-9]+)?)\s*(bp|%)?")
UNITS = {"bp": 1e-4, "%": 1e-2}
SPANS = ((365.25 * 86400.0, "years"), (86400.0, "days"), (3600.0, "hours"), (60.0, "minutes"), (1.0, "seconds"))


@dataclass(frozen=True, slots=True)
class Precision:
    """What was asked for: at most one of a number of paths, a 95 % half-width and a time; none means DEFAULT_PATHS.

    `within` is a fraction of the notional where `relative`, else an amount of money per unit.
    """

    paths: int | None = None
    within: float | None = None
    relative: bool = False
    seconds: float | None = None
    words: str = f"{DEFAULT_PATHS:,} paths, the number used where nothing is asked"


@dataclass(frozen=True, slots=True)
class Independent:
    """What a spread is read off: `values` (means,), independent, each the mean of `size` paths; `quantile` times the
    error of their mean is half the width of its 95 % interval."""

    values: np.ndarray
    size: int = 1
    quantile: float = NORMAL_95

    @property
    def paths(self) -> int:
        return len(self.values) * self.size


@dataclass(frozen=True, slots=True)
class Plan:
    """The number of paths of the main run, and how it came about. `target` is the 95 % half-width, None without one."""

    paths: int
    pilot_paths: int
    asked: str
    target: float | None = None
    warnings: tuple[str, ...] = ()


def precision(paths: int | None, within: str | float | None, seconds: float | None) -> Precision:
    """The request as one record; raises RequestError for meaningless numbers and for more than one wish."""
    stated = [name for name, value in (("paths", paths), ("within", within), ("seconds", seconds)) if value is not None]
    if len(stated) > 1:
        raise RequestError(f"'{stated[0]}' and '{stated[1]}' cannot both decide the number of paths; give one of them")
    if paths is not None:
        return Precision(paths=_whole(paths), words=f"{paths:,} paths")
    if seconds is not None:
        return Precision(seconds=_time(seconds), words=f"{seconds:g} second{'s' * (seconds != 1.0)}")
    return Precision() if within is None else _half_width(within)


def _whole(paths: object) -> int:
    if isinstance(paths, bool) or not hasattr(paths, "__index__"):
        raise RequestError(f"'paths' is a whole number of at least {FEWEST_PATHS}, not {paths!r}")
    if not FEWEST_PATHS <= paths <= MOST_PATHS:
        raise RequestError(f"'paths' is from {FEWEST_PATHS} (one path has no error) to {MOST_PATHS:,}, not {paths:,}")
    return int(paths)


def _time(seconds: object) -> float:
    if isinstance(seconds, bool) or not isinstance(seconds, int | float) or not 0.0 < seconds <= LONGEST_SECONDS:
        raise RequestError(f"'seconds' is a time above 0 and of at most {LONGEST_SECONDS:,.0f}, not {seconds!r}")
    return float(seconds)


def _half_width(within: object) -> Precision:
    text = str(within).strip()
    found = WITHIN.fullmatch(text)
    number = float(found[1]) if found and not isinstance(within, bool) else 0.0
    if not number or not math.isfinite(number):
        raise RequestError(f"'within' is a half-width above 0: '2bp' or '0.02%' of the notional, or an amount of money "
                           f"per unit such as '0.01'; not '{text}'")
    unit = found[2] or ""
    words = f"within {found[1]}{' ' + unit if unit else ''}"
    return Precision(within=number * UNITS.get(unit, 1.0), relative=bool(unit), words=words)


def check_fits(asked: Precision, *, notional: bool, title: str) -> None:
    """Raises RequestError where a half-width is asked for in a unit that the contract's price does not have."""
    if asked.within is None or asked.relative == notional:
        return
    if notional:
        raise RequestError(f"'{title}' is priced in parts of its notional; ask for 'within' in bp or %, as '2bp'")
    raise RequestError(f"'{title}' has no notional to take basis points of; ask for 'within' as an amount of money per "
                       f"unit, as '0.01'")


def plan(
    asked: Precision,
    pilot: Callable[[int], Independent],
    seconds_for: Callable[[int], float],
    exact: bool = False,
    pace: float | None = None,
) -> Plan:
    """The plan for a request.

    `pilot(n)` gives independent prices, or means of so many, from at least n paths of the pilot's stream;
    `seconds_for(n)` runs n paths of that stream and gives the time they took; `exact`: the price is the same on every
    path; `pace` is about the seconds that a path takes, for sentences. Raises RequestError for a half-width that needs
    more than MOST_PATHS.
    """
    if asked.seconds is not None:
        return _by_time(asked, seconds_for)
    if asked.within is None:
        return Plan(asked.paths or DEFAULT_PATHS, 0, asked.words)
    if exact:
        return Plan(FEWEST_PLANNED, 0, asked.words, asked.within)
    return _by_half_width(asked, pilot, pace)


def _by_half_width(asked: Precision, pilot: Callable[[int], Independent], pace: float | None) -> Plan:
    """The paths that bring the 95 % half-width below the target, by the upper end of what the variance may be.

    Means of scrambled points spread less the more points they have, so that the pilot grows while it is much smaller
    than what it asks for; other means need enough of them for their variance to be known.
    """
    size = FIRST_PILOT
    found = pilot(size)
    while size < LARGEST_PILOT and (_few(found) or _too_small(asked, found)):
        size *= 4
        found = pilot(size)
    warnings, wanted = [], _wanted(asked, found)
    if _few(found):
        warnings.append(f"of {len(found.values):,} {'pilot paths' if found.size == 1 else 'means of pilot paths'} only "
                        f"{unlike(found.values)} differed from the rest: the number of paths for the precision asked "
                        f"for cannot be planned well")
        wanted = max(wanted, found.paths)
    if wanted > MOST_PATHS:
        raise RequestError(_out_of_reach(asked, wanted, pace))
    paths = whole_groups(max(wanted, FEWEST_PLANNED))
    return Plan(paths, found.paths, asked.words, asked.within, tuple(warnings))


def _few(found: Independent) -> bool:
    return unlike(found.values) < min(FEWEST_UNLIKE, len(found.values) // 4)


def _too_small(asked: Precision, found: Independent) -> bool:
    if found.size > MOST_GROUPED:
        return found.paths * FARTHEST < _wanted(asked, found)
    return len(found.values) < FEWEST_MEANS


def _wanted(asked: Precision, found: Independent) -> float:
    return (found.quantile / asked.within) ** 2 * upper_variance(found.values) * found.size


def _out_of_reach(asked: Precision, wanted: float, pace: float | None) -> str:
    """Why a half-width is refused, and which is not."""
    taking = "" if pace is None else f", which would take about {duration(wanted * pace)}"
    least = 1.05 * asked.within * math.sqrt(wanted / MOST_PATHS)  # no less than that when rounded to two digits
    reached = f"{least / UNITS['bp']:.2g} bp" if asked.relative else f"{least:.2g}"
    return (f"'{asked.words}' needs about {wanted:.2g} paths{taking}; at most {MOST_PATHS:,} are run, which reach "
            f"about {reached}")


def duration(seconds: float) -> str:
    """'3 hours': two significant digits, in the largest unit of which there are two or more."""
    length, unit = next((span for span in SPANS if seconds >= 2.0 * span[0]), SPANS[-1])
    return f"{float(f'{seconds / length:.2g}'):,.12g} {unit}"


def unlike(prices: np.ndarray) -> int:
    """How many paths differ from the commonest price."""
    import numpy as np

    return len(prices) - int(np.unique(prices, return_counts=True)[1].max())


def upper_variance(prices: np.ndarray) -> float:
    """The variance of a path, plus two standard errors of that variance (from the fourth moment)."""
    squares = (prices - prices.mean()) ** 2
    return float(squares.mean() + 2.0 * squares.std() / math.sqrt(len(squares)))


def _by_time(asked: Precision, seconds_for: Callable[[int], float]) -> Plan:
    """The paths that the time allows, from a pilot enlarged until its time can be read off a clock."""
    size, drawn = FIRST_PILOT, FIRST_PILOT
    seconds_for(size)  # the first run also starts the threads and may compile
    taken = seconds_for(size)
    drawn += size
    while taken < 0.05 * min(asked.seconds, 1.0) and size < LARGEST_PILOT:
        size *= 4
        taken = seconds_for(size)
        drawn += size
    paths = size * asked.seconds / max(taken, 1e-6)
    return Plan(whole_groups(min(max(paths, GROUP), MOST_PATHS)), drawn, asked.words)


def whole_groups(paths: float) -> int:
    """The next whole number of groups of 64."""
    return math.ceil(paths / GROUP) * GROUP
