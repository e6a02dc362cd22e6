"""GET /v1/cluster: who owns which partition, since when, and how far behind it is."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import msgspec
from aiohttp import web

from ..access_gate import may_read
from ..ingest.endpoint import CONFIG
from ..problems import NotThere
from .causes import NAMING_PARTITIONS
from .whereabouts import CLUSTER, Documented
from .words import said

__all__ = ["CLUSTER", "Documented", "cluster_causes", "get_cluster", "seen_by"]


async def get_cluster(request: web.Request) -> web.Response:
    """The cluster as this instance sees it, of feeds that the caller may read."""
    cluster = request.app.get(CLUSTER)
    if cluster is None:
        raise NotThere("this service is in no cluster: its configuration has no [cluster]")
    document = seen_by(cluster.document(), lambda name: may_read(request, name))
    document |= said(document)._asdict()
    return web.Response(body=msgspec.json.encode(document), content_type="application/json")


def seen_by(document: Mapping[str, Any], may_see: Callable[[str], bool]) -> dict[str, Any]:
    """The document for who may see these partitions: causes that name partitions are left out where some are hidden."""
    rows = [each for each in document["partitions"] if may_see(each["runtime"])]
    if len(rows) == len(document["partitions"]):
        return dict(document)
    causes = [each for each in document["causes"] if each["about"] not in NAMING_PARTITIONS]
    words = "; ".join(each["words"] for each in causes)
    return {**document, "partitions": rows, "causes": causes, "words": words}


def cluster_causes(request: web.Request) -> tuple[list[str], bool]:
    """For /health/ready: why this instance takes no part, for who may read a partition; and whether it was untold."""
    cluster = request.app.get(CLUSTER)
    cause = "" if cluster is None else cluster.unready()
    if not cause:
        return [], False
    names = (each.name for feed in request.app[CONFIG].feeds for each in feed.partition_feeds())
    return ([cause], False) if any(may_read(request, name) for name in names) else ([], True)
