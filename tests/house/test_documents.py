"""The documents say what is true: blocks of the README run, and nothing that exists is left out."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from schemas.specification import SCREENS
from service.cli import main
from service.config import SETTINGS
from service.demo.run import Demonstration, run_lots
from service.domain.actor import ROLES
from service.domain.specification import SCREEN_NAMES

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")


@pytest.mark.parametrize("name", SETTINGS)
def test_every_setting_is_documented_with_its_meaning(name: str) -> None:
    assert f"| `ACCEPTANCE_{name}` | {SETTINGS[name]} |" in README


@pytest.mark.parametrize("command", sorted(main.commands))
def test_every_command_is_documented(command: str) -> None:
    assert f"`acceptance {command}" in README


@pytest.mark.parametrize("screen", SCREEN_NAMES)
def test_every_screen_is_documented(screen: str) -> None:
    assert f"`{screen}`" in README


def test_shapes_and_meaning_know_the_same_screens() -> None:
    assert SCREENS == SCREEN_NAMES


def test_every_role_is_documented() -> None:
    assert f"roles: {', '.join(ROLES)}" in README


def test_the_caution_stands_in_readme_and_help() -> None:
    sentence = "Release stays with the laboratory's responsible person"
    assert sentence in README.replace("\n", " ")
    assert sentence.lower() in " ".join((main.help or "").split()).lower()


def test_the_blocks_of_the_readme_run_one_after_the_other(tmp_path: Path) -> None:
    demonstration = Demonstration(tmp_path / "acceptance-demo")
    (tmp_path / "specification.json").write_bytes((ROOT / "service/demo/specification.json").read_bytes())
    (tmp_path / "acceptance").write_text(f'#!/bin/sh\nexec "{sys.executable}" -m service "$@"\n', encoding="ascii")
    (tmp_path / "acceptance").chmod(0o755)
    with run_lots(demonstration, say=lambda _: None) as address:
        blocks = "\n".join(re.findall(r"```sh\n(.*?)```", README, flags=re.DOTALL))
        script = "set -euo pipefail\n" + blocks.replace("http://127.0.0.1:8080", address)
        environment = {**os.environ, "PATH": f"{tmp_path}:{os.environ['PATH']}", "PYTHONPATH": str(ROOT)}
        done = subprocess.run(
            ["bash", "-c", script],  # noqa: S607 - whichever bash there is
            cwd=tmp_path,
            env=environment,
            capture_output=True,
            text=True,
            check=False,
        )
    assert done.returncode == 0, done.stderr
    assert "verdict: holds" in done.stdout
    assert "smallest units: 18" in done.stdout
