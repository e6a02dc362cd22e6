"""What the dashboard of a service that runs in the test has seen of its feed."""

from __future__ import annotations

from helpers_service import FEED, Running
from strandline.dashboard.live import WATCHES, Watch
from strandline.dashboard.sampling import FeedMemory


def watch_of(service: Running) -> Watch:
    """The feed's watch."""
    assert service.service._runner is not None
    watch: Watch = service.service._runner.app[WATCHES][FEED]
    return watch


def memory_of(service: Running) -> FeedMemory:
    """What is remembered of the feed."""
    return watch_of(service).memory
