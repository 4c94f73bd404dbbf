"""The interface's document is the truth about the interface."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
import yaml
from marshmallow import ValidationError
from openapi_spec_validator import validate

from service.http.app import OPERATIONS
from service.http.openapi import document, to_yaml
from service.http.problems import STATUS, TITLES
from service.http.routing import Operation
from tests.plant import Plant, open_plant, request_for

ROOT = Path(__file__).parents[2]


def test_openapi_yaml_is_what_the_routes_say() -> None:
    assert (ROOT / "openapi.yaml").read_text(encoding="utf-8") == to_yaml(document(OPERATIONS))


def test_the_document_is_valid_openapi() -> None:
    validate(yaml.safe_load((ROOT / "openapi.yaml").read_text(encoding="utf-8")))


def test_every_route_stands_in_the_document(plant: Plant) -> None:
    described = document(OPERATIONS)["paths"]
    for rule in plant.app.url_map.iter_rules():
        if rule.endpoint == "static":
            continue
        path = rule.rule.replace("<int:", "{").replace("<", "{").replace(">", "}")
        methods = {method.lower() for method in rule.methods or ()} - {"head", "options"}
        assert methods <= set(described[path]), rule


@pytest.mark.parametrize("operation", [o for o in OPERATIONS if o.body], ids=lambda operation: operation.name)
def test_every_example_is_taken_by_its_schema(operation: Operation) -> None:
    assert operation.body is not None
    try:
        operation.body.load(operation.example)
    except ValidationError as error:
        pytest.fail(str(error.messages))


def test_the_examples_work_one_after_the_other(plant: Plant) -> None:
    by_name = {operation.name: operation.example for operation in OPERATIONS}
    drafted = plant.post("/v1/specifications", by_name["draft_specification"], "statistician")
    approved = plant.post(f"{drafted.headers['Location']}/approval", by_name["approve_specification"], "manager")
    decided = plant.post("/v1/decisions", by_name["decide_batch"])
    assert [answer.status_code for answer in (drafted, approved, decided)] == [201, 201, 201]


def test_every_problem_has_a_title() -> None:
    assert {error.code for error in STATUS} <= set(TITLES)


def _members(schema: dict[str, Any], described: dict[str, Any]) -> dict[str, Any]:
    return dict(described["components"]["schemas"][schema["$ref"].rsplit("/", 1)[-1]])


def test_a_record_has_every_member_that_the_document_requires(plant: Plant) -> None:
    described = document(OPERATIONS)
    content = described["paths"]["/v1/decisions"]["post"]["responses"]["201"]["content"]["application/json"]
    assert set(_members(content["schema"], described)["required"]) <= set(plant.approved().decided().json)


@pytest.mark.parametrize(
    "path", ["/livez", "/readyz", "/.well-known/jwks.json", "/openapi.yaml", "/openapi.json", "/docs"]
)
def test_what_is_open_needs_no_token(plant: Plant, path: str) -> None:
    assert plant.client().get(path).status_code == 200


def test_the_page_of_the_interface_asks_for_nothing_from_outside(plant: Plant) -> None:
    page = plant.client().get("/docs")
    assert "<script" not in page.text
    assert "http://" not in page.text
    assert "https://" not in page.text
    assert "default-src 'none'" in page.headers["Content-Security-Policy"]


def test_an_unknown_path_and_a_wrong_method_are_problems_too(plant: Plant) -> None:
    missing, wrong = plant.get("/v1/nothing"), plant.client().delete("/v1/decisions")
    assert (missing.status_code, missing.mimetype) == (404, "application/problem+json")
    assert (wrong.status_code, wrong.mimetype) == (405, "application/problem+json")
    assert "POST" in wrong.headers["Allow"]


def test_an_inline_specification_can_be_refused_by_the_site(tmp_path: Path) -> None:
    strict = open_plant(tmp_path, INLINE_SPECIFICATIONS="refused")
    answer = strict.post("/v1/decisions", request_for("PX-2601") | {"specification": strict.specification()})
    assert (answer.status_code, answer.json["errors"][0]["code"]) == (422, "inline-specification-refused")
    strict.site.store.close()
