"""Plans: what a specification will and will not detect."""

from __future__ import annotations

import itertools
import json
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from scipy import stats

from service.cli import main
from tests.plant import Plant

DEMO = Path(__file__).parents[2] / "service" / "demo" / "specification.json"


def _plan(plant: Plant, specification: object, **question: object) -> dict[str, Any]:
    answer = plant.post("/v1/plans", {"specification": specification, **question}, "statistician")
    assert answer.status_code == 200, answer.text
    return dict(answer.json)


def _known(plant: Plant, **members: object) -> dict[str, Any]:
    covariance = {"kind": "known", "matrix": plant.specification()["covariance"]["matrix"]}
    return plant.specification() | {"covariance": covariance} | members


def test_power_is_that_of_the_noncentral_chi_square(plant: Plant) -> None:
    planned = _plan(plant, _known(plant), units=12, shift=1.0)
    expected = stats.ncx2.sf(stats.chi2.isf(0.01, 5), 5, 12.0)
    assert planned["chance_of_rejection"] == pytest.approx(expected, abs=1e-9)


def test_the_smallest_number_of_units_is_the_first_to_reach_the_power(plant: Plant) -> None:
    n = _plan(plant, _known(plant), units=12, shift=1.0, power=0.9)["smallest_units"]
    chances = [_plan(plant, _known(plant), units=m, shift=1.0)["chance_of_rejection"] for m in (n - 1, n)]
    assert chances[0] < 0.9 <= chances[1]


def test_a_shift_in_units_of_measurement_is_turned_to_mahalanobis_units(plant: Plant) -> None:
    matrix = plant.specification()["covariance"]["matrix"]
    document = _known(plant)
    for i in range(5):
        for j in range(5):
            document["covariance"]["matrix"][i][j] = matrix[i][i] if i == j else 0.0
    assert _plan(plant, document, units=12, shift={"iron": 24.0})["shift"] == pytest.approx(2.0, rel=1e-12)


def test_the_curve_begins_at_one_minus_alpha_and_falls(plant: Plant) -> None:
    curve = _plan(plant, plant.specification(), units=12, shift=1.0)["operating_characteristic"]
    chances = [point["chance_of_acceptance"] for point in curve]
    assert chances[0] == pytest.approx(0.99, abs=1e-9)
    assert all(later < earlier for earlier, later in itertools.pairwise(chances))


def test_an_equivalence_plan_has_risk_alpha_at_delta(plant: Plant) -> None:
    document = plant.specification() | {"question": {"form": "equivalence", "delta": 1.5}, "significance_level": 0.05}
    assert _plan(plant, document, units=40, shift=1.5)["chance_of_acceptance"] == pytest.approx(0.05, abs=1e-8)


def test_a_draft_can_be_planned_with(plant: Plant) -> None:
    plant.post("/v1/specifications", plant.specification(), "statistician")
    assert _plan(plant, {"code": "premix-a"}, units=12, shift=1.0)["specification"]["version"] == 1


@pytest.mark.parametrize(
    ("change", "code"), [({"shift": {"irn": 1.0}}, "characteristic-unknown"), ({"shift": -1.0}, "schema")]
)
def test_a_question_that_makes_no_sense_is_refused(plant: Plant, change: dict[str, object], code: str) -> None:
    body = {"specification": plant.specification(), "units": 12, "shift": 1.0} | change
    answer = plant.post("/v1/plans", body, "statistician")
    assert (answer.status_code, answer.json["errors"][0]["code"]) == (422, code)


def test_too_few_units_for_the_batch_covariance_are_named(plant: Plant) -> None:
    document = plant.specification() | {"covariance": {"kind": "batch"}}
    answer = plant.post("/v1/plans", {"specification": document, "units": 5, "shift": 1.0}, "statistician")
    assert (answer.status_code, answer.json["errors"][0]["pointer"]) == (422, "/units")


def test_the_command_says_the_same(plant: Plant) -> None:
    result = CliRunner().invoke(main, ["plan", str(DEMO), "--units", "12", "--shift", "1", "--json"])
    planned = _plan(plant, plant.specification(), units=12, shift=1.0)
    assert json.loads(result.output) == {name: value for name, value in planned.items() if name != "specification"}


def test_the_command_prints_a_table_for_people() -> None:
    result = CliRunner().invoke(main, ["plan", str(DEMO), "--units", "12", "--difference", "iron=9"])
    assert result.exit_code == 0
    assert "smallest units: 18" in result.output
    assert "chance of acceptance" in result.output


@pytest.mark.parametrize("options", [[], ["--shift", "1", "--difference", "iron=1"], ["--difference", "iron"]])
def test_the_command_refuses_an_unclear_shift(options: list[str]) -> None:
    assert CliRunner().invoke(main, ["plan", str(DEMO), "--units", "12", *options]).exit_code == 2
