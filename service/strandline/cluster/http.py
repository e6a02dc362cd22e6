"""GET /v1/cluster: who owns which partition, since when, and how far behind it is."""

from __future__ import annotations

from typing import Any, Protocol

import msgspec
from aiohttp import web

from ..access_gate import may_read
from ..problems import NotThere


class Documented(Protocol):
    """A cluster that runs: `running.Cluster`, whose client not every installation has."""

    def document(self) -> dict[str, Any]:
        """The cluster as this instance sees it."""


CLUSTER: web.AppKey[Documented] = web.AppKey("cluster")


async def get_cluster(request: web.Request) -> web.Response:
    """The cluster as this instance sees it, of feeds that the caller may read."""
    cluster = request.app.get(CLUSTER)
    if cluster is None:
        raise NotThere("this service is in no cluster: its configuration has no [cluster]")
    document = cluster.document()
    document["partitions"] = [each for each in document["partitions"] if may_read(request, each["runtime"])]
    return web.Response(body=msgspec.json.encode(document), content_type="application/json")
