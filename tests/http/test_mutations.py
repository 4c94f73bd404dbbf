"""Whatever a body holds, it is answered or refused by name; never by a fault of the service."""

from __future__ import annotations

import copy
import json
from collections.abc import Iterator
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from schemas.plan import PLAN_EXAMPLE
from schemas.specification import SCREENS
from tests.plant import Plant, open_plant, request_for

_NUMBERS = st.sampled_from([0, 1, -1, 0.5, 1e-12, 1e100, -1e100, 1e-300, 5e-324, 600, 2**53, 1e15, 3, 118, 1e-9])
_WORDS = st.sampled_from(
    ["", "a", "iron", "mg/kg", "premix-a", "known", "batch", "pooled", "hold", "note", "sign-flip"]
)
_VALUES = st.recursive(
    st.none() | st.booleans() | _NUMBERS | st.floats(-1e3, 1e3) | _WORDS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(_WORDS, inner, max_size=2),
    max_leaves=5,
)
_EXACT = settings(max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])


@pytest.fixture(scope="module")
def open_to_all(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Plant]:
    opened = open_plant(tmp_path_factory.mktemp("mutations")).approved()
    yield opened
    opened.site.store.close()


def _places(value: Any, place: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    inner = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    return [place, *(found for name, one in inner for found in _places(one, (*place, name)))]


def _mutated(data: st.DataObject, document: dict[str, Any]) -> dict[str, Any]:
    """Return a document with one to four of its places changed: replaced, left out, or repeated."""
    changed = copy.deepcopy(document)
    for _ in range(data.draw(st.integers(1, 4))):
        *way, last = data.draw(st.sampled_from(_places(changed)[1:] or [("batch",)]))
        at = changed
        for step in way:
            at = at[step]
        kind = data.draw(st.sampled_from(["number", "value", "removed", "repeated"]))
        if kind == "removed":
            del at[last]
        elif kind == "repeated" and isinstance(at, list):
            at.append(copy.deepcopy(at[last]))
        else:
            at[last] = data.draw(_NUMBERS if kind == "number" else _VALUES)
    return changed


def _inline(plant: Plant, lot: str, **members: object) -> dict[str, Any]:
    every = {name: {"level": 0.05} for name in SCREENS}
    return request_for(lot) | {"specification": plant.specification() | {"screens": every} | members}


def _is_answered(plant: Plant, path: str, body: dict[str, Any], who: str = "pipeline") -> None:
    answer = plant.post(path, body, who)
    assert answer.status_code in (200, 404, 409, 422), (answer.text, json.dumps(body))
    if answer.status_code == 422:
        assert answer.json["errors"]
        assert all(fault["detail"] and fault["code"] for fault in answer.json["errors"])


@pytest.mark.parametrize("lot", ["PX-2601", "PX-2605"])
@given(data=st.data())
@_EXACT
def test_a_mutated_batch_is_judged_or_refused(open_to_all: Plant, lot: str, data: st.DataObject) -> None:
    body = request_for(lot)
    _is_answered(open_to_all, "/v1/evaluations", body | {"batch": _mutated(data, body["batch"])})


@pytest.mark.parametrize("kind", ["known", "reference", "batch", "pooled"])
@pytest.mark.parametrize("form", ["difference", "equivalence"])
@given(data=st.data())
@_EXACT
def test_a_mutated_specification_is_used_or_refused(
    open_to_all: Plant, kind: str, form: str, data: st.DataObject
) -> None:
    covariance: dict[str, Any] = {"kind": kind}
    if kind != "batch":
        covariance["matrix"] = open_to_all.specification()["covariance"]["matrix"]
    if kind in ("reference", "pooled"):
        covariance["degrees_of_freedom"] = 118
    question: dict[str, Any] = {"form": form, **({"delta": 1.0} if form == "equivalence" else {})}
    body = _inline(open_to_all, "PX-2601", covariance=covariance, question=question)
    body["specification"] = _mutated(data, body["specification"])
    _is_answered(open_to_all, "/v1/evaluations", body)


@given(data=st.data())
@_EXACT
def test_a_mutated_plan_is_answered_or_refused(open_to_all: Plant, data: st.DataObject) -> None:
    _is_answered(open_to_all, "/v1/plans", _mutated(data, dict(PLAN_EXAMPLE)), "statistician")
