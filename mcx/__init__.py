"""Independent values, with their errors, for structured notes and exotic options declared in YAML.

`price`, `greeks`, `verify`, `methods`, `readback`, `payoffs`, `definition`, `blank`, `schema` and `replay` are the
verbs of the command line as functions; see `mcx.api` for their arguments and `mcx.report.results` for what they return.
Importing the package loads nothing heavy: each name is fetched when it is first used.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from mcx.api import blank, definition, greeks, methods, payoffs, price, readback, replay, schema, verify
    from mcx.faults import Fault, InputError, Place, Refusal, RequestError
    from mcx.report.greek_results import GreeksResult, GreeksTable
    from mcx.report.method_results import MethodsResult, MethodsTable
    from mcx.report.results import (
        Definition,
        Library,
        PriceResult,
        PriceTable,
        Readback,
        ReadbackTable,
        Replay,
    )
    from mcx.report.verify_results import VerifyResult, VerifyTable

    __version__: str

HOMES = {
    "mcx.api": ("blank", "definition", "greeks", "methods", "payoffs", "price", "readback", "replay", "schema",
                "verify"),
    "mcx.faults": ("Fault", "InputError", "Place", "Refusal", "RequestError"),
    "mcx.report.greek_results": ("GreeksResult", "GreeksTable"),
    "mcx.report.method_results": ("MethodsResult", "MethodsTable"),
    "mcx.report.results": ("Definition", "Library", "PriceResult", "PriceTable", "Readback", "ReadbackTable", "Replay"),
    "mcx.report.verify_results": ("VerifyResult", "VerifyTable"),
}

__all__ = [
    "Definition",
    "Fault",
    "GreeksResult",
    "GreeksTable",
    "InputError",
    "Library",
    "Place",
    "PriceResult",
    "PriceTable",
    "Readback",
    "ReadbackTable",
    "Refusal",
    "Replay",
    "RequestError",
    "VerifyResult",
    "VerifyTable",
    "__version__",
    "blank",
    "definition",
    "greeks",
    "methods",
    "payoffs",
    "price",
    "readback",
    "replay",
    "schema",
    "verify",
]


def __getattr__(name: str) -> object:
    if name == "__version__":
        from importlib.metadata import PackageNotFoundError, version

        try:
            return version("mcx")
        except PackageNotFoundError:
            return "not installed"
    for home, names in HOMES.items():
        if name in names:
            return getattr(import_module(home), name)
    raise AttributeError(f"module 'mcx' has no attribute '{name}'")


def __dir__() -> list[str]:
    return sorted(__all__)
