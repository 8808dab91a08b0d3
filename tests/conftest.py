"""What every test runs under: fixed seeds, untouched global generators, and a limit on statistical verdicts.

Two options: ``--fresh-seeds`` draws the seeds of randomised tests anew (the seed is printed and can be set again in
``LOTWRIGHT_TEST_SEED``); ``--update-golden`` lets tests rewrite the records in tests/golden.
"""

from __future__ import annotations

import os
import random
from collections.abc import Callable, Iterator

import hypothesis
import numpy as np
import pytest

from core.stream import Bits, make_key
from tests.tools import ALPHA, MOST_VERDICTS, Verdict

SEED = "LOTWRIGHT_TEST_SEED"


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--fresh-seeds", action="store_true", help="draw the seeds of randomised tests anew")
    parser.addoption("--update-golden", action="store_true", help="rewrite the golden records instead of comparing")


def pytest_configure(config: pytest.Config) -> None:
    config.addinivalue_line("markers", f"statistical: may fail by chance, once in {1 / ALPHA:,.0f} runs")
    fresh = config.getoption("--fresh-seeds")
    if fresh and SEED not in os.environ:
        os.environ[SEED] = os.urandom(8).hex()  # workers inherit it
    hypothesis.settings.register_profile("lotwright", deadline=None, derandomize=not fresh, database=None)
    hypothesis.settings.load_profile("lotwright")


def pytest_report_header() -> str:
    return f"seed: {os.environ.get(SEED, 'fixed')}"


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    number = sum(item.get_closest_marker("statistical") is not None for item in items)
    if number > MOST_VERDICTS:
        raise pytest.UsageError(f"{number} statistical tests; no more than {MOST_VERDICTS} may fail by chance")


@pytest.fixture
def bits(request: pytest.FixtureRequest) -> Callable[[int], Bits]:
    """Return the bits of a block, from a key of the test's own."""
    key = make_key("test", os.environ.get(SEED, ""), [("test", request.node.nodeid)])
    return lambda block: Bits(key, block)


@pytest.fixture
def verdict(request: pytest.FixtureRequest) -> Verdict:
    """Return the one statistical verdict of a test that is marked as such."""
    assert request.node.get_closest_marker("statistical"), "mark the test with @pytest.mark.statistical"
    return Verdict()


@pytest.fixture
def update_golden(request: pytest.FixtureRequest) -> bool:
    """Return whether golden records are to be rewritten."""
    return bool(request.config.getoption("--update-golden"))


@pytest.fixture(autouse=True)
def _global_generators() -> Iterator[None]:
    """Fail a test that moved the state of `random` or `numpy.random`: every bit must come from core/stream.py."""
    before = _states()
    yield
    assert _states() == before, "the test moved the state of a global random generator"


def _states() -> tuple[object, ...]:
    name, keys, *rest = np.random.get_state(legacy=True)  # noqa: NPY002 - to see that nobody uses it
    return random.getstate(), name, keys.tobytes(), *rest
