"""GET /v1/cluster: who owns which partition, since when, and how far behind it is."""

from __future__ import annotations

import msgspec
from aiohttp import web

from ..access_gate import may_read
from ..ingest.endpoint import CONFIG
from ..problems import NotThere
from .whereabouts import CLUSTER, Documented
from .words import said

__all__ = ["CLUSTER", "Documented", "cluster_causes", "get_cluster"]


async def get_cluster(request: web.Request) -> web.Response:
    """The cluster as this instance sees it, of feeds that the caller may read."""
    cluster = request.app.get(CLUSTER)
    if cluster is None:
        raise NotThere("this service is in no cluster: its configuration has no [cluster]")
    document = cluster.document()
    document["partitions"] = [each for each in document["partitions"] if may_read(request, each["runtime"])]
    document |= said(document)._asdict()
    return web.Response(body=msgspec.json.encode(document), content_type="application/json")


def cluster_causes(request: web.Request) -> tuple[list[str], bool]:
    """For /health/ready: why this instance takes no part, for who may read a partition; and whether it was untold."""
    cluster = request.app.get(CLUSTER)
    cause = "" if cluster is None else cluster.unready()
    if not cause:
        return [], False
    names = (each.name for feed in request.app[CONFIG].feeds for each in feed.partition_feeds())
    return ([cause], False) if any(may_read(request, name) for name in names) else ([], True)
