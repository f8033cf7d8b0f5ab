"""Options of the whole suite."""

from __future__ import annotations

import pytest
from hypothesis import settings

settings.register_profile("suite", derandomize=True, deadline=None, database=None)
settings.load_profile("suite")  # the same examples everywhere: a red run is a change's fault, never the draw's


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--long", action="store_true", help="run the long fuzzers too (tests marked long)")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if config.getoption("--long"):
        return
    skip = pytest.mark.skip(reason="takes minutes; run with --long")
    for item in items:
        if item.get_closest_marker("long"):
            item.add_marker(skip)


@pytest.fixture
def long(request: pytest.FixtureRequest) -> bool:
    """Was ``--long`` asked for? For tests that only scale their number of inputs."""
    return bool(request.config.getoption("--long"))
