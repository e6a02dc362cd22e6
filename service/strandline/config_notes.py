"""What `strandline check` notes of a configuration that has no fault: it runs, but hardly as it was meant.

Judged on the whole configuration, once it was read; a note refuses nothing. What cannot run at all is a fault, and is
judged in `config_checks` and its like.
"""

from __future__ import annotations

from collections.abc import Iterator

from .config_broker_kinds import PARTITION
from .config_cluster import ClusterConfig, Partitions
from .config_kinds import quoted
from .config_model import Config, Feed
from .config_units import duration_text
from .core.settings import SECOND_NS

# Of three brokers the leader was killed: all leases were renewed after 4 to 8 s (cluster/leases.py). A lease of 15 s
# leaves 10.5 s to renew it, one of 10 s only 7. One broker alone has no leader to lose.
LEASE_AT_LEAST_NS = 15 * SECOND_NS
REPLICAS_WITH_A_LEADER = 3


def notes(config: Config) -> list[str]:
    """Sentences that name the place, what comes of it, and what to write."""
    cluster = config.cluster
    if cluster is None:
        return []
    found = list(_of_cluster(cluster))
    for index, feed in enumerate(config.feeds):
        if feed.partitions is not None:
            found += _of_feed(cluster, feed, f"feed[{index + 1}]")
            found += _of_source(feed.partitions, f'feed[{index + 1}].partitions.source of "{feed.name}"')
    return found


def _of_cluster(cluster: ClusterConfig) -> Iterator[str]:
    if cluster.replicas >= REPLICAS_WITH_A_LEADER and cluster.lease_ns < LEASE_AT_LEAST_NS:
        yield (
            f"cluster.lease = {duration_text(cluster.lease_ns)} is shorter than brokers with replicas = "
            f"{cluster.replicas} may take to choose a new leader: partitions may then stop and move. Write "
            f"{duration_text(LEASE_AT_LEAST_NS)} or more"
        )


def _of_feed(cluster: ClusterConfig, feed: Feed, spelled: str) -> Iterator[str]:
    if feed.hold_at_most_ns <= cluster.lease_ns:
        yield (
            f'{spelled}.hold_at_most of "{feed.name}" = {duration_text(feed.hold_at_most_ns)} is not longer than '
            f"cluster.lease = {duration_text(cluster.lease_ns)}: whenever an instance is killed, events go to the late "
            "lane that would have been in order. Write more than the lease and a takeover together take"
        )


def _of_source(partitions: Partitions, spelled: str) -> Iterator[str]:
    if partitions.source is None:
        return
    number, tokens = partitions.source.subject_token, partitions.subject.split(".")
    told = f"{spelled}: subject_token = {number}"
    if number > len(tokens):
        yield (
            f"{told} lies behind the {len(tokens)} tokens that each subject of {quoted(partitions.subject)} has: a "
            "message with fewer goes to quarantine. Make sure that all have so many"
        )
    elif tokens[number - 1] not in ("*", ">", PARTITION):
        yield (
            f"{told} is {quoted(tokens[number - 1])} in every subject of {quoted(partitions.subject)}: all events are "
            "then of one source. Name the token that tells sources apart"
        )
