"""Decisions over HTTP, on a real store with a real key."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from typing import Any

import pytest

from service.signing import canonical
from service.signing.envelope import open_envelope
from tests.plant import Plant, request_for


@pytest.mark.parametrize(
    ("lot", "outcome", "reason"),
    [
        ("PX-2601", "accepted", "mean-agrees"),
        ("PX-2602", "rejected", "mean-differs"),
        ("PX-2603", "rejected", "mean-differs"),
        ("PX-2604", "held", "outlying-units"),
        ("PX-2605", "held", "normality-in-doubt"),
    ],
)
def test_each_lot_of_the_demonstration_is_decided_for_its_own_reason(
    plant: Plant, lot: str, outcome: str, reason: str
) -> None:
    answer = plant.approved().decided(lot)
    assert answer.status_code == 201
    assert (answer.json["outcome"], answer.json["reasons"][0]["code"]) == (outcome, reason)


def test_the_joint_shift_is_what_separate_tests_miss(plant: Plant) -> None:
    follow_up = plant.approved().decided("PX-2602").json["follow_up"]
    assert follow_up["one_at_a_time"]["rejected"] == []
    assert follow_up["minimal_sets"] == [["iron", "zinc"]]


def test_another_unit_of_measurement_is_refused_where_it_stands(plant: Plant) -> None:
    answer = plant.approved().decided("PX-2606")
    assert answer.status_code == 422
    assert answer.mimetype == "application/problem+json"
    [fault] = answer.json["errors"]
    assert fault["code"] == "measurement-unit-mismatch"
    assert fault["pointer"] == "/batch/characteristics/1/measurement_unit"


def test_the_record_is_exactly_what_was_signed(plant: Plant) -> None:
    answer = plant.approved().decided()
    document = dict(answer.json)
    payload = open_envelope(document.pop("envelope"), plant.site.trusted)
    assert canonical.encode(document) == payload.data
    assert answer.headers["ETag"] == f'"{hashlib.sha256(payload.envelope.encode()).hexdigest()}"'


def test_a_record_reads_back_as_it_was_answered(plant: Plant) -> None:
    made = plant.approved().decided()
    assert plant.get(made.headers["Location"]).data == made.data


def test_the_envelope_alone_is_offered_as_jose(plant: Plant) -> None:
    made = plant.approved().decided()
    answer = plant.get(made.headers["Location"], Accept="application/jose")
    assert answer.text == made.json["envelope"]


def test_what_is_not_offered_is_not_acceptable(plant: Plant) -> None:
    made = plant.approved().decided()
    assert plant.get(made.headers["Location"], Accept="application/zip").status_code == 406


def test_an_unchanged_record_is_not_sent_again(plant: Plant) -> None:
    made = plant.approved().decided()
    answer = plant.get(made.headers["Location"], If_None_Match=made.headers["ETag"])
    assert (answer.status_code, answer.data) == (304, b"")


def test_attempts_of_a_lot_are_counted(plant: Plant) -> None:
    plant.approved()
    assert [plant.decided().json["attempt"] for _ in range(3)] == [1, 2, 3]


def test_an_evaluation_says_the_same_and_keeps_nothing(plant: Plant) -> None:
    decided = plant.approved().decided("PX-2604").json
    evaluated = plant.post("/v1/evaluations", request_for("PX-2604"))
    assert evaluated.status_code == 200
    same = ("outcome", "reasons", "test", "follow_up", "screens", "power", "specification", "batch")
    assert {name: evaluated.json[name] for name in same} == {name: decided[name] for name in same}
    assert len(plant.get("/v1/decisions").json["items"]) == 1


def test_an_inline_specification_is_marked_unregistered(plant: Plant) -> None:
    body = request_for("PX-2601") | {"specification": plant.specification()}
    answer = plant.post("/v1/decisions", body)
    assert answer.status_code == 201
    assert "unregistered specification" in answer.json["assumptions"]
    assert answer.json["specification"]["version"] is None
    assert canonical.digest(answer.json["specification"]["document"]) == answer.json["specification"]["digest"]


def test_faults_of_batch_and_specification_come_together(plant: Plant) -> None:
    body = request_for("PX-2601") | {"specification": plant.specification()}
    body["specification"]["covariance"]["matrix"][0][0] = -1.0
    body["batch"]["units"][1] = body["batch"]["units"][0]
    answer = plant.post("/v1/decisions", body)
    pointers = {fault["pointer"] for fault in answer.json["errors"]}
    assert answer.status_code == 422
    assert {"/batch/units/1", "/specification/covariance/matrix/0/0"} <= pointers


def test_columns_may_come_in_any_order(plant: Plant) -> None:
    body = request_for("PX-2602")
    body["batch"]["characteristics"].reverse()
    for row in body["batch"]["rows"]:
        row.reverse()
    straight = plant.approved().decided("PX-2602").json
    turned = plant.post("/v1/decisions", body).json
    assert turned["test"] == straight["test"]


# --- idempotency


def test_the_same_key_and_body_give_the_same_record_again(plant: Plant) -> None:
    plant.approved()
    first = plant.decided(Idempotency_Key="k1")
    again = plant.decided(Idempotency_Key="k1")
    assert again.data == first.data
    assert again.headers["Idempotent-Replayed"] == "true"
    assert len(plant.get("/v1/decisions").json["items"]) == 1


def test_the_same_key_with_another_body_is_refused(plant: Plant) -> None:
    plant.approved().decided(Idempotency_Key="k1")
    answer = plant.decided("PX-2602", Idempotency_Key="k1")
    assert (answer.status_code, answer.json["code"]) == (422, "idempotency-key-reused")


def test_a_key_belongs_to_its_submitter(plant: Plant) -> None:
    first = plant.approved().decided(Idempotency_Key="k1")
    other = plant.decided(who="other-pipeline", Idempotency_Key="k1")
    assert other.json["record_id"] != first.json["record_id"]


# --- lists


def test_a_list_pages_through_everything_once(plant: Plant) -> None:
    plant.approved()
    made = [plant.decided(lot).json["record_id"] for lot in ("PX-2601", "PX-2602", "PX-2603", "PX-2604", "PX-2605")]
    found, following = [], "/v1/decisions?limit=2"
    while following:
        page = plant.get(following)
        found += [item["record_id"] for item in page.json["items"]]
        following = page.json["next"]
    assert found == made[::-1]


@pytest.mark.parametrize(
    ("query", "lots"),
    [
        ("outcome=held", ["PX-2604"]),
        ("lot=PX-2601", ["PX-2601"]),
        ("reason=mean-differs", ["PX-2602"]),
        ("reason=mean-agrees", ["PX-2604", "PX-2601"]),
        ("specification=premix-a&outcome=rejected", ["PX-2602"]),
        ("specification=premix-b", []),
        ("decided_to=2020-01-01T00:00:00Z", []),
        ("decided_from=2020-01-01T00:00:00%2B01:00", ["PX-2604", "PX-2602", "PX-2601"]),
    ],
)
def test_a_list_is_filtered(plant: Plant, query: str, lots: list[str]) -> None:
    plant.approved()
    for lot in ("PX-2601", "PX-2602", "PX-2604"):
        plant.decided(lot)
    assert [item["lot"] for item in plant.get(f"/v1/decisions?{query}").json["items"]] == lots


def test_an_unknown_filter_is_refused(plant: Plant) -> None:
    answer = plant.get("/v1/decisions?outcom=held")
    assert answer.status_code == 400
    assert "'outcome'" in answer.json["detail"]


def test_a_submitter_sees_its_own_decisions_only(plant: Plant) -> None:
    made = plant.approved().decided()
    plant.decided("PX-2602", who="other-pipeline")
    assert [item["lot"] for item in plant.get("/v1/decisions", "other-pipeline").json["items"]] == ["PX-2602"]
    assert plant.get(made.headers["Location"], "other-pipeline").status_code == 404


# --- kinds of covariance, each against its formula


def _with(document: Mapping[str, Any], **members: object) -> dict[str, Any]:
    return {**json.loads(json.dumps(document)), **members}


@pytest.mark.parametrize(
    ("kind", "name", "degrees"),
    [("known", "chi-square", [5]), ("reference", "f", [5, 114]), ("batch", "f", [5, 7]), ("pooled", "f", [5, 125])],
)
def test_each_kind_of_covariance_has_its_own_law(plant: Plant, kind: str, name: str, degrees: list[int]) -> None:
    covariance: dict[str, Any] = {"kind": kind}
    if kind != "batch":
        covariance["matrix"] = plant.specification()["covariance"]["matrix"]
    if kind in ("reference", "pooled"):
        covariance["degrees_of_freedom"] = 118
    body = request_for("PX-2601") | {"specification": _with(plant.specification(), covariance=covariance)}
    test = plant.post("/v1/evaluations", body).json["test"]
    assert test["distribution"] == {"name": name, "degrees_of_freedom": degrees}
    assert test["covariance"] == kind


def test_too_few_units_for_the_batch_covariance_are_refused_by_name(plant: Plant) -> None:
    body = request_for("PX-2601") | {"specification": _with(plant.specification(), covariance={"kind": "batch"})}
    body["batch"]["rows"] = body["batch"]["rows"][:5]
    body["batch"]["units"], body["batch"]["sequence"] = body["batch"]["units"][:5], body["batch"]["sequence"][:5]
    answer = plant.post("/v1/decisions", body)
    assert (answer.status_code, answer.json["code"]) == (422, "too-few-units")
    assert answer.json["errors"][0]["pointer"] == "/batch/rows"
    assert plant.get("/v1/decisions").json["items"] == []


def test_one_unit_is_decided_against_a_reference(plant: Plant) -> None:
    body = request_for("PX-2601")
    for member in ("rows", "units", "sequence"):
        body["batch"][member] = body["batch"][member][:1]
    answer = plant.approved().post("/v1/decisions", body)
    assert answer.status_code == 201
    states = {screen["name"]: screen["state"] for screen in answer.json["screens"]}
    assert states["mardia-skewness"] == "not-applicable"
    assert states["outlying-against-specification"] == "met"


def test_a_missing_value_holds_the_lot_where_the_specification_says_so(plant: Plant) -> None:
    body = request_for("PX-2601") | {"specification": _with(plant.specification(), missing="hold")}
    body["batch"]["rows"][3][2] = None
    answer = plant.post("/v1/decisions", body)
    assert (answer.json["outcome"], answer.json["reasons"][0]["code"]) == ("held", "missing-values")
    assert answer.json["test"] is None


def test_a_missing_value_is_refused_with_its_place_otherwise(plant: Plant) -> None:
    body = request_for("PX-2601")
    body["batch"]["rows"][3][2] = None
    answer = plant.approved().post("/v1/decisions", body)
    assert [(fault["pointer"], fault["code"]) for fault in answer.json["errors"]] == [
        ("/batch/rows/3/2", "missing-value")
    ]
