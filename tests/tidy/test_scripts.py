"""The set-up scripts where they need no network: they parse, say what is missing, and do nothing when all is done.

That they set a fresh clone up is shown by every run in CI, which begins with one.
"""

from __future__ import annotations

import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
SCRIPTS = sorted([*(ROOT / "deploy").glob("*.sh"), ROOT / "tests" / "run.sh", ROOT / ".ci" / "run"])


@pytest.fixture
def clone(tmp_path: Path) -> Path:
    """As much of a clone as set-up.sh looks at, in a folder whose name needs quoting."""
    clone = tmp_path / "a clone's [folder]"
    (clone / "deploy").mkdir(parents=True)
    shutil.copy(ROOT / "deploy" / "set-up.sh", clone / "deploy")
    shutil.copy(ROOT / "pyproject.toml", clone)
    return clone


def set_up(clone: Path, *arguments: str, path: str) -> subprocess.CompletedProcess[str]:
    """Run the script from another folder, with only `path` to find programs in."""
    command = ["/bin/sh", str(clone / "deploy" / "set-up.sh"), *arguments]
    return subprocess.run(command, cwd="/", env={"PATH": path}, capture_output=True, text=True, check=False)


@pytest.fixture
def programs(tmp_path: Path) -> str:
    """A folder with the programs that every system has, and no Python."""
    folder = tmp_path / "programs"
    folder.mkdir()
    for name in ("cat", "cksum", "dirname", "rm"):
        found = shutil.which(name)
        assert found
        (folder / name).symlink_to(found)
    return str(folder)


@pytest.mark.parametrize("script", SCRIPTS, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_script_parses_and_stops_at_the_first_fault(script: Path) -> None:
    shell = "bash" if "bash" in script.read_text().splitlines()[0] else "sh"
    assert subprocess.run([shell, "-n", str(script)], check=False).returncode == 0
    assert "\nset -eu" in script.read_text()


def test_a_missing_python_is_named(clone: Path, programs: str) -> None:
    run = set_up(clone, path=programs)
    assert run.returncode == 1
    assert "needs Python 3.11 or newer on the PATH" in run.stderr
    assert not (clone / ".venv").exists()


@pytest.mark.parametrize("extra", ["", "test"])
def test_what_is_set_up_is_left_alone(clone: Path, programs: str, extra: str) -> None:
    (clone / ".venv" / "bin").mkdir(parents=True)
    (clone / ".venv" / "bin" / "python").symlink_to(sys.executable)
    cksum = subprocess.run(["cksum"], input=(clone / "pyproject.toml").read_bytes(), capture_output=True, check=True)
    stamp = clone / ".venv" / f".installed{'-' if extra else ''}{extra}"
    stamp.write_text(f"{clone} {cksum.stdout.decode()}")
    before = sorted(clone.rglob("*"))
    run = set_up(clone, *([extra] if extra else []), path=programs)
    assert (run.returncode, run.stdout, run.stderr) == (0, "", "")
    assert set_up(clone, path=programs).returncode == 0, "an environment with an extra serves who asks for none"
    assert sorted(clone.rglob("*")) == before
