"""What the first minute says: where the watermark stands, where it listens, and what is in the way."""

from __future__ import annotations

import errno
import re
import socket
from contextlib import ExitStack
from pathlib import Path

import pytest
from helpers_service import Process, config_of, configuration, event_line, running
from strandline.app import Service
from strandline.config import Address
from strandline.errors import StrandlineError
from strandline.listening import not_free


def test_the_first_lines_are_for_people_and_say_things_once(tmp_path: Path) -> None:
    text = configuration(tmp_path)
    with Process(tmp_path, text) as process:
        port = process.url.rpartition(":")[2]
        process.ask("/v1/feeds/river-gauges/events", event_line(5) + b"\n")
        process.terminate()
        process.start()
        process.terminate()
    log = process.log.read_text()
    assert "0 events held, no watermark yet" in log and "-9223372036854775808" not in log
    assert "watermark 2023-11-14T22:13:25Z" in log
    assert not re.search(rf"(?<!\d){port}(?!\d)", log), "where it listens is told on stdout"


@pytest.mark.parametrize("host", ["127.0.0.1", "localhost"])
def test_a_port_in_use_is_named_before_anything_is_made(tmp_path: Path, host: str) -> None:
    with socket.socket() as taken, ExitStack() as ending:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        process = Process(tmp_path, configuration(tmp_path).replace("127.0.0.1:0", f"{host}:{port}"))
        ending.push(process)  # which ends it where it did not end by itself
        process.begin()
        assert process.wait() == 3
    told = process.log.read_text()
    assert f'listen = "{host}:{port}"' in told and "another program listens there" in told
    assert "Errno" not in told and "Traceback" not in told and not (tmp_path / "data").exists()


async def test_a_port_that_is_free_again_is_taken_at_once(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([1])
        address = service.url.removeprefix("http://")
    async with running(configuration(tmp_path).replace("127.0.0.1:0", address)) as service:
        assert service.url == f"http://{address}"


@pytest.mark.parametrize(("number", "words"), [(errno.EACCES, "below 1024"), (errno.EADDRNOTAVAIL, "no such address")])
def test_each_obstacle_says_what_to_do(number: int, words: str) -> None:
    error = not_free(Address("127.0.0.1", 80), OSError(number, "why"))
    assert 'listen = "127.0.0.1:80"' in str(error) and words in str(error)


async def test_an_address_of_another_machine_is_named(tmp_path: Path) -> None:
    # 192.0.2.1 is for documentation (RFC 5737): no machine has it.
    text = configuration(tmp_path, top="").replace("127.0.0.1:0", "192.0.2.1:8600") + "\n[access]\nopen = true\n"
    with pytest.raises(StrandlineError, match=r"192\.0\.2\.1:8600.*no such address"):
        await Service(config_of(text)).start()
