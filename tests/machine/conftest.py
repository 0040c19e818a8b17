"""The kernels' tests run compiled, and again as plain Python: NUMBA_DISABLE_JIT=1."""

from __future__ import annotations

import pytest

from mcx.machine.jit import COMPILED


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Plain numpy scalars warn where compiled ones wrap round or overflow in silence, as both are meant to."""
    if not COMPILED:
        for item in items:
            item.add_marker(pytest.mark.filterwarnings("ignore::RuntimeWarning"))
