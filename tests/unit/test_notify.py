"""What a supervisor is told: the messages of sd_notify(3) on a real socket, and nothing where nobody listens."""

from __future__ import annotations

import socket
from collections.abc import Iterator
from pathlib import Path

import pytest
from helpers_service import FEED, configuration, eventually, running
from hypothesis import given
from hypothesis import strategies as st
from strandline import notify


@pytest.fixture
def supervisor(tmp_path: Path) -> Iterator[socket.socket]:
    """A socket as a supervisor has one."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as listening:
        listening.bind(str(tmp_path / "notify"))
        listening.setblocking(False)
        yield listening


def environ_of(supervisor: socket.socket, **more: str) -> dict[str, str]:
    return {"NOTIFY_SOCKET": str(supervisor.getsockname()), **more}


def test_without_a_supervisor_nothing_is_told() -> None:
    assert not notify.tell("READY=1", environ={})
    watchdog = notify.Watchdog({})
    assert watchdog.every_s == 0
    watchdog.beat()


def test_lines_are_one_datagram(supervisor: socket.socket) -> None:
    assert notify.tell("RELOADING=1", "MONOTONIC_USEC=5", environ=environ_of(supervisor))
    assert supervisor.recv(1000) == b"RELOADING=1\nMONOTONIC_USEC=5"


def test_an_abstract_address_is_one() -> None:
    """unix(7): an abstract address begins with a NUL, for which sd_notify(3) writes "@"."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as listening:
        listening.bind("")  # the kernel chooses one
        name = listening.getsockname()
        assert name.startswith(b"\0")
        assert notify.tell("READY=1", environ={"NOTIFY_SOCKET": "@" + name[1:].decode()})
        listening.setblocking(False)
        assert listening.recv(1000) == b"READY=1"


@pytest.mark.parametrize("path", ["/nowhere/notify", "x" * 500, "@"])
def test_a_supervisor_out_of_reach_hinders_nothing(path: str, caplog: pytest.LogCaptureFixture) -> None:
    assert not notify.tell("READY=1", environ={"NOTIFY_SOCKET": path})
    assert "cannot be told READY=1" in caplog.text


def test_a_supervisor_that_does_not_read_hinders_nothing(
    supervisor: socket.socket, caplog: pytest.LogCaptureFixture
) -> None:
    environ = environ_of(supervisor)
    while notify.tell("WATCHDOG=1", environ=environ):
        pass
    assert "cannot be told WATCHDOG=1" in caplog.text


def test_a_reload_is_told_before_and_after_even_if_it_fails(
    supervisor: socket.socket, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("NOTIFY_SOCKET", str(supervisor.getsockname()))

    def reload() -> None:
        first, second = supervisor.recv(1000).split(b"\n")
        assert first == b"RELOADING=1" and second.removeprefix(b"MONOTONIC_USEC=").isdigit()
        raise ValueError("a defect")

    with pytest.raises(ValueError, match="a defect"):
        notify.reloading(reload)
    assert supervisor.recv(1000) == b"READY=1"


@given(st.integers(1, 600_000_000), st.lists(st.floats(0.001, 50), min_size=1, max_size=60))
def test_beats_are_never_more_than_needed_and_none_is_left_out(limit_us: int, steps: list[float]) -> None:
    """With ticks at any times: a tick says so exactly when a quarter of the limit has gone by since the last time."""
    now_s, told = 100.0, list[float]()
    watchdog = notify.Watchdog({"WATCHDOG_USEC": str(limit_us)}, lambda: now_s)
    every_s = limit_us / 1e6 / 4
    assert watchdog.every_s == every_s
    due_s = 0.0
    for step in steps:
        now_s += step
        before = watchdog._due_s
        watchdog.beat()
        if watchdog._due_s != before:
            told.append(now_s)
            assert now_s >= due_s
            due_s = now_s + every_s
        else:
            assert now_s < due_s
    assert told


def test_a_beat_is_told(supervisor: socket.socket) -> None:
    now_s = 1.0
    watchdog = notify.Watchdog(environ_of(supervisor, WATCHDOG_USEC="4000000"), lambda: now_s)
    watchdog.beat()
    assert supervisor.recv(1000) == b"WATCHDOG=1"
    now_s = 1.9
    watchdog.beat()
    with pytest.raises(BlockingIOError):
        supervisor.recv(1000)
    now_s = 2.0
    watchdog.beat()
    assert supervisor.recv(1000) == b"WATCHDOG=1"


async def test_a_beat_needs_the_tick_of_every_feed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    beats: list[int] = []
    async with running(configuration(tmp_path, slack="1h")) as service:
        await service.send([1])  # one that holds nothing would not be ticked at each beat
        ticks, tick = [0], service.runtime.tick

        def counted() -> None:
            ticks[0] += 1
            if len(beats) == 3:
                raise RuntimeError(f"a defect in the tick of {FEED}")
            tick()

        monkeypatch.setattr(service.runtime, "tick", counted)
        service.service.on_ticked = lambda: beats.append(ticks[0])
        await eventually(lambda: service.service.failure is not None)
        after = ticks[0]
        await eventually(lambda: ticks[0] > after)
        assert beats == [1, 2, 3], "one for each tick that came back, and none once one did not"


@pytest.mark.parametrize("text", ["", "soon", "-5", "²"])
def test_a_limit_that_is_none_is_none(text: str) -> None:
    assert notify.Watchdog({"WATCHDOG_USEC": text}).every_s == 0


def test_a_limit_for_another_process_is_not_ours() -> None:
    """sd_watchdog_enabled(3): $WATCHDOG_PID names the process, and children inherit both."""
    assert notify.Watchdog({"WATCHDOG_USEC": "1000000", "WATCHDOG_PID": "1"}).every_s == 0
