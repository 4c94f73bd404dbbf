"""An auditor's verdict on a bundle: what holds, what is refuted, what cannot be checked."""

from __future__ import annotations

import copy
import json
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from cryptography.hazmat.primitives import serialization

from service.cli import main
from service.errors import ServiceError, UnknownFormatError, VerificationError
from service.signing import keys
from service.signing.envelope import open_envelope, sign
from service.stats.null_laws import NullLaws
from service.verification import differences, verify
from tests.plant import Plant, open_plant, request_for

LAWS = NullLaws()


@pytest.fixture(scope="module")
def plant(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Plant]:
    opened = open_plant(tmp_path_factory.mktemp("plant")).approved()
    yield opened
    opened.site.store.close()


@pytest.fixture(scope="module")
def bundle(plant: Plant) -> dict[str, Any]:
    made = plant.decided("PX-2604")
    return dict(plant.get(f"{made.headers['Location']}/bundle").json)


def _forged(plant: Plant, envelope: str, change: Callable[[dict[str, Any]], None]) -> str:
    """Change a record and sign it again with the right key: only its meaning can give it away."""
    document = open_envelope(envelope, plant.site.trusted).document
    change(document)
    return sign(document, plant.site.signer)


def test_a_bundle_as_it_was_given_holds(plant: Plant, bundle: Mapping[str, Any]) -> None:
    verified = verify(bundle, plant.site.trusted, LAWS)
    assert verified.decision["outcome"] == "held"
    assert len(verified.shown) == 4


def test_an_inline_specification_verifies_and_says_that_nobody_approved_it(plant: Plant) -> None:
    made = plant.post("/v1/decisions", request_for("PX-2602") | {"specification": plant.specification()})
    inline = plant.get(f"{made.headers['Location']}/bundle").json
    assert any("nobody approved it" in sentence for sentence in verify(inline, plant.site.trusted, LAWS).shown)


def _set(path: str, value: object) -> Callable[[dict[str, Any]], None]:
    def change(document: dict[str, Any]) -> None:
        *steps, last = [int(step) if step.isdigit() else step for step in path.split("/")]
        for step in steps:
            document = document[step]  # type: ignore[index]
        document[last] = value  # type: ignore[index]

    return change


@pytest.mark.parametrize(
    ("path", "value"),
    [
        ("outcome", "accepted"),
        ("test/p_value", 0.9),
        ("test/statistic", 1.0),
        ("mean/0", 601.0),
        ("screens/2/units", []),
        ("screens/3/p_value", 0.5),
        ("follow_up/characteristics/2/closed_p_value", 0.001),
        ("reasons/0/text", "All is well."),
        ("cautions", []),
        ("power/smallest_shift_found/0/shift", 0.1),
    ],
)
def test_a_record_whose_numbers_do_not_follow_is_refuted(
    plant: Plant, bundle: Mapping[str, Any], path: str, value: object
) -> None:
    forged = {**bundle, "decision": _forged(plant, bundle["decision"], _set(path, value))}
    with pytest.raises(VerificationError, match="Recomputed") as caught:
        verify(forged, plant.site.trusted, LAWS)
    assert caught.value.faults


@pytest.mark.parametrize(
    ("member", "path", "value", "message"),
    [
        ("decision", "specification/digest", "0" * 64, "another specification or version"),
        ("decision", "specification/version", 2, "another specification or version"),
        ("decision", "batch/digest", "0" * 64, "not the one that was decided"),
        ("decision", "origin", "elsewhere.example/log", "belongs to another log"),
        ("decision", "decided_at", "2020-01-01T00:00:00.000000Z", "not yet effective"),
        ("decision", "record_type", "disposition", "belongs"),
        ("specification_drafted", "document/significance_level", 0.5, "does not have the digest"),
        ("specification_approved", "approved_by", "statistician", "approved their own"),
        ("specification_approved", "specification/code", "premix-b", "another specification or version"),
    ],
)
def test_a_record_that_contradicts_the_others_is_refuted(
    plant: Plant, bundle: Mapping[str, Any], member: str, path: str, value: object, message: str
) -> None:
    forged = {**bundle, member: _forged(plant, bundle[member], _set(path, value))}
    with pytest.raises(VerificationError, match=message):
        verify(forged, plant.site.trusted, LAWS)


def test_a_changed_batch_is_refuted(plant: Plant, bundle: Mapping[str, Any]) -> None:
    forged = copy.deepcopy(dict(bundle))
    forged["batch"]["rows"][0][0] += 0.1
    with pytest.raises(VerificationError, match="not the one that was decided"):
        verify(forged, plant.site.trusted, LAWS)


@pytest.mark.parametrize("member", ["decision", "specification_drafted", "specification_approved", "batch"])
def test_a_bundle_with_a_part_missing_is_refuted(plant: Plant, bundle: Mapping[str, Any], member: str) -> None:
    with pytest.raises(VerificationError):
        verify({name: part for name, part in bundle.items() if name != member}, plant.site.trusted, LAWS)


def test_a_changed_character_of_the_envelope_is_refuted(plant: Plant, bundle: Mapping[str, Any]) -> None:
    envelope = bundle["decision"]
    for place in range(130, len(envelope), 997):
        changed = envelope[:place] + ("A" if envelope[place] != "A" else "B") + envelope[place + 1 :]
        with pytest.raises(ServiceError):
            verify({**bundle, "decision": changed}, plant.site.trusted, LAWS)


def test_another_key_cannot_check(bundle: Mapping[str, Any], tmp_path: Path) -> None:
    keys.create_key(tmp_path / "other.pem")
    other = keys.trusted_keys(keys.jwks([keys.load_signer(tmp_path / "other.pem").public_key]))
    with pytest.raises(UnknownFormatError, match="trusted keys"):
        verify(bundle, other, LAWS)


def test_numbers_of_another_decision_rule_are_not_called_verified(plant: Plant, bundle: Mapping[str, Any]) -> None:
    older = {**bundle, "decision": _forged(plant, bundle["decision"], _set("engine/decision_rule", "0"))}
    assert "decision rule '0'" in verify(older, plant.site.trusted, LAWS).not_shown[0]


def test_rounding_is_no_difference_but_a_digit_is() -> None:
    assert not list(differences({"a": [1.0, 0.1 + 0.2]}, {"a": [1, 0.3]}, ""))
    assert [fault.pointer for fault in differences({"a": [1.0]}, {"a": [1.0 + 1e-8]}, "x")] == ["/x/a/0"]
    assert list(differences({"a": 1}, {}, ""))
    assert list(differences([1], [1, 2], ""))


# --- through the command


def _run(bundle: object, key: str, tmp_path: Path, *options: str) -> tuple[int, str]:
    (tmp_path / "a.bundle").write_text(json.dumps(bundle), encoding="utf-8")
    (tmp_path / "site.pub").write_text(key, encoding="utf-8")
    result = CliRunner().invoke(
        main, ["verify", str(tmp_path / "a.bundle"), "--key", str(tmp_path / "site.pub"), *options]
    )
    return result.exit_code, result.output


def test_the_command_says_what_holds_and_what_it_cannot_show(
    plant: Plant, bundle: Mapping[str, Any], tmp_path: Path
) -> None:
    code, said = _run(bundle, plant.client().get("/.well-known/jwks.json").text, tmp_path)
    assert code == 0
    assert "verdict: holds" in said
    assert "not shown:" in said


def test_the_command_takes_a_key_as_pem(plant: Plant, bundle: Mapping[str, Any], tmp_path: Path) -> None:
    pem = plant.site.signer.public_key.public_bytes(
        serialization.Encoding.PEM, serialization.PublicFormat.SubjectPublicKeyInfo
    )
    code, said = _run(bundle, pem.decode(), tmp_path, "--json")
    assert (code, json.loads(said)["verdict"]) == (0, "holds")


def test_the_command_tells_refuted_from_not_checkable(plant: Plant, bundle: Mapping[str, Any], tmp_path: Path) -> None:
    jwks = plant.client().get("/.well-known/jwks.json").text
    forged = {**bundle, "decision": _forged(plant, bundle["decision"], _set("outcome", "accepted"))}
    assert _run(forged, jwks, tmp_path)[0] == 1
    assert _run({**bundle, "format": "other/1"}, jwks, tmp_path)[0] == 2
    assert _run(bundle, "no key", tmp_path)[0] == 2
    assert _run("no bundle", jwks, tmp_path)[0] == 2
