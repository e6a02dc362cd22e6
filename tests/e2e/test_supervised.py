"""The real process under a supervisor's eyes: what it says on $NOTIFY_SOCKET, and its silence when it hangs."""

from __future__ import annotations

import signal
import socket
from pathlib import Path

import pytest
from helpers_service import DEADLINE_S, FEED, Process, configuration, events

PATH = f"/v1/feeds/{FEED}/events"
LIMIT_S = 2.0


class Supervisor:
    """A socket as systemd has one, and what came on it."""

    def __init__(self, folder: Path) -> None:
        self.socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self.socket.bind(str(folder / "notify"))
        self.environ = {"NOTIFY_SOCKET": str(folder / "notify"), "WATCHDOG_USEC": str(round(LIMIT_S * 1e6))}
        self.heard: list[str] = []

    def next(self, within_s: float = DEADLINE_S) -> str:
        """The next message; raises TimeoutError where none comes."""
        self.socket.settimeout(within_s)
        self.heard.append(self.socket.recv(4096).decode())
        return self.heard[-1]

    def until(self, message: str) -> list[str]:
        """The messages up to this one, without the watchdog's."""
        found = []
        while (heard := self.next()) != message:
            found += [heard] if heard != "WATCHDOG=1" else []
        return found


@pytest.fixture
def supervisor(tmp_path: Path):  # type: ignore[no-untyped-def]
    watching = Supervisor(tmp_path)
    yield watching
    watching.socket.close()


def send(process: Process, number: signal.Signals) -> None:
    assert process.process is not None
    process.process.send_signal(number)


def test_ready_reload_and_stop_are_told_in_this_order(tmp_path: Path, supervisor: Supervisor) -> None:
    with Process(tmp_path, configuration(tmp_path), supervisor.environ) as process:
        assert supervisor.until("READY=1") == []
        assert process.ask("/health/live").status == 200, "ready means that it can be asked"
        process.file.write_text(configuration(tmp_path, slack="2s"))
        send(process, signal.SIGHUP)
        (reloading,) = supervisor.until("READY=1")
        assert reloading.startswith("RELOADING=1\nMONOTONIC_USEC=")
        assert process.document()["slack_s"] == 2.0
        process.file.write_text("nonsense")
        send(process, signal.SIGHUP)
        assert len(supervisor.until("READY=1")) == 1, "a reload that was refused has ended too"
        assert process.terminate() == 0
        assert supervisor.until("STOPPING=1") == []


def test_the_watchdog_is_told_while_ticks_come_back_and_not_when_the_process_hangs(
    tmp_path: Path, supervisor: Supervisor
) -> None:
    with Process(tmp_path, configuration(tmp_path), supervisor.environ) as process:
        supervisor.until("READY=1")
        assert process.ask(PATH, events(range(10))).status == 200
        for _ in range(4):
            supervisor.until("WATCHDOG=1")
        send(process, signal.SIGSTOP)
        with pytest.raises(TimeoutError):  # what was on its way is read; then nothing comes for the whole limit
            while True:
                supervisor.next(LIMIT_S)
        send(process, signal.SIGCONT)
        supervisor.until("WATCHDOG=1")
        assert process.terminate() == 0
