"""Where a partition is that is not at work here, for who asks this instance about it; no more than that.

The cluster that runs is known to the application by `CLUSTER`. Answers for HTTP are made elsewhere.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any, Protocol

from aiohttp import web

if TYPE_CHECKING:
    from .counts import Figures


class Documented(Protocol):
    """A cluster that runs: `running.Cluster`, whose client not every installation has."""

    def document(self) -> dict[str, Any]:
        """The cluster as this instance sees it."""

    def figures(self) -> Figures:
        """What metrics tell of it."""

    def unready(self) -> str:
        """Why this instance takes no part; nothing where it does."""


CLUSTER: web.AppKey[Documented] = web.AppKey("cluster")
SHOWS = "`strandline cluster`, or GET /v1/cluster, shows"


def where(app: web.Application, runtime_name: str) -> str:
    """Of a partition: who owns it, and what to do."""
    cluster = app.get(CLUSTER)
    unknown = f"partition {runtime_name} is not at work at this instance: {SHOWS} who owns it"
    return unknown if cluster is None else where_in(cluster.document(), runtime_name)


def where_in(document: Mapping[str, Any], runtime_name: str) -> str:
    """Of a partition, by the document of GET /v1/cluster."""
    row = next((row for row in document["partitions"] if row["runtime"] == runtime_name), None)
    if row is not None and row["here"]:
        return f"partition {runtime_name} is being taken over or given back here: ask again in a moment"
    if document["away_s"] is not None or not document["connected"]:
        cut_off = f"{document['instance']} is cut off from the cluster and cannot tell where it is"
        return f"partition {runtime_name} is not at work at this instance, and {cut_off}: ask another instance"
    if row is None or row["owner"] is None:
        return f"partition {runtime_name} is nobody's now: {SHOWS} what hinders it"
    owner = row["owner"]
    listen = next((one["listen"] for one in document["instances"] if one["instance"] == owner), None)
    return f"partition {runtime_name} is owned by {owner}{f' ({listen})' if listen else ''}: ask there"


def parts(feed_name: str, count: int) -> str:
    """Of a feed that has partitions and is none itself."""
    named = f"{feed_name}-0" if count == 1 else f"{feed_name}-0 to -{count - 1}"
    word = "one partition" if count == 1 else "partitions"
    return f"feed {feed_name} has {word}, {named}: ask for one of them; {SHOWS} who owns which"
