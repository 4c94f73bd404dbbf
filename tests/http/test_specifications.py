"""The life of a specification."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from tests.plant import Plant, request_for

VERSION = "/v1/specifications/premix-a/versions"


def _draft(plant: Plant, **members: object) -> dict[str, Any]:
    answer = plant.post("/v1/specifications", plant.specification() | members, "statistician")
    assert answer.status_code == 201
    return dict(answer.json)


def _approve(plant: Plant, version: int, **headers: str) -> int:
    return plant.post(f"{VERSION}/{version}/approval", {"reason": "reviewed"}, "manager", **headers).status_code


def test_a_draft_decides_nothing(plant: Plant) -> None:
    _draft(plant)
    answer = plant.decided()
    assert (answer.status_code, answer.json["code"]) == (409, "specification-state")


def test_an_unknown_specification_is_not_found(plant: Plant) -> None:
    answer = plant.decided()
    assert answer.status_code == 404
    assert answer.json["errors"][0]["pointer"] == "/specification/code"


def test_the_latest_approved_version_governs(plant: Plant) -> None:
    plant.approved()
    _draft(plant, significance_level=0.05)
    assert plant.decided().json["specification"]["version"] == 1
    assert _approve(plant, 2) == 201
    decided = plant.decided().json
    assert (decided["specification"]["version"], decided["test"]["significance_level"]) == (2, 0.05)
    states = [item["state"] for item in plant.get("/v1/specifications/premix-a").json["items"]]
    assert states == ["superseded", "approved"]


def test_a_version_that_does_not_govern_is_refused_with_the_one_that_does(plant: Plant) -> None:
    plant.approved()
    _draft(plant)
    body = request_for("PX-2601") | {"specification": {"code": "premix-a", "version": 2}}
    answer = plant.post("/v1/decisions", body)
    assert answer.status_code == 409
    assert "version 1 does" in answer.json["detail"]


def test_an_approved_version_is_not_approved_again(plant: Plant) -> None:
    plant.approved()
    assert _approve(plant, 1) == 409


def test_approval_is_refused_where_the_version_is_not_the_one_seen(plant: Plant) -> None:
    _draft(plant)
    assert _approve(plant, 1, If_Match='"' + "0" * 64 + '"') == 412
    etag = plant.get(f"{VERSION}/1").headers["ETag"]
    assert _approve(plant, 1, If_Match=etag) == 201


def test_an_effective_time_to_come_leaves_the_earlier_version_governing(plant: Plant) -> None:
    plant.approved()
    _draft(plant)
    body = {"reason": "from new year on", "effective_at": "2999-01-01T00:00:00+02:00"}
    answer = plant.post(f"{VERSION}/2/approval", body, "manager")
    assert answer.json["effective_at"] == "2998-12-31T22:00:00.000000Z"
    assert plant.decided().json["specification"]["version"] == 1


def test_an_effective_time_in_the_past_is_refused(plant: Plant) -> None:
    _draft(plant)
    body = {"reason": "late", "effective_at": "2020-01-01T00:00:00Z"}
    assert plant.post(f"{VERSION}/1/approval", body, "manager").status_code == 409


def test_a_withdrawn_version_decides_nothing(plant: Plant) -> None:
    plant.approved()
    assert plant.post(f"{VERSION}/1/withdrawal", {"reason": "method changed"}, "manager").status_code == 201
    assert plant.decided().status_code == 409
    assert plant.get(f"{VERSION}/1").json["state"] == "withdrawn"


def test_an_author_withdraws_their_own_draft_but_no_approved_version(plant: Plant) -> None:
    plant.approved()
    _draft(plant)
    assert plant.post(f"{VERSION}/2/withdrawal", {"reason": "mistake"}, "statistician").status_code == 201
    assert plant.post(f"{VERSION}/1/withdrawal", {"reason": "mistake"}, "statistician").status_code == 403


def test_every_step_is_a_signed_record_of_the_version(plant: Plant) -> None:
    plant.approved()
    plant.post(f"{VERSION}/1/withdrawal", {"reason": "method changed"}, "manager")
    version = plant.get(f"{VERSION}/1").json
    types = [record["record_type"].removeprefix("specification-") for record in version["records"]]
    assert types == ["drafted", "approved", "withdrawn"]
    assert all(record["envelope"] for record in version["records"])
    assert version["document"] == plant.specification()


def _asymmetric(document: dict[str, Any]) -> None:
    document["covariance"]["matrix"][0][1] -= 1.0


def _not_square(document: dict[str, Any]) -> None:
    document["covariance"]["matrix"].pop()


def _few_degrees(document: dict[str, Any]) -> None:
    document["covariance"]["degrees_of_freedom"] = 4


def _same_name(document: dict[str, Any]) -> None:
    document["characteristics"][1]["name"] = "iron"


def _crossed(document: dict[str, Any]) -> None:
    document["characteristics"][0]["upper_bound"] = -1.0


def _outside(document: dict[str, Any]) -> None:
    document["characteristics"][0]["lower_bound"] = 700.0


def _no_tolerance(document: dict[str, Any]) -> None:
    document["question"] = {"form": "equivalence"}


@pytest.mark.parametrize(
    ("change", "pointer", "code"),
    [
        (_asymmetric, "/covariance/matrix/0/1", "not-symmetric"),
        (_not_square, "/covariance/matrix", "matrix-shape"),
        (_few_degrees, "/covariance/degrees_of_freedom", "too-few-degrees-of-freedom"),
        (_same_name, "/characteristics/1/name", "repeated-name"),
        (_crossed, "/characteristics/0/lower_bound", "bounds-crossed"),
        (_outside, "/characteristics/0/target", "target-out-of-bounds"),
        (_no_tolerance, "/characteristics/0/tolerance", "tolerance-missing"),
    ],
)
def test_a_specification_without_sound_meaning_is_refused_where_it_is_wrong(
    plant: Plant, change: Callable[[dict[str, Any]], None], pointer: str, code: str
) -> None:
    document = plant.specification()
    change(document)
    answer = plant.post("/v1/specifications", document, "statistician")
    assert answer.status_code == 422
    assert (pointer, code) in [(fault["pointer"], fault["code"]) for fault in answer.json["errors"]]


@pytest.mark.parametrize(
    ("correlation", "code"), [(1.2, "not-positive-definite"), (1.0, "ill-conditioned"), (1 - 1e-14, "ill-conditioned")]
)
def test_a_covariance_that_cannot_be_used_is_refused_by_name(plant: Plant, correlation: float, code: str) -> None:
    document = plant.specification()
    matrix = document["covariance"]["matrix"]
    matrix[0][1] = matrix[1][0] = correlation * 12.0 * 9.0
    for j in range(2, 5):
        matrix[0][j] = matrix[j][0] = matrix[1][j] = matrix[j][1] = 0.0
    answer = plant.post("/v1/specifications", document, "statistician")
    assert [fault["code"] for fault in answer.json["errors"]] == [code]
