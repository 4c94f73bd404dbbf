"""One declaration binds path, roles, shapes and words; what forgets its roles does not start."""

from __future__ import annotations

from typing import Any

import pytest
from flask import Flask, Response

from service.http.app import OPERATIONS
from service.http.routing import Operation, Routes
from tests.unit.http.small import small_app


def _view(site: object, **given: Any) -> Response:
    """Say something.

    More about it,
    on two lines.
    """
    return Response("said")


def _declared(**options: Any) -> Operation:
    routes = Routes("Small")
    routes.route("/x", **options)(_view)
    return routes.operations[0]


@pytest.mark.parametrize("options", [{}, {"roles": ()}, {"public": False}, {"public": True, "roles": ("auditor",)}])
def test_an_operation_that_does_not_say_who_may_use_it_is_refused(options: dict[str, Any]) -> None:
    with pytest.raises(TypeError, match="GET /x needs roles, or public=True, and not both"):
        _declared(**options)


def test_its_words_are_those_of_the_view() -> None:
    operation = _declared(public=True)
    assert (operation.summary, operation.description) == ("Say something", "More about it, on two lines.")
    assert (operation.name, operation.tag, operation.method) == ("_view", "Small", "GET")


def test_a_path_and_method_not_declared_is_not_served() -> None:
    client = small_app().test_client()
    assert client.get("/nothing").status_code == 404
    assert client.get("/echo").status_code == 405


def test_two_operations_cannot_share_a_name() -> None:
    routes = Routes("Small")
    routes.route("/x", public=True)(_view)
    routes.route("/y", public=True)(_view)
    with pytest.raises(AssertionError, match="_view"):
        routes.register(Flask("service.http.app"))


@pytest.mark.parametrize("operation", OPERATIONS, ids=lambda operation: operation.name)
def test_every_operation_says_what_it_does_and_what_it_refuses(operation: Operation) -> None:
    guarded = {400, 401, 403} if operation.roles else set()
    with_body = {400, 413, 415, 422} if operation.body is not None else set()
    named = {404} if "<" in operation.rule else set()
    negotiated = {406} if operation.other_types else set()
    assert guarded | with_body | named | negotiated <= set(operation.problems)
    assert operation.summary
    assert operation.answers
    assert (operation.body is None) == (operation.example is None)


@pytest.mark.parametrize("operation", OPERATIONS, ids=lambda operation: operation.name)
def test_only_what_all_may_see_is_public(operation: Operation) -> None:
    open_to_all = {"/livez", "/readyz", "/.well-known/jwks.json", "/openapi.yaml", "/openapi.json", "/docs"}
    assert operation.public == (operation.rule in open_to_all)
    assert not (operation.public and operation.method != "GET")
