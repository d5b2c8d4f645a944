"""Tests that take minutes each are asked for: scripts/test --long."""

import pytest


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--long", action="store_true", help="run the tests that take minutes each as well")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if config.getoption("--long"):
        return
    long = [item for item in items if "long" in item.keywords]
    config.hook.pytest_deselected(items=long)
    items[:] = [item for item in items if "long" not in item.keywords]
