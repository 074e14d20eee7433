"""Every test here starts real processes."""

from __future__ import annotations

import pytest


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    for item in items:
        if "tests/processes" in item.nodeid:
            item.add_marker(pytest.mark.slow)
            item.add_marker(pytest.mark.processes)
