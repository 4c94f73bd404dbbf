"""Say what a specification will and will not detect."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from service.domain import planning
from service.domain.actor import Actor
from service.procedures.evaluate import any_specification
from service.procedures.site import Site, require, under


def plan(site: Site, actor: Actor, body: Mapping[str, Any]) -> dict[str, Any]:
    """Return power, number of units and operating characteristic of a specification.

    Parameters
    ----------
    site : Site
        The service.
    actor : Actor
        An author or approver.
    body : mapping
        ``specification``, ``units``, ``shift`` and perhaps ``power``, of the right shape.

    Raises
    ------
    NotFoundError, InvalidContentError, TooFewUnitsError
        Where specification or question cannot be used.
    """
    require(actor, "author", "approver")
    with under("/specification"):
        specification, version = any_specification(site, body["specification"])
    question = planning.Question(body["units"], body["shift"], body.get("power", 0.90))
    named = {"code": specification.code, "version": version, "digest": specification.digest}
    return {"specification": named, **planning.plan(specification, question)}
