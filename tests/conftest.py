"""What every test shares: the slow flag and a guard on numpy's global random state."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest
from hypothesis import settings

settings.register_profile("house", derandomize=True, deadline=None)
settings.load_profile("house")


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--slow", action="store_true", help="run long simulations and soaks too")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if config.getoption("--slow"):
        return
    skip = pytest.mark.skip(reason="needs --slow")
    for item in items:
        if "slow" in item.keywords:
            item.add_marker(skip)


@pytest.fixture(autouse=True)
def untouched_global_random_state() -> Iterator[None]:
    before = np.random.get_state()[1].tolist()  # noqa: NPY002 - the guard itself
    yield
    assert np.random.get_state()[1].tolist() == before, "draws from numpy's global state"  # noqa: NPY002
