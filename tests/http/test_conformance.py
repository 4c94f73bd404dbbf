"""Every answer is one that the document promises: its status, its media type, its members."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest
from openapi_schema_validator import OAS31Validator
from werkzeug.test import TestResponse

from service.http.app import OPERATIONS
from service.http.openapi import document
from tests.plant import Plant, request_for

DOCUMENT = document(OPERATIONS)
VERSION = "/v1/specifications/{code}/versions/{version}"


def _conforms(answer: TestResponse, method: str, path: str) -> None:
    """Hold an answer against what the document says of its operation."""
    promised = DOCUMENT["paths"][path][method]["responses"]
    assert str(answer.status_code) in promised, answer.text
    response = promised[str(answer.status_code)]
    if "$ref" in response:
        response = DOCUMENT["components"]["responses"][response["$ref"].rsplit("/", 1)[-1]]
    assert answer.mimetype in response["content"], answer.mimetype
    value = answer.json if answer.mimetype.endswith("json") else answer.text
    schema = response["content"][answer.mimetype]["schema"]
    if answer.mimetype == "application/json" and schema == {"type": "string"}:
        return
    OAS31Validator({**schema, "components": DOCUMENT["components"]}).validate(value)


@pytest.mark.parametrize("lot", ["PX-2601", "PX-2602", "PX-2603", "PX-2604", "PX-2605", "PX-2606"])
def test_decisions_and_evaluations_are_as_promised(plant: Plant, lot: str) -> None:
    _conforms(plant.approved().decided(lot), "post", "/v1/decisions")
    _conforms(plant.post("/v1/evaluations", request_for(lot)), "post", "/v1/evaluations")


def test_a_held_decision_without_a_test_is_as_promised(plant: Plant) -> None:
    body = request_for("PX-2601") | {"specification": plant.specification() | {"missing": "hold"}}
    body["batch"]["rows"][0][0] = None
    answer = plant.post("/v1/decisions", body)
    assert answer.json["test"] is None
    _conforms(answer, "post", "/v1/decisions")


@pytest.mark.parametrize("kind", ["batch", "reference"])
def test_an_equivalence_decision_and_its_plan_are_as_promised(plant: Plant, kind: str) -> None:
    document = plant.specification() | {"question": {"form": "equivalence", "delta": 2.0}}
    if kind == "batch":
        document["covariance"] = {"kind": "batch"}
    _conforms(
        plant.post("/v1/decisions", request_for("PX-2601") | {"specification": document}), "post", "/v1/decisions"
    )
    plan = {"specification": document, "units": 12, "shift": 0.5}
    _conforms(plant.post("/v1/plans", plan, "statistician"), "post", "/v1/plans")


def test_what_is_read_back_is_as_promised(plant: Plant) -> None:
    location = plant.approved().decided().headers["Location"]
    plant.decided("PX-2602")
    for accept in ("application/json", "application/jose", "text/html"):
        _conforms(plant.get(location, Accept=accept), "get", "/v1/decisions/{record_id}")
    _conforms(plant.get(f"{location}/bundle"), "get", "/v1/decisions/{record_id}/bundle")
    for query in ("", "?limit=1", "?outcome=held", "?outcome=lost", "?cursor=99999999999999999999"):
        _conforms(plant.get(f"/v1/decisions{query}"), "get", "/v1/decisions")


def test_the_life_of_a_specification_is_as_promised(plant: Plant) -> None:
    drafted = plant.post("/v1/specifications", plant.specification(), "statistician")
    _conforms(drafted, "post", "/v1/specifications")
    at = drafted.headers["Location"]
    for step, body in (
        ("approval", {"reason": "reviewed"}),
        ("approval", {}),
        ("withdrawal", {"reason": "method changed"}),
    ):
        _conforms(plant.post(f"{at}/{step}", body, "manager"), "post", f"{VERSION}/{step}")
    _conforms(plant.get(at), "get", VERSION)
    _conforms(plant.get("/v1/specifications"), "get", "/v1/specifications")
    _conforms(plant.get("/v1/specifications/premix-a"), "get", "/v1/specifications/{code}")
    _conforms(plant.decided(), "post", "/v1/decisions")


_REFUSALS: dict[str, Callable[[Plant], tuple[TestResponse, int]]] = {
    "a query": lambda plant: (plant.post("/v1/decisions?dry_run=true", request_for("PX-2601")), 400),
    "a role": lambda plant: (plant.post("/v1/decisions", request_for("PX-2601"), "auditor"), 403),
    "an unknown code": lambda plant: (plant.decided(), 404),
    "a media type": lambda plant: (plant.decided(Content_Type="text/plain"), 415),
    "a shape": lambda plant: (plant.post("/v1/decisions", {"batch": {}}), 422),
    "no token": lambda plant: (plant.client().post("/v1/decisions", json={}), 401),
}


@pytest.mark.parametrize("refusal", _REFUSALS)
def test_a_refusal_is_as_promised_and_keeps_nothing(plant: Plant, refusal: str) -> None:
    answer, status = _REFUSALS[refusal](plant)
    assert answer.status_code == status
    _conforms(answer, "post", "/v1/decisions")
    assert plant.get("/v1/decisions").json["items"] == []


@pytest.mark.parametrize("operation", [o for o in OPERATIONS if o.public], ids=lambda operation: operation.name)
def test_what_is_open_to_all_is_as_promised(plant: Plant, operation: Any) -> None:
    _conforms(plant.client().get(operation.rule), "get", operation.rule)


_PLACES = ["/v1/decisions/{}", "/v1/decisions/{}/bundle", "/v1/specifications/{}", "/v1/specifications/{}/versions/1"]


@pytest.mark.parametrize("place", _PLACES)
@pytest.mark.parametrize(
    "name", ["%00", "a%00b", "%0A", "..%2F..%2Fetc", "%FF", "x" * 3000, "'%20OR%201=1--", "%E2%80%AE"]
)
def test_a_path_that_leads_to_nothing_is_not_found(plant: Plant, place: str, name: str) -> None:
    answer = plant.get(place.format(name))
    assert (answer.status_code, answer.json["code"]) == (404, "not-found")


def test_every_answer_carries_the_headers_that_keep_a_browser_safe(plant: Plant) -> None:
    location = plant.approved().decided().headers["Location"]
    for answer in (
        plant.get(location),
        plant.get("/nothing"),
        plant.client().get("/docs"),
        plant.client().get(location),
    ):
        assert answer.headers["Content-Security-Policy"].startswith("default-src 'none';")
        assert "'unsafe-" not in answer.headers["Content-Security-Policy"]
        assert answer.headers["X-Content-Type-Options"] == "nosniff"
        assert answer.headers["Referrer-Policy"] == "no-referrer"
        assert answer.headers["Cache-Control"] == "no-store"


def test_a_specification_of_a_time_long_past_is_not_approved_for_later(plant: Plant) -> None:
    at = plant.post("/v1/specifications", plant.specification(), "statistician").headers["Location"]
    step = {"reason": "reviewed", "effective_at": "0999-01-01T00:00:00Z"}
    answer = plant.post(f"{at}/approval", step, "manager")
    assert (answer.status_code, answer.json["errors"][0]["pointer"]) == (409, "/effective_at")


def test_a_lot_with_a_blank_does_not_begin_a_new_count_of_attempts(plant: Plant) -> None:
    body = request_for("PX-2601")
    body["batch"]["lot"] += " "
    answer = plant.approved().post("/v1/decisions", body)
    assert [fault["pointer"] for fault in answer.json["errors"]] == ["/batch/lot"]
