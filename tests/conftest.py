"""What all tests share: the `--long` switch and hypothesis without a clock."""

import pytest
from hypothesis import settings

settings.register_profile("cohort", deadline=None)
settings.load_profile("cohort")


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--long", action="store_true", help="also run the tests that take long")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if not config.getoption("--long"):
        held = [item for item in items if item.get_closest_marker("long")]
        config.hook.pytest_deselected(items=held)
        items[:] = [item for item in items if not item.get_closest_marker("long")]
