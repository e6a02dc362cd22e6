"""The real process as container file and manifest run it: a root that is read-only, no rights, its health check.

No container engine runs where these tests run. Linux itself gives the same two things: a mount namespace in which all
but `data_dir` is read-only, and a process without capabilities that can gain none (mount_namespaces(7), setpriv(1)).
"""

from __future__ import annotations

import json
import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest
from helpers_deploy import DEPLOY, RUNBOOK, tool
from helpers_service import DEADLINE_S, FEED, Process, configuration, events, stored

PATH = f"/v1/feeds/{FEED}/events"
UTIL_LINUX = "Debian: apt-get install util-linux"
# $1: the only folder that can be written to; $2: one that cannot; then the command. "sh -e" stops at the first fault.
CONTAINED = """
mount --make-rprivate /
mount --bind "$1" "$1"
mount -o remount,bind,ro /
if touch "$2/witness" 2> /dev/null; then echo "the root can be written to" >&2; exit 1; fi
cd "$1"
shift 2
exec setpriv --bounding-set=-all --inh-caps=-all --no-new-privs "$@"
"""


class Contained(Process):
    """`strandline serve` with nothing that it may write to but the folder `data`, and no rights."""

    def begin(self) -> subprocess.Popen[bytes]:
        room = self.folder / "data"
        room.mkdir(exist_ok=True)
        serve = [tool("setpriv", UTIL_LINUX) and sys.executable, "-m", "strandline.cli", "serve", str(self.file)]
        as_root = [] if os.geteuid() == 0 else ["--user", "--map-root-user"]
        shell = ["sh", "-e", "-c", CONTAINED, "sh", str(room), str(self.folder)]
        with self.log.open("ab") as log:
            self.process = subprocess.Popen(
                [tool("unshare", UTIL_LINUX), *as_root, "--mount", *shell, *serve],
                stdin=subprocess.DEVNULL,
                stdout=subprocess.PIPE,
                stderr=log,
                env={**self._environ, "PYTHONDONTWRITEBYTECODE": "1"},
            )
        return self.process


@pytest.fixture
def contained(tmp_path: Path):  # type: ignore[no-untyped-def]
    sink = f'[[feed.sink]]\nkind = "sqlite"\npath = {json.dumps(str(tmp_path / "data" / "river.db"))}'
    with Contained(tmp_path, configuration(tmp_path, sinks=sink)) as process:
        yield process


def health_check(url: str) -> int:
    """The container file's own health check, against this address; its exit code."""
    text = (DEPLOY / "container" / "Containerfile").read_text()
    (found,) = re.findall(r"^HEALTHCHECK(?:.*\\\n)* +CMD (\[.*\])$", text, re.MULTILINE)
    command = json.loads(found)
    script = command[2].replace("http://127.0.0.1:8600", url)
    assert script != command[2]
    asked = [sys.executable, command[1], script]
    return subprocess.run(asked, capture_output=True, check=False, timeout=DEADLINE_S).returncode


def test_it_works_on_a_root_that_cannot_be_written_to_and_without_rights(contained: Contained) -> None:
    assert contained.process is not None
    status = Path(f"/proc/{contained.process.pid}/status").read_text()
    assert {int(bits, 16) for bits in re.findall(r"^Cap\w+:\s*(\w+)$", status, re.MULTILINE)} == {0}
    assert contained.ask(PATH, events([3, 1, 2])).status == 200
    assert contained.ask(PATH, events([0])).json["late"] == 1
    contained.drain()
    assert health_check(contained.url) == 0
    assert contained.ask("/metrics").status == 200
    assert contained.terminate() == 0
    assert health_check(contained.url) != 0
    contained.folder = contained.folder / "data"  # where the sink's file had to be
    assert stored(contained.folder) == [1, 2, 3] and stored(contained.folder, "late") == [0]


def test_the_acts_of_the_runbook_are_acts(tmp_path: Path) -> None:
    """Each line that the runbook tells the reader to type is taken by the service, and answered with a sentence."""
    lines = re.findall(r"^    strandline (act \w+) \$U (.*)$", RUNBOOK.read_text(), re.MULTILINE)
    acts = ["act excuse", "act drain", "act slack", "act slack", "act pause", "act resume"]
    assert [act for act, _ in lines] == acts
    with Process(tmp_path, configuration(tmp_path)) as process:
        assert process.ask(PATH, events([1], "gw-1")).status == 200
        for act, rest in lines:
            where = ["--feed", FEED, "--url", process.url]
            command = [*act.split(), *where, *shlex.split(rest, comments=True)]
            program = [sys.executable, "-m", "strandline.cli"]
            done = subprocess.run([*program, *command], check=False, capture_output=True, text=True, timeout=DEADLINE_S)
            assert (done.returncode, done.stderr) == (0, "") and done.stdout.endswith(".\n"), (command, done)
