"""Plan: what a specification will and will not detect."""

from __future__ import annotations

from typing import Any

from flask import Response

from schemas.plan import PLAN_EXAMPLE, PlanRequestSchema, PlanSchema
from service.domain.actor import Actor
from service.http import answers
from service.http.routing import Routes
from service.procedures.plan import plan
from service.procedures.site import Site
from service.storage.store import Received

routes = Routes("Planning")


@routes.route(
    "/v1/plans",
    "POST",
    roles=("author", "approver"),
    body=PlanRequestSchema(),
    example=PLAN_EXAMPLE,
    answers={200: PlanSchema()},
    problems=(400, 401, 403, 404, 413, 415, 422, 503),
)
def plan_specification(site: Site, actor: Actor, body: dict[str, Any], received: Received) -> Response:
    """Compute power, number of units, smallest shift found and operating characteristic.

    The specification is whole, or any registered version, drafts too.
    """
    return answers.plain(plan(site, actor, body))
