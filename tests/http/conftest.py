"""A plant for each test."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.plant import Plant, open_plant


@pytest.fixture
def plant(tmp_path: Path) -> Iterator[Plant]:
    opened = open_plant(tmp_path)
    yield opened
    opened.site.store.close()
