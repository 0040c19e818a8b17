"""The names of the methods, and what may be asked for; light, since it is read before any document."""

from __future__ import annotations

from collections.abc import Sequence

from mcx.faults import RequestError, did_you_mean

NONE, AUTO = "none", "auto"
NAMES = ("controls", "hedge", "importance", "antithetic", "stratified", "sobol-bridge", "sobol-components")


def wished(reduction: str | Sequence[str]) -> tuple[str, ...]:
    """The names asked for, in the order in which they work: () for 'none', ('auto',) for 'auto'. Several may be one
    text, parted by commas. Raises RequestError for names that are not known, or named twice."""
    given = reduction.split(",") if isinstance(reduction, str) else reduction
    if not isinstance(given, Sequence) or not all(isinstance(name, str) for name in given) or not given:
        raise RequestError(f"'reduction' is {NONE}, {AUTO} or a list of {', '.join(NAMES)}; not {reduction!r}")
    names = [name.strip() for name in given]
    for name in names:
        if name not in (NONE, AUTO, *NAMES):
            near = did_you_mean(name, (NONE, AUTO, *NAMES))
            raise RequestError(f"the variance reduction '{name}' is not known{near}; "
                               f"there are {NONE}, {AUTO}, {', '.join(NAMES)}")
    if len(set(names)) < len(names):
        raise RequestError("a variance reduction is named twice")
    for alone in (NONE, AUTO):
        if alone in names and len(names) > 1:
            raise RequestError(f"the variance reduction '{alone}' goes with no other")
    if names == [NONE]:
        return ()
    return (AUTO,) if names == [AUTO] else tuple(name for name in NAMES if name in names)
