"""Every screen that can hold a lot has its words."""

from __future__ import annotations

import pytest

from service.domain.batch import Batch
from service.domain.findings import reasons
from service.domain.screening import Finding
from service.domain.specification import SCREEN_NAMES, ScreenRule
from service.stats.screen import ScreenStatistic, not_applicable

BATCH = Batch.from_dict(
    {
        "batch_id": "PX-2601-1",
        "lot": "PX-2601",
        "characteristics": [{"name": "iron", "measurement_unit": "mg/kg"}],
        "rows": [[598.2], [611.0], [603.4]],
        "units": ["s1", "s2", "s3"],
    }
)


@pytest.mark.parametrize("name", SCREEN_NAMES)
@pytest.mark.parametrize("p_value", [1e-4, None])
def test_a_screen_that_is_not_met_gives_its_reason(name: str, p_value: float | None) -> None:
    finding = Finding.of(name, ScreenRule(), ScreenStatistic(9.0, p_value, "exact", units=(1,), detail={"constant": 1}))
    [given] = reasons([finding], (finding,), BATCH)
    assert given.evidence == "/screens/0"
    assert "{" not in given.text
    assert name.startswith("outlying") == ("Unit s2 lies" in given.text)


@pytest.mark.parametrize("name", SCREEN_NAMES)
def test_a_required_screen_that_cannot_be_computed_gives_its_reason(name: str) -> None:
    finding = Finding.of(name, ScreenRule(required=True), not_applicable("three units are too few"))
    [given] = reasons([finding], (finding,), BATCH)
    assert given.code == "screen-not-computable"
    assert "three units are too few" in given.text
