"""What every test runs under: warnings are errors, generated examples repeat, kernels have a cache of their own."""

from __future__ import annotations

import os
import signal
import tempfile

import pytest
from hypothesis import HealthCheck, settings

CACHE = tempfile.TemporaryDirectory(prefix="mcx-tests-")  # compiled once for the run, never the user's
os.environ.setdefault("NUMBA_CACHE_DIR", CACHE.name)  # before anything imports numba

ANY_SPEED = {"deadline": None, "suppress_health_check": [HealthCheck.too_slow]}  # no test depends on the clock
settings.register_profile("repeatable", derandomize=True, max_examples=50, database=None, **ANY_SPEED)
settings.register_profile("wide", max_examples=1000, **ANY_SPEED)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "repeatable"))


def pytest_configure(config: pytest.Config) -> None:
    signal.signal(signal.SIGINT, signal.default_int_handler)  # ignored in shells' background jobs; tests press Ctrl-C
    config.addinivalue_line("filterwarnings", "error")
    config.addinivalue_line("markers", "slow: minutes long, run with --slow")


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--slow", action="store_true", help="run the slow tests too")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if not config.getoption("--slow"):
        for item in items:
            if "slow" in item.keywords:
                item.add_marker(pytest.mark.skip(reason="needs --slow"))


def pytest_unconfigure() -> None:
    CACHE.cleanup()
