"""The demonstration runs as the README says, and its data are what its generator makes."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from click.testing import CliRunner

from service.cli import main
from service.demo import generate, load
from service.demo.run import EXPECTED


def test_the_demonstration_decides_six_lots_as_described(tmp_path: Path) -> None:
    result = CliRunner().invoke(main, ["demo", "--once", "--folder", str(tmp_path / "demo")])
    assert result.exit_code == 0, result.output
    for lot, outcome in EXPECTED.items():
        assert f"{lot}   {outcome:<9}" in result.output
    assert result.output.count("curl -s") == 3


@pytest.mark.parametrize("shows", generate.FILES)
def test_a_lot_is_what_the_generator_makes(shows: str) -> None:
    _, values = generate.lots()[shows]
    batch = next(batch for batch in load.batches() if f"{batch['lot']}.csv" == generate.FILES[shows])
    assert batch["rows"] == values.tolist()


def test_the_specification_is_what_the_generator_makes() -> None:
    assert load.specification() == json.loads(json.dumps(generate.specification()))
