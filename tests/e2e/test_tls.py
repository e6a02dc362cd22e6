"""TLS in front of the real service: certificates made in the test, old versions, reload under way, hostile handshakes.

Outside opinions: Python's own client (OpenSSL underneath) judges the handshakes, `trustme` makes the certificates.
"""

from __future__ import annotations

import asyncio
import hashlib
import json
import socket
import ssl
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager, suppress
from pathlib import Path

import aiohttp
import pytest
import trustme
from helpers_access import asking, bearer, everything, trusting, write_pair, write_tokens
from helpers_service import DEADLINE_S, FEED, NDJSON, Process, config_of, configuration, events, eventually
from strandline import tls
from strandline.app import Service
from strandline.cli import main
from strandline.config import parse
from strandline.errors import ConfigError
from strandline_loadgen.cli import main as loadgen

AUTHORITY = trustme.CA()


@asynccontextmanager
async def secured(folder: Path, top: str = "", **keys: object) -> AsyncIterator[Service]:
    """A service that speaks TLS, on the test's loop."""
    pair = write_pair(folder, AUTHORITY, "localhost", "127.0.0.1")
    service = Service(config_of(configuration(folder, top=f"{pair}\n{top}", **keys)))
    await service.start()
    try:
        yield service
    finally:
        await service.stop()


@asynccontextmanager
async def session(context: ssl.SSLContext | None = None) -> AsyncIterator[aiohttp.ClientSession]:
    connector = aiohttp.TCPConnector(ssl=context or trusting(AUTHORITY))
    timeout = aiohttp.ClientTimeout(total=DEADLINE_S)
    async with aiohttp.ClientSession(connector=connector, timeout=timeout) as made:
        yield made


async def shaken(service: Service, context: ssl.SSLContext) -> tuple[str, str, str]:
    """A handshake: version, protocol chosen (RFC 7301), and the certificate's SHA-256. Raises ssl.SSLError."""
    address = service.address
    _, writer = await asyncio.open_connection(address.host, address.port, ssl=context, server_hostname="localhost")
    try:
        seen: ssl.SSLObject = writer.get_extra_info("ssl_object")
        certificate = seen.getpeercert(binary_form=True)
        assert certificate is not None
        return seen.version() or "", seen.selected_alpn_protocol() or "", hashlib.sha256(certificate).hexdigest()
    finally:
        writer.close()
        await writer.wait_closed()


def lax(folder: Path) -> ssl.SSLContext:
    """A server's context that speaks every version, with the service's certificate."""
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.set_ciphers("ALL:@SECLEVEL=0")
    context.minimum_version = ssl.TLSVersion.TLSv1
    context.load_cert_chain(folder / "service.pem", folder / "service.key")
    return context


def agreed(client: ssl.SSLContext, server: ssl.SSLContext) -> str | None:
    """The version that the two agree on, in memory. Raises ssl.SSLError where there is none."""
    up, down = ssl.MemoryBIO(), ssl.MemoryBIO()
    ends = client.wrap_bio(down, up, server_hostname="localhost"), server.wrap_bio(up, down, server_side=True)
    for _ in range(4):  # each has its say at most twice in a handshake
        for end in ends:
            with suppress(ssl.SSLWantReadError):
                end.do_handshake()
    return ends[0].version()


async def test_events_go_in_over_https_and_only_to_who_trusts_the_certificate(tmp_path: Path) -> None:
    async with secured(tmp_path) as service:
        assert service.url.startswith("https://127.0.0.1:")
        async with session() as client:
            url = f"{service.url}/v1/feeds/{FEED}/events"
            async with client.post(url, data=events([1, 2]), headers={"Content-Type": NDJSON}) as answer:
                assert (answer.status, (await answer.json())["accepted"]) == (200, 2)
            own = {"Content-Type": NDJSON, "Origin": service.url}
            async with client.post(url, data=events([3]), headers=own) as answer:
                assert answer.status == 200
            own["Origin"] = service.url.replace("https", "http")
            async with client.post(url, data=events([4]), headers=own) as answer:
                assert answer.status == 403
            with pytest.raises(aiohttp.ClientError):
                await client.get(service.url.replace("https", "http"))
        async with session(ssl.create_default_context()) as stranger:
            with pytest.raises(aiohttp.ClientConnectorCertificateError):
                await stranger.get(service.url)


@pytest.mark.filterwarnings("ignore:.*TLSVersion.*deprecated:DeprecationWarning")
async def test_versions_before_1_2_are_refused_and_http_1_1_is_spoken(tmp_path: Path) -> None:
    """RFC 9325, 3.1.1: TLS 1.0 and 1.1 must not be negotiated."""
    async with secured(tmp_path) as service:
        context = trusting(AUTHORITY)
        context.set_alpn_protocols(["h2", "http/1.1"])
        assert (await shaken(service, context))[:2] == ("TLSv1.3", "http/1.1")
        context.maximum_version = ssl.TLSVersion.TLSv1_2
        assert (await shaken(service, context))[0] == "TLSv1.2"
        old = trusting(AUTHORITY)
        old.set_ciphers("ALL:@SECLEVEL=0")  # so that it is the service that refuses, not this client
        old.minimum_version, old.maximum_version = ssl.TLSVersion.TLSv1, ssl.TLSVersion.TLSv1_1
        assert agreed(old, lax(tmp_path)) == "TLSv1.1", "this client would speak it"
        with pytest.raises(ssl.SSLError, match="UNSUPPORTED_PROTOCOL"):
            agreed(old, tls.read_context(config_of(configuration(tmp_path, top=pair_of(tmp_path))).tls))
        with pytest.raises((ssl.SSLError, ConnectionError)):
            await shaken(service, old)


async def test_a_reload_brings_a_new_certificate_and_keeps_connections(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    async with secured(tmp_path) as service, session() as client:
        file = tmp_path / "s.toml"

        def reload(pair: str) -> bool:
            text = configuration(tmp_path, top=pair)
            file.write_text(text)
            return service.reload(file, {})

        first = (await shaken(service, trusting(AUTHORITY)))[2]
        ordered = f"{service.url}/v1/feeds/{FEED}/ordered?after=0"
        async with client.get(ordered) as stream:
            assert reload(write_pair(tmp_path, AUTHORITY, "localhost", "127.0.0.1"))
            second = (await shaken(service, trusting(AUTHORITY)))[2]
            assert second != first
            good = write_pair(tmp_path, AUTHORITY, "localhost", "127.0.0.1")
            key = (tmp_path / "service.key").read_bytes()
            for wrong, why in (
                (trustme.CA().issue_cert("a").private_key_pem.bytes(), "the key belongs to another certificate"),
                (b"no PEM", "PEM"),
                (b"", "PEM"),
            ):
                (tmp_path / "service.key").write_bytes(wrong)
                assert not reload(good)
                assert why in caplog.records[-1].getMessage(), caplog.records[-1].getMessage()
                assert (await shaken(service, trusting(AUTHORITY)))[2] == second
            (tmp_path / "service.key").unlink()
            assert not reload(good) and "service.key cannot be read: No such file" in caplog.records[-1].getMessage()
            (tmp_path / "service.key").write_bytes(key)
            assert reload(good)
            assert (await shaken(service, trusting(AUTHORITY)))[2] not in (first, second)
            assert not reload("") and "whether there is TLS can only change with a restart" in caplog.text
            # The stream that was open all the while still brings what is released.
            async with client.post(
                f"{service.url}/v1/feeds/{FEED}/events", data=events([1]), headers={"Content-Type": NDJSON}
            ) as answer:
                assert answer.status == 200
            async with client.post(f"{service.url}/v1/feeds/{FEED}/drain") as answer:
                assert answer.status == 204
            line = b""
            while not line.strip():
                assert not stream.content.at_eof(), "the stream has ended"
                line = await stream.content.readline()
            assert json.loads(line)["batch"] == 1


def test_an_encrypted_key_is_refused_and_nothing_is_asked_on_the_terminal(tmp_path: Path) -> None:
    write_pair(tmp_path, AUTHORITY, "localhost")
    from cryptography.hazmat.primitives import serialization as form  # noqa: PLC0415 - comes with trustme

    key = form.load_pem_private_key((tmp_path / "service.key").read_bytes(), None)
    locked = key.private_bytes(form.Encoding.PEM, form.PrivateFormat.PKCS8, form.BestAvailableEncryption(b"secret"))
    (tmp_path / "service.key").write_bytes(locked)
    config = config_of(configuration(tmp_path, top=pair_of(tmp_path)))
    with pytest.raises(ConfigError, match="the key is encrypted"):
        tls.read_context(config.tls)


def pair_of(folder: Path) -> str:
    files = [json.dumps(str(folder / name)) for name in ("service.pem", "service.key")]
    return f"[tls]\ncertificate = {files[0]}\nkey = {files[1]}"


@pytest.mark.parametrize("key", ["certificate", "key"])
def test_both_files_are_needed(key: str) -> None:
    other = {"certificate": "key", "key": "certificate"}[key]
    with pytest.raises(ConfigError, match=rf"tls\.{other} is missing: tls\.{key} is there"):
        parse(f"[tls]\n{key} = 'x'\n[[feed]]\nname = 'a'\n", {})


async def test_handshakes_count_among_the_connections(tmp_path: Path) -> None:
    """With all places taken by the silent a further connection is closed at once, while they still have time."""
    async with secured(tmp_path, "[limits]\nconnections_at_most = 5") as service:
        address, listener = (service.address.host, service.address.port), service._listener
        assert isinstance(listener, tls.TlsListener)
        silent = [await asyncio.open_connection(*address) for _ in range(5)]
        await eventually(lambda: len(listener._handshakes) == 5)
        reader, writer = await asyncio.open_connection(*address)
        async with asyncio.timeout(DEADLINE_S):
            assert await reader.read() == b""
        assert len(listener._handshakes) == 5
        for _, each in (*silent, (reader, writer)):
            each.close()
        await eventually(lambda: not listener._handshakes)
        assert (await shaken(service, trusting(AUTHORITY)))[0] == "TLSv1.3"


async def test_a_handshake_that_never_ends_is_given_up(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(tls, "HANDSHAKE_WITHIN_S", 0.2)
    async with secured(tmp_path) as service:
        listener = service._listener
        assert isinstance(listener, tls.TlsListener)
        reader, writer = await asyncio.open_connection(service.address.host, service.address.port)
        async with asyncio.timeout(DEADLINE_S):
            assert await reader.read() == b""
        await eventually(lambda: not listener._handshakes)
        writer.close()


NO_TLS = {
    "nothing": b"",
    "plain HTTP": b"GET / HTTP/1.1\r\nhost: localhost\r\n\r\n",
    "noise": bytes(range(256)) * 300,
    "a record of the longest length": b"\x16\x03\x01\xff\xff" + b"\0" * 70_000,
    "a hello broken off": b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03",
}


@pytest.mark.parametrize("name", NO_TLS)
async def test_what_is_no_tls_breaks_nothing(tmp_path: Path, name: str, caplog: pytest.LogCaptureFixture) -> None:
    async with secured(tmp_path) as service:
        with socket.create_connection((service.address.host, service.address.port)) as wire:
            wire.setblocking(False)
            await asyncio.get_running_loop().sock_sendall(wire, NO_TLS[name][:60_000])
        assert (await shaken(service, trusting(AUTHORITY)))[0] == "TLSv1.3"
    assert [record for record in caplog.records if record.levelname in ("ERROR", "WARNING")] == []


# --- commands ----------------------------------------------------------------------------------------------------


class _Secured(Process):
    """The real process, with uvloop, which says that it listens on https."""

    scheme = "https"

    def start(self) -> None:
        self.begin()
        self.url = self.listens()


def test_commands_show_a_token_and_trust_a_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    made = write_tokens(tmp_path / "tokens.toml", {"all": everything(), "none": {"read": [FEED]}})
    ca, token = tmp_path / "ca.pem", tmp_path / "token"
    AUTHORITY.cert_pem.write_to_path(str(ca))
    token.touch(0o600)
    token.write_text(made["all"] + "\n")
    pair = write_pair(tmp_path, AUTHORITY, "127.0.0.1")
    text = configuration(tmp_path, top=f"{pair}\n{asking(tmp_path / 'tokens.toml')}")
    with _Secured(tmp_path, text) as process:
        send = ["send", "in_order", "--feed", FEED, "--url", process.url, "--events", "50", "--json"]
        assert loadgen([*send, "--ca", str(ca), "--token-file", str(token)]) == 0
        assert json.loads(capsys.readouterr().out)["answered"] >= 1
        readmit = ["quarantine", "readmit", "--feed", FEED, "--url", process.url, "--ca", str(ca)]
        assert main(readmit) == 2 and "set STRANDLINE_TOKEN" in capsys.readouterr().err
        monkeypatch.setenv("STRANDLINE_TOKEN", made["none"])
        assert main(readmit) == 2 and "has not the role operate" in capsys.readouterr().err
        monkeypatch.setenv("STRANDLINE_TOKEN", made["all"])
        assert main(readmit) == 0
        assert main(readmit[:-2]) == 3  # its certificate is nobody's whom the system trusts
        capture = ["capture", process.url, "--feed", FEED, "--seconds", "1", "--out", str(tmp_path / "c")]
        assert main([*capture, "--ca", str(ca)]) == 0
        folder = ["capture", str(tmp_path / "data"), "--feed", FEED, "--out", str(tmp_path / "d")]
        assert main(folder) == 0
        replay = ["replay", str(tmp_path / "d"), "--into", process.url, "--pace", "max", "--json"]
        assert main([*replay, "--ca", str(ca)]) == 0
        monkeypatch.delenv("STRANDLINE_TOKEN")
        assert main([*replay, "--ca", str(ca)]) == 2
        token.chmod(0o644)
        assert main([*readmit, "--token-file", str(token)]) == 2
        assert "so others can read or change it: chmod 600" in capsys.readouterr().err
        assert process.terminate() == 0
        assert bearer(made["all"])["Authorization"] not in process.log.read_text()
