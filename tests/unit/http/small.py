"""A small application of two or three operations, to see what stands between them and the wire."""

from __future__ import annotations

from typing import Any

from flask import Flask, Response
from marshmallow import fields

from schemas.base import Shape
from schemas.fields import Choice, Count, Matrix, Number, Text, Written
from service.errors import ServiceError
from service.http import answers, problems
from service.http.guards import negotiate
from service.http.routing import Routes

LIMIT = 200


EXAMPLE = {"lot": "PX-2601", "share": 0.5}


class GroupSchema(Shape):
    """A few members, one of which has a name that a pointer must escape."""

    lot = Text(required=True)
    rows = Matrix(missing_allowed=True)
    share = Number(above=0, below=1)
    inner = fields.Nested(Shape.from_dict({"a/b~c": Count()}, name="Inner"))


class ListingSchema(Shape):
    """Query parameters."""

    outcome = Choice("accepted", "rejected")
    limit = Written()


def small_app(error: Exception | None = None) -> Flask:
    """Return an application whose ``/fail`` raises `error`."""
    routes = Routes("Small")

    @routes.route(
        "/echo", "POST", public=True, body=GroupSchema(), example={"lot": "PX-2601"}, answers={200: "text/plain"}
    )
    def echo(site: object, body: dict[str, Any], received: Any) -> Response:
        """Give the body back as it was read."""
        return answers.plain({"body": body, "length": len(received.body)})

    @routes.route("/list", public=True, query=ListingSchema(), answers={200: "text/plain"})
    def listing(site: object, query: dict[str, Any]) -> Response:
        """Give the query back as it was read."""
        return answers.plain(query)

    @routes.route("/either/<name>", public=True, answers={200: "text/plain"}, other_types=("text/csv",))
    def either(site: object, name: str) -> Response:
        """Give one of two types."""
        return Response(name, mimetype=negotiate("text/plain", "text/csv"))

    @routes.route("/fail", public=True, answers={200: "text/plain"})
    def fail(site: object) -> Response:
        """Raise what the application was made with."""
        raise error or ServiceError("nothing to raise")

    app = Flask("service.http.app")
    app.config.update(BODY_LIMIT=LIMIT, MAX_CONTENT_LENGTH=LIMIT + 1)
    app.extensions["acceptance"] = None
    app.extensions["operations"] = routes.operations
    problems.register(app)
    routes.register(app)
    return app
