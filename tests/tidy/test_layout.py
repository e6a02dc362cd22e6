"""Where things stand: the top level, the packages, and a docstring at the head of every module."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
TOP = {"README.md", "DEVELOPERS.md", "pyproject.toml", "service", "tests", "deploy", "loadgen"}
PACKAGES = (ROOT / "service" / "strandline", ROOT / "loadgen" / "strandline_loadgen")
MODULES = sorted(path for folder in ("service", "loadgen", "tests") for path in (ROOT / folder).rglob("*.py"))
# Only the closing line of an empty file that marks a package is too little to say anything about.
HEAD_CHARACTERS_AT_LEAST = 20


def _ignored() -> set[str]:
    """Folders that .gitignore names: running the service or the tests may leave them at the top."""
    return {line.strip().rstrip("/") for line in (ROOT / ".gitignore").read_text().splitlines()}


def test_the_top_level_is_what_the_design_fixes() -> None:
    seen = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")} - _ignored()
    assert seen == TOP


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_module_says_at_its_head_what_lives_there(path: Path) -> None:
    assert len(ast.get_docstring(ast.parse(path.read_text())) or "") >= HEAD_CHARACTERS_AT_LEAST


@pytest.mark.parametrize("package", PACKAGES, ids=lambda path: path.name)
def test_every_folder_of_a_package_is_a_package_with_something_in_it(package: Path) -> None:
    folders = [package, *(path for path in package.rglob("*") if path.is_dir() and path.name != "__pycache__")]
    for folder in folders:
        files = [path.name for path in folder.iterdir() if path.is_file()]
        assert files, f"{folder.relative_to(ROOT)} is empty"
        if any(name.endswith(".py") for name in files):
            assert "__init__.py" in files, f"{folder.relative_to(ROOT)} has modules, but no __init__.py"


def test_names_of_test_modules_are_unique() -> None:
    """They are imported by file; two of one name would be told apart by their folder only, in every report."""
    names = [path.name for path in (ROOT / "tests").rglob("test_*.py")]
    assert sorted(names) == sorted(set(names))
    assert not list((ROOT / "tests").rglob("__init__.py"))
