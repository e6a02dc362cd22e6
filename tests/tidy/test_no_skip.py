"""The rule that nothing is skipped in CI: pytest is run on a folder of tests that skip themselves in every way."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

TESTS = Path(__file__).resolve().parents[1]

SKIPPING = {
    "test_marked.py": "import pytest\n\n@pytest.mark.skip(reason='no browser here')\ndef test_a(): ...\n",
    "test_called.py": "import pytest\n\ndef test_b():\n    pytest.skip('no store here')\n",
    "test_module.py": "import pytest\n\npytest.skip('no tool here', allow_module_level=True)\n",
    "test_fixture.py": "import pytest\n\n@pytest.fixture\ndef f():\n    pytest.skip('no f')\n\ndef test_c(f): ...\n",
}


def _run(folder: Path, no_skip: bool) -> subprocess.CompletedProcess[str]:
    """Pytest over a folder, with this tree's conftest as a plugin."""
    environ = {name: value for name, value in os.environ.items() if not name.startswith("PYTEST_")}
    environ["PYTHONPATH"] = os.pathsep.join([str(TESTS), environ.get("PYTHONPATH", "")])
    environ |= {"STRANDLINE_TESTS_NO_SKIP": "1"} if no_skip else {}
    options = ["-p", "conftest", "-p", "no:cacheprovider", "-c", os.devnull, "--continue-on-collection-errors"]
    command = [sys.executable, "-m", "pytest", "-q", *options, "."]
    return subprocess.run(command, cwd=folder, env=environ, capture_output=True, text=True, check=False)


def test_every_way_to_skip_fails_where_none_is_allowed(tmp_path: Path) -> None:
    for name, text in SKIPPING.items():
        (tmp_path / name).write_text(text)
    strict = _run(tmp_path, no_skip=True)
    for reason in ("no browser here", "no store here", "no tool here", "no f"):
        assert f"skipped where no test may be: Skipped: {reason}" in strict.stdout, strict.stdout
    assert strict.returncode != 0
    usual = _run(tmp_path, no_skip=False)
    assert "4 skipped" in usual.stdout


def test_expected_failures_stay_allowed_and_the_variable_is_not_passed_on(tmp_path: Path) -> None:
    (tmp_path / "test_it.py").write_text(
        "import os\nimport pytest\n\n@pytest.mark.xfail\ndef test_x():\n    assert False\n\n"
        "def test_environment():\n    assert 'STRANDLINE_TESTS_NO_SKIP' not in os.environ\n"
    )
    strict = _run(tmp_path, no_skip=True)
    assert strict.returncode == 0, strict.stdout
    assert "1 passed, 1 xfailed" in strict.stdout
