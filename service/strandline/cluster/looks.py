"""What a look at the bucket of leases shows: values for those who judge it and tell of it, without a broker's client.

How one looks is `leases`. Imported wherever the service runs, in a cluster or not, so nothing here needs an extra.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from .balance import Partition


@dataclass(frozen=True, slots=True)
class Seen:
    """An entry as it was seen; `age_s` since this revision was seen first, so it is at least so old."""

    value: bytes
    revision: int
    age_s: float


@dataclass(frozen=True, slots=True)
class Look:
    """What stands in the bucket. It may be some milliseconds old, and from a broker that lags."""

    at_s: float  # monotonic
    instances: Mapping[str, Seen]
    owners: Mapping[Partition, Seen]
