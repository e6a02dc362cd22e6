"""The service: feeds, HTTP and signals put together, and the written order of a stop.

Nothing is decided here about events. Start: read every journal, connect the sinks, then listen. Stop (SIGTERM, SIGINT):
take nothing more from brokers; stop accepting; answer those who wait on a sync; deliver within `drain_at_most`; save
and close. A second signal stops at once: the journal has everything that was answered. SIGHUP reads the whole
configuration again, and swaps it or keeps the old one and says why.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import os
import signal
from collections.abc import Callable, Mapping
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

import msgspec
from aiohttp import web
from prometheus_client.aiohttp import make_aiohttp_handler

from . import acting, lane_acts, notify, observe, openapi
from .access_gate import Gate, prepare, reach
from .clock import SystemClock
from .cluster.http import CLUSTER, get_cluster
from .config import Address, Config, load
from .connections import Connections, make_room_for
from .dashboard import live
from .errors import StrandlineError
from .hold_answer import get_acts, get_holds
from .ingest import endpoint
from .ingest.endpoint import ASIDE, BODIES, CONFIG, FEEDS
from .ingest.limits import BodyLimits
from .ingest.offload import Aside
from .intake.starting import Intakes
from .journal.disk import LocalDisk
from .listening import check_free, not_free
from .metrics import make_registry
from .ports import Clock, Disk
from .problems import as_problems
from .reporting.http import install as install_reports
from .resting import Beats
from .runtime import FeedRuntime
from .sinks import make_sink
from .sinks_of import MakeSink
from .slack_answer import get_slack
from .tls import TlsListener
from .tracing.http import TRACES, Traces, close_traces, get_trace

if TYPE_CHECKING:
    from .cluster.running import Cluster

log = logging.getLogger("strandline")
TICK_S = 0.25
LINGER_S = 2.0  # what still comes after a request was refused is read so long: else its sender might miss the answer
BACKLOG = 1024  # connections that the kernel may keep until they are taken
SHUTDOWN_WITHIN_S = 2.0  # for requests and streams that do not end by themselves once the feeds are closed
READS_BY = tuple(BodyLimits.__struct_fields__)
EXIT_FAILED = 3
EXIT_AT_ONCE = 130


def make_app(config: Config, feeds: dict[str, FeedRuntime], gate: Gate) -> web.Application:
    """The HTTP application over feeds that are open."""
    app = web.Application(middlewares=[as_problems, gate.let_in])
    app[FEEDS], app[CONFIG] = feeds, config
    app[BODIES] = asyncio.Semaphore(config.limits.bodies_at_most)
    app[ASIDE], app[TRACES] = Aside(), Traces()
    app.on_cleanup.extend([_close_aside, close_traces])
    app.add_routes(
        [
            web.post("/v1/feeds/{feed}/events", endpoint.post_events),
            web.post("/v1/feeds/{feed}/marks", endpoint.post_marks),
            web.post("/v1/feeds/{feed}/excuse", acting.post_excuse),
            web.post("/v1/feeds/{feed}/drain", acting.post_drain),
            web.post("/v1/feeds/{feed}/slack", acting.post_slack),
            web.post("/v1/feeds/{feed}/sinks/{sink}/pause", acting.post_pause),
            web.post("/v1/feeds/{feed}/sinks/{sink}/resume", acting.post_resume),
            web.post("/v1/feeds/{feed}/late/resend", lane_acts.post_late_resend),
            web.post("/v1/feeds/{feed}/refused/resend", lane_acts.post_refused_resend),
            web.post("/v1/feeds/{feed}/quarantine/readmit", lane_acts.post_quarantine_readmit),
            web.get("/v1/cluster", get_cluster),
            web.get("/v1/feeds", observe.get_feeds),
            web.get("/v1/feeds/{feed}", observe.get_feed),
            web.get("/v1/feeds/{feed}/sources", observe.get_sources),
            web.get("/v1/feeds/{feed}/slack", get_slack),
            web.get("/v1/feeds/{feed}/holds", get_holds),
            web.get("/v1/feeds/{feed}/acts", get_acts),
            web.get("/v1/feeds/{feed}/trace", get_trace),
            web.get("/v1/feeds/{feed}/late", observe.get_late),
            web.get("/v1/feeds/{feed}/quarantine", observe.get_quarantine),
            web.get("/v1/feeds/{feed}/refused", observe.get_refused),
            web.get("/v1/feeds/{feed}/ordered", observe.get_ordered, allow_head=False),
            web.get("/v1/feeds/{feed}/capture", observe.get_capture, allow_head=False),
            web.get("/metrics", make_aiohttp_handler(make_registry(feeds, lambda: app.get(CLUSTER)))),
            web.get("/health/live", observe.get_live),
            web.get("/health/ready", observe.get_ready),
            web.get("/openapi.json", _get_openapi),
        ]
    )
    live.install(app)
    install_reports(app)
    return app


async def _close_aside(app: web.Application) -> None:
    app[ASIDE].close()


async def _get_openapi(request: web.Request) -> web.Response:
    del request
    return web.Response(body=msgspec.json.encode(openapi.document()), content_type="application/json")


class Service:
    """The feeds of one process and the listener in front of them."""

    def __init__(
        self,
        config: Config,
        *,
        clock: Clock | None = None,
        disk: Disk | None = None,
        make: MakeSink = make_sink,
    ) -> None:
        """`disk` is for the journals and starts at `data_dir`, `make` makes the configured sinks."""
        self.config = config
        self.clock = clock or SystemClock()
        self._folder = LocalDisk(config.data_dir)
        self._disk, self._make = disk or self._folder, make
        self.feeds: dict[str, FeedRuntime] = {}
        self.stopping = asyncio.Event()
        self.failure: str | None = None
        self.on_ticked: Callable[[], None] | None = None  # called after each beat, once its ticks have come back
        self.address = config.listen
        self._runner: web.AppRunner | None = None
        self._listener: asyncio.Server | TlsListener | None = None
        self._gate: Gate | None = None
        self._beyond: list[str] = []  # what `access_gate.reach` found
        self._ticker: asyncio.Task[None] | None = None
        self._stopped = False
        self._intakes = Intakes()
        self._cluster: Cluster | None = None

    async def start(self) -> None:
        """Open every feed, then listen. What was begun is undone where that fails or is cancelled."""
        try:
            await self._start()
        except BaseException:
            await self.stop()
            raise

    @property
    def url(self) -> str:
        """Where it listens."""
        return f"{'http' if self.config.tls.certificate is None else 'https'}://{self.address}"

    async def _start(self) -> None:
        self._beyond = await reach(self.config)
        self._gate = Gate(prepare(self.config, self._beyond, self.clock.now_ns()), self.clock)
        await asyncio.to_thread(check_free, self.config.listen)  # before a folder is made, and a long journal read
        self._folder.lock("lock")
        for feed in self.config.feeds:
            if feed.partitions is not None:
                continue  # its partitions are feeds while this instance owns them
            folder = self.config.feed_dir(feed)
            runtime = FeedRuntime(feed, folder, self._disk, self.clock, self._failed, self._make)
            self.feeds[feed.name] = runtime
            await runtime.open()
        self._ticker = asyncio.create_task(self._tick())
        app = make_app(self.config, self.feeds, self._gate)
        if self.config.cluster is not None:
            from .cluster.running import Cluster  # noqa: PLC0415 - needs the broker's client, which is an extra

            self._cluster = app[CLUSTER] = Cluster(
                self.config, self.feeds, self.clock, self._make, str(self.config.listen)
            )
        app.on_shutdown.append(self._hush)
        try:
            await self._listen(app, self._gate)
        except OSError as error:
            raise not_free(self.config.listen, error) from error
        self._intakes.start(self.feeds.values())
        if self._cluster is not None:
            self._cluster.begin(str(self.address))

    async def _listen(self, app: web.Application, gate: Gate) -> None:
        limits, listen = self.config.limits, self.config.listen
        # A client that is gone ends its handler.
        self._runner = web.AppRunner(app, handler_cancellation=True, shutdown_timeout=SHUTDOWN_WITHIN_S)
        await self._runner.setup()
        server = self._runner.server
        assert server is not None
        room = make_room_for(limits.connections_at_most)
        connections = Connections(
            server,
            room,
            access_log=None,
            auto_decompress=False,  # bodies are decompressed by our own code, within limits
            keepalive_timeout=limits.idle_connection_within_ns / 1e9,
            lingering_time=LINGER_S,
        )
        if gate.standing.context is not None:
            secured = TlsListener(connections, gate.context, lambda: len(server.connections), room)
            self._listener = secured
            self.address = Address(listen.host, await secured.start(listen.host, listen.port, BACKLOG))
            return
        loop = asyncio.get_running_loop()
        self._listener = await loop.create_server(connections, listen.host, listen.port, backlog=BACKLOG)
        self.address = Address(listen.host, int(self._listener.sockets[0].getsockname()[1]))

    async def _hush(self, app: web.Application) -> None:
        del app
        for runtime in self.feeds.values():
            runtime.recent.close()

    async def stop(self) -> None:
        """Stop in the written order. A second call does nothing."""
        if self._stopped:
            return
        self._stopped = True
        limit_s = self.config.drain_at_most_ns / 1e9
        if self._ticker:
            self._ticker.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await self._ticker
        await self._intakes.stop(limit_s)
        if self._cluster is not None:
            await self._cluster.stop(limit_s)
        await asyncio.gather(*(runtime.close(limit_s) for runtime in self.feeds.values()))
        if self._listener:
            self._listener.close()
        if isinstance(self._listener, TlsListener):
            await self._listener.wait_closed()
        if self._runner:
            await self._runner.cleanup()
        self._folder.close()

    @property
    def listening(self) -> bool:
        """Whether it has started and was not told to stop."""
        return self._listener is not None and not self.stopping.is_set()

    def reload(self, path: Path | None, environ: Mapping[str, str]) -> bool:
        """Read the configuration again; whether it was taken over. One fixed key keeps all as it was."""
        try:
            if self._runner is None or self._gate is None or self._stopped:
                raise StrandlineError("the service is starting or stopping")
            if path is None:
                raise StrandlineError("the service was started without a file")
            config = load(path, environ)
            if fixed := fixed_changes(self.config, config):
                raise StrandlineError(f"{', '.join(fixed)} can only change with a restart")
            own = [feed for feed in config.feeds if feed.partitions is None]
            full = [feed.name for feed in own if not self.feeds[feed.name].has_headroom(feed)]
            if full := full + (self._cluster.without_room(config) if self._cluster is not None else []):
                raise StrandlineError(f"the disk has no room to note it in the journal of {', '.join(full)}")
            standing = prepare(config, self._beyond, self.clock.now_ns())
        except (StrandlineError, OSError) as error:
            log.error("the configuration stays as it was: %s", error)
            return False
        for feed in own:
            self.feeds[feed.name].reconfigure(feed)
        if self._cluster is not None:
            self._cluster.reconfigure(config)
        self.config, self._gate.standing = config, standing
        log.info("the configuration was read again and is in force")
        return True

    def _failed(self, feed: str, error: Exception) -> None:
        self.failure = f"feed {feed}: {str(error) or type(error).__name__}"
        log.critical("%s; the service stops and recovers at its next start", self.failure)
        self.stopping.set()

    async def _tick(self) -> None:
        beats = Beats(self.clock)
        while True:
            await asyncio.sleep(TICK_S)
            for name, runtime in beats.due(self.feeds.items()):
                try:
                    runtime.tick()
                except Exception as error:  # else the ticks of all feeds would end, and nobody would be told
                    log.exception("%s: an unforeseen error in a tick", name)
                    runtime.fail(error)
            if self.on_ticked is not None and self.failure is None:
                self.on_ticked()


def fixed_changes(old: Config, new: Config) -> list[str]:
    """Keys that differ and that a running service cannot change."""
    found = [key for key in ("listen", "data_dir", "limits", "cluster") if getattr(old, key) != getattr(new, key)]
    if (old.tls.certificate is None) != (new.tls.certificate is None):
        found.append("whether there is TLS")
    if [feed.name for feed in old.feeds] != [feed.name for feed in new.feeds]:
        return [*found, "the list of feeds"]
    for before, after in zip(old.feeds, new.feeds, strict=True):
        keys: tuple[str, ...] = ("time", "source", "id", "decoding", "journal", "sinks", "intakes", "partitions")
        if after.partitions is not None:
            keys += READS_BY  # whoever takes a partition over must read its messages as they were read
        found += [f"{key} of feed {after.name}" for key in keys if getattr(before, key) != getattr(after, key)]
    return found


async def _started(service: Service) -> bool:
    """Start it; False where it was told to stop first, while a store or a long journal was waited for."""
    starting, told = asyncio.create_task(service.start()), asyncio.create_task(service.stopping.wait())
    await asyncio.wait([starting, told], return_when=asyncio.FIRST_COMPLETED)
    told.cancel()
    if not starting.done():
        starting.cancel()
        await asyncio.wait([starting])
    if starting.cancelled():
        return False
    await starting
    return True


async def serve(service: Service, config_path: Path | None = None) -> int:
    """Run until a signal or a failure; the exit code. Says on stdout where it listens, once it does."""
    loop = asyncio.get_running_loop()
    signals = 0

    def on_signal() -> None:
        nonlocal signals
        signals += 1
        if signals > 1:
            log.warning("second signal: stopping at once; what was answered is in the journal")
            os._exit(EXIT_AT_ONCE)
        log.info("stopping: delivering what is released for at most %.0f s", service.config.drain_at_most_ns / 1e9)
        service.stopping.set()

    for number in (signal.SIGTERM, signal.SIGINT):
        loop.add_signal_handler(number, on_signal)
    reload = partial(service.reload, config_path, os.environ)
    loop.add_signal_handler(signal.SIGHUP, lambda: notify.reloading(reload) if service.listening else reload())
    service.on_ticked = notify.Watchdog().beat
    if await _started(service):
        print(f"listening on {service.url}", flush=True)
        notify.tell("READY=1")
    await service.stopping.wait()
    notify.tell("STOPPING=1")
    await service.stop()
    log.info("stopped")
    return EXIT_FAILED if service.failure else 0


def run(config: Config, config_path: Path | None = None) -> int:
    """Run the service in this process until it is told to stop; the exit code. Raises StrandlineError, OSError."""
    if not config.feeds:
        raise StrandlineError("the configuration names no feed: add a [[feed]] with a name")
    logging.basicConfig(level=logging.INFO, format="%(asctime)s %(levelname)s %(name)s: %(message)s")
    import uvloop  # noqa: PLC0415 - only the running service needs it

    with asyncio.Runner(loop_factory=uvloop.new_event_loop) as runner:
        return runner.run(serve(Service(config), config_path))
