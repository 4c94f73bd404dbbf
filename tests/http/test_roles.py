"""Who may do what: every operation with every role, and separation of duties."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta

import pytest

from service.errors import ConfigurationError, UnauthenticatedError
from service.http.app import OPERATIONS
from service.http.routing import Operation
from service.procedures.tokens import OPERATOR, issue, recognise, revoke
from tests.plant import PEOPLE, Plant, request_for

PATHS = {"<record_id>": "01a231e7-ec35-7594-b772-e75475b11ef5", "<code>": "premix-a", "<int:version>": "1"}
ROLE_OF = {person: roles[0] for person, roles in PEOPLE.items()}
GUARDED = [operation for operation in OPERATIONS if not operation.public]


def _call(plant: Plant, operation: Operation, headers: dict[str, str]) -> int:
    path = operation.rule
    for part, value in PATHS.items():
        path = path.replace(part, value)
    call = getattr(plant.client(), operation.method.lower())
    return int(call(path, headers=headers, **({"json": {}} if operation.body else {})).status_code)


@pytest.mark.parametrize("operation", GUARDED, ids=lambda operation: operation.name)
def test_an_operation_is_refused_to_every_role_but_its_own(plant: Plant, operation: Operation) -> None:
    for person, role in ROLE_OF.items():
        status = _call(plant, operation, plant.authorization(person))
        assert (status == 403) == (role not in operation.roles), (person, status)
        assert status != 401


@pytest.mark.parametrize("operation", GUARDED, ids=lambda operation: operation.name)
def test_an_operation_is_refused_without_a_token(plant: Plant, operation: Operation) -> None:
    assert _call(plant, operation, {}) == 401


@pytest.mark.parametrize(
    "authorization",
    ["", "Basic abc", "Bearer", "Bearer ", "Bearer acceptance_x_y", "Bearer acceptance__", "Bearer x" + "_" * 9],
)
def test_what_is_no_token_is_refused_with_how_to_authenticate(plant: Plant, authorization: str) -> None:
    answer = plant.client().get("/v1/decisions", headers={"Authorization": authorization})
    assert (answer.status_code, answer.headers["WWW-Authenticate"]) == (401, 'Bearer realm="acceptance"')


def test_a_token_with_a_changed_secret_is_refused(plant: Plant) -> None:
    token = plant.tokens["auditor"]
    changed = token[:-1] + ("A" if token[-1] != "A" else "B")
    assert plant.client().get("/v1/decisions", headers={"Authorization": f"Bearer {changed}"}).status_code == 401


def test_a_revoked_token_is_refused(plant: Plant) -> None:
    revoke(plant.site, OPERATOR, plant.tokens["auditor"].split("_")[1], "left the laboratory")
    assert plant.get("/v1/decisions").status_code == 401


def test_an_expired_token_is_refused(plant: Plant) -> None:
    token = issue(plant.site, OPERATOR, "visitor", ("auditor",), days=1)
    assert recognise(plant.site, f"Bearer {token}").subject == "visitor"
    later = datetime.now(UTC) + timedelta(days=1, seconds=1)
    with pytest.raises(UnauthenticatedError):
        recognise(replace(plant.site, clock=lambda: later), f"Bearer {token}")


def test_the_store_holds_no_secret(plant: Plant) -> None:
    with plant.site.store.reading() as view:
        kept = repr(view.tokens())
    assert not any(token.split("_", 2)[2] in kept for token in plant.tokens.values())


def test_authors_do_not_approve_their_own_version(plant: Plant) -> None:
    plant.post("/v1/specifications", plant.specification(), "statistician")
    plant.tokens["twice"] = issue(plant.site, OPERATOR, "statistician", ("approver",))
    answer = plant.post("/v1/specifications/premix-a/versions/1/approval", {"reason": "mine"}, "twice")
    assert (answer.status_code, answer.json["code"]) == (403, "self-approval")
    assert plant.decided().status_code == 409


def test_an_operator_acts_in_no_other_role(plant: Plant) -> None:
    with pytest.raises(ConfigurationError, match="no other role"):
        issue(plant.site, OPERATOR, "boss", ("operator", "approver"))


def test_a_refused_request_leaves_no_record(plant: Plant) -> None:
    assert plant.approved().post("/v1/decisions", request_for("PX-2601"), "auditor").status_code == 403
    assert plant.get("/v1/decisions").json["items"] == []
