"""One declaration binds an operation's path, roles, shapes and words; nothing about it is said twice."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import partial
from typing import Any

from flask import Flask, Response, current_app, request
from marshmallow import Schema

from service.domain.actor import Actor, Role
from service.errors import NotPermittedError
from service.http.guards import load_body, load_query, read_body, refuse_query, refuse_unreadable
from service.procedures.site import Site
from service.procedures.tokens import recognise
from service.storage.store import Received

View = Callable[..., Response]


@dataclass(frozen=True, slots=True, kw_only=True)
class Operation:
    """One method on one path.

    Parameters
    ----------
    rule, method : str
        As Flask writes them.
    view : callable
        Called with the site, path parameters, and ``actor``, ``body``, ``received``, ``query`` as declared.
    summary, description, tag : str
        For the interface's document.
    roles : tuple of Role
        Any one of which is needed; empty only where `public`.
    public : bool
        Whether no token is needed.
    body, query : Schema or None
        Shape of the request.
    example : mapping or None
        A body that is taken.
    answers : mapping of int to Schema or str
        Shape, or media type, of the answer with each status.
    other_types : tuple of str
        Media types that the answer is offered in besides, by Accept.
    problems : tuple of int
        Statuses of the problems that it can answer with.
    headers : mapping of str to str
        Request headers that it reads, with their meaning.
    """

    rule: str
    method: str
    view: View
    summary: str
    description: str
    tag: str
    roles: tuple[Role, ...] = ()
    public: bool = False
    body: Schema | None = None
    query: Schema | None = None
    example: Mapping[str, Any] | None = None
    answers: Mapping[int, Schema | str] = field(default_factory=dict)
    other_types: tuple[str, ...] = ()
    problems: tuple[int, ...] = ()
    headers: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Refuse an operation that forgot to say who may use it."""
        if bool(self.roles) == self.public:
            raise TypeError(f"{self.method} {self.rule} needs roles, or public=True, and not both")

    @property
    def name(self) -> str:
        """Name of the operation, unique in the interface."""
        return self.view.__name__


class Routes:
    """The operations of one subject."""

    def __init__(self, tag: str) -> None:
        self.tag = tag
        self.operations: list[Operation] = []

    def route(self, rule: str, method: str = "GET", **declared: Any) -> Callable[[View], View]:
        """Declare an operation; summary and description are the view's docstring."""

        def declare(view: View) -> View:
            summary, _, description = (view.__doc__ or "").strip().partition("\n")
            operation = Operation(
                rule=rule,
                method=method,
                view=view,
                tag=self.tag,
                summary=summary.rstrip("."),
                description=" ".join(description.split()),
                **declared,
            )
            self.operations.append(operation)
            return view

        return declare

    def register(self, app: Flask) -> None:
        """Give every operation to an application, behind its guards."""
        for operation in self.operations:
            app.add_url_rule(operation.rule, operation.name, partial(_answer, operation), methods=[operation.method])


def site() -> Site:
    """Return the site that the application serves."""
    found: Site = current_app.extensions["acceptance"]
    return found


def _answer(operation: Operation, **given: Any) -> Response:
    """Establish who asks and what, each in its turn, and call the view."""
    parameters = tuple(given.values())
    if operation.roles:
        given["actor"] = _permitted(operation)
        refuse_unreadable(parameters)
    if operation.query is not None:
        given["query"] = load_query(operation.query)
    elif operation.roles:
        refuse_query()
    if operation.body is not None:
        body = read_body()
        given["body"] = load_body(body, operation.body)
        given["received"] = Received(body, request.mimetype)
    return operation.view(site(), **given)


def _permitted(operation: Operation) -> Actor:
    actor = recognise(site(), request.headers.get("Authorization"))
    if not actor.roles & set(operation.roles):
        wanted = " or ".join(operation.roles)
        raise NotPermittedError(f"This needs the role {wanted}; the token of {actor.subject} does not have it.")
    return actor
