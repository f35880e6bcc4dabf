"""Options of the test run."""

import pytest


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--nightly", action="store_true", help="run the long tests too")
    parser.addoption("--write-validation", action="store_true", help="write reports/validation.md")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if config.getoption("--nightly"):
        return
    skip = pytest.mark.skip(reason="long run; use --nightly")
    for item in items:
        if "nightly" in item.keywords:
            item.add_marker(skip)
