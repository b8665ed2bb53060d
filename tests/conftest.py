"""Order of the tests: quick ones first, real processes and real time last, with the compile cache warm."""

import pytest

_LATE = ("/process/", "/examples/")


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Process tests run after all others, so that no compile disturbs what they measure; the order is otherwise kept."""
    items.sort(key=lambda item: any(place in str(item.path) for place in _LATE))
