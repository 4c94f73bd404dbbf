"""A whole site for tests: a real store, a real key, and people with their tokens."""

from __future__ import annotations

import copy
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from flask import Flask
from flask.testing import FlaskClient
from werkzeug.test import TestResponse

from service.config import Settings
from service.demo import load
from service.http.app import create_app
from service.procedures.opening import open_site
from service.procedures.site import Site
from service.procedures.tokens import OPERATOR, issue
from service.storage.store import Store

PEOPLE = {
    "pipeline": ("submitter",),
    "other-pipeline": ("submitter",),
    "statistician": ("author",),
    "manager": ("approver",),
    "reviewer": ("reviewer",),
    "auditor": ("auditor",),
    "operator": ("operator",),
}


@dataclass(frozen=True)
class Plant:
    """A site, its application, and a token for each person."""

    site: Site
    app: Flask
    tokens: Mapping[str, str]

    def client(self) -> FlaskClient:
        return self.app.test_client()

    def post(self, path: str, body: object, who: str = "pipeline", **headers: str) -> TestResponse:
        named = {name.replace("_", "-"): value for name, value in headers.items()}
        return self.client().post(path, json=body, headers={**self.authorization(who), **named})

    def get(self, path: str, who: str = "auditor", **headers: str) -> TestResponse:
        named = {name.replace("_", "-"): value for name, value in headers.items()}
        return self.client().get(path, headers={**self.authorization(who), **named})

    def authorization(self, who: str) -> dict[str, str]:
        return {"Authorization": f"Bearer {self.tokens[who]}"}

    def approved(self, document: Mapping[str, Any] | None = None) -> Plant:
        """Register and approve a specification; the demonstration's where none is given."""
        document = document or load.specification()
        drafted = self.post("/v1/specifications", document, "statistician")
        assert drafted.status_code == 201, drafted.text
        answer = self.post(f"{drafted.headers['Location']}/approval", {"reason": "reviewed"}, "manager")
        assert answer.status_code == 201, answer.text
        return self

    def specification(self) -> dict[str, Any]:
        return copy.deepcopy(load.specification())

    def decided(self, lot: str = "PX-2601", who: str = "pipeline", **headers: str) -> TestResponse:
        return self.post("/v1/decisions", request_for(lot), who, **headers)


def settings_in(folder: Path, **given: str) -> Settings:
    environment = {f"ACCEPTANCE_{name}": value for name, value in given.items()}
    return Settings.from_environment({"ACCEPTANCE_DATA": str(folder), **environment})


def open_plant(folder: Path, **given: str) -> Plant:
    """Open a new plant in a folder."""
    settings = settings_in(folder, **given)
    Store.upgrade(settings.database_url)
    site = open_site(settings)
    tokens = {name: issue(site, OPERATOR, name, roles) for name, roles in PEOPLE.items()}
    return Plant(site, create_app(site, settings), tokens)


def request_for(lot: str) -> dict[str, Any]:
    """Return a body that asks for a decision on one of the demonstration's lots."""
    batch = next(batch for batch in load.batches() if batch["lot"] == lot)
    return {"batch": copy.deepcopy(batch), "specification": {"code": "premix-a"}}
