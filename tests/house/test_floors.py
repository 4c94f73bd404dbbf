"""The layout that the contributor guide promises."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
SOURCES = sorted([*ROOT.glob("service/**/*.py"), *ROOT.glob("schemas/**/*.py")])


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_file_has_one_subject_and_at_most_300_lines(path: Path) -> None:
    assert len(path.read_text(encoding="utf-8").splitlines()) <= 300


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(ROOT)))
def test_no_production_name_looks_like_a_test(path: Path) -> None:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    names = [node.name for node in ast.walk(tree) if isinstance(node, ast.FunctionDef | ast.ClassDef)]
    assert [name for name in names if name.lower().startswith("test_") or name.startswith("Test")] == []


def test_the_top_level_is_as_agreed() -> None:
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True)  # noqa: S607
    top = {line.split("/")[0] for line in listed.stdout.splitlines()}
    agreed = {"README.md", "DEVELOPERS.md", "CHANGELOG.md", "LICENSE", "pyproject.toml", "openapi.yaml"}
    assert {name for name in top if not name.startswith(".")} <= agreed | {"service", "schemas", "tests", "deploy"}


def _loaded(module: str, *unwanted: str) -> list[str]:
    """Return which unwanted modules a new process has after importing one."""
    code = f"import {module}, sys; print(*sorted({set(unwanted)!r} & set(sys.modules)))"
    printed = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True)
    return printed.stdout.split()


def test_importing_the_service_brings_no_heavy_library() -> None:
    assert _loaded("service.http.app", "scipy.stats", "pandas", "matplotlib", "alembic", "requests") == []


def test_verify_needs_neither_flask_nor_a_store() -> None:
    assert _loaded("service.verification", "flask", "sqlalchemy", "marshmallow") == []
