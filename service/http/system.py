"""Health, public keys, and the interface's own document; open to all."""

from __future__ import annotations

from functools import cache

from flask import Response, current_app, render_template

from service.http import answers
from service.http.openapi import document, to_yaml
from service.http.routing import Operation, Routes
from service.procedures.site import Site
from service.signing import keys

routes: Routes = Routes("System")


@routes.route("/livez", public=True, answers={200: "text/plain"})
def live(site: Site) -> Response:
    """Say that the process answers."""
    return Response("live\n", mimetype="text/plain")


@routes.route("/readyz", public=True, answers={200: "text/plain"}, problems=(503,))
def ready(site: Site) -> Response:
    """Say that store and key can be used."""
    site.store.ping()
    return Response("ready\n", mimetype="text/plain")


@routes.route("/.well-known/jwks.json", public=True, answers={200: "application/json"})
def public_keys(site: Site) -> Response:
    """Give the public keys that records are signed with (RFC 7517).

    Compare the key's thumbprint, `kid`, with the one that the laboratory gave you on another way.
    """
    return answers.plain(keys.jwks(site.trusted.values()))


@routes.route("/openapi.yaml", public=True, answers={200: "application/yaml"})
def interface_yaml(site: Site) -> Response:
    """Give the interface's document as YAML."""
    return Response(_yaml(), mimetype="application/yaml")


@routes.route("/openapi.json", public=True, answers={200: "application/json"})
def interface_json(site: Site) -> Response:
    """Give the interface's document as JSON."""
    return answers.plain(document(_operations()))


@routes.route("/docs", public=True, answers={200: "text/html"})
def interface_page(site: Site) -> Response:
    """Show the interface to people; needs neither scripts nor the internet."""
    return Response(render_template("docs.html", interface=document(_operations())), mimetype="text/html")


def _operations() -> tuple[Operation, ...]:
    found: tuple[Operation, ...] = current_app.extensions["operations"]
    return found


@cache
def _yaml() -> str:
    return to_yaml(document(_operations()))
