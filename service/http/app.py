"""The application, wired."""

from __future__ import annotations

import os

from flask import Flask, Response
from jinja2 import StrictUndefined

from service.config import Settings
from service.http import decisions, plans, problems, specifications, system
from service.http.openapi import in_lines, in_words
from service.http.routing import Operation
from service.procedures.opening import open_site
from service.procedures.site import Site

SUBJECTS = (decisions.routes, specifications.routes, plans.routes, system.routes)

OPERATIONS: tuple[Operation, ...] = tuple(operation for routes in SUBJECTS for operation in routes.operations)
"""Every operation of the interface, in the order in which its document lists them."""

_HEADERS = {
    "Content-Security-Policy": "default-src 'none'; style-src 'self'; img-src 'self' data:; form-action 'self'; "
    "frame-ancestors 'none'; base-uri 'none'",
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cache-Control": "no-store",
}


def create_app(site: Site | None = None, settings: Settings | None = None) -> Flask:
    """Return the application.

    Parameters
    ----------
    site : Site, optional
        What it serves; opened from the settings where left out.
    settings : Settings, optional
        Read from the environment where left out.
    """
    settings = settings or Settings.from_environment(os.environ)
    app = Flask(__name__)
    app.jinja_env.undefined = StrictUndefined
    app.jinja_env.filters.update(in_words=in_words, in_lines=in_lines)
    app.json.sort_keys = False  # type: ignore[attr-defined]
    # One byte more than the limit, so that a chunked body cut there is seen to be too large.
    app.config.update(BODY_LIMIT=settings.body_limit, MAX_CONTENT_LENGTH=settings.body_limit + 1)
    app.extensions["acceptance"] = site or open_site(settings)
    app.extensions["operations"] = OPERATIONS
    problems.register(app)
    for routes in SUBJECTS:
        routes.register(app)
    app.after_request(_with_headers)
    return app


def _with_headers(answer: Response) -> Response:
    for name, value in _HEADERS.items():
        answer.headers.setdefault(name, value)
    return answer
