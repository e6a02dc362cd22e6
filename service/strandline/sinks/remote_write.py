"""The remote-write sink: values of events as samples of series, in order, to a receiver of remote writes 1.0.

It decides what goes into a request and what an answer means; which samples of a refused request are at fault is found
out by `remote_write_settling`, how far the receiver is stands in `remote_write_progress`. When to try again is decided
by delivery.
"""

from __future__ import annotations

from bisect import bisect_right
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Literal

from ..core.columns import Batch, Lane
from ..errors import SinkRefused, SinkRetry
from ..ports import Clock, Lines
from .posting import Answered, Poster, shown_url
from .remote_write_progress import NOWHERE, Place, Progress, ProgressFile
from .remote_write_samples import MS_NS, Group, Sample, SampleMaker, SeriesRule
from .remote_write_settling import PERMANENT, Settlement
from .remote_write_wire import CONTENT_HEADERS
from .retry_after import SECOND_NS, http_date_ns, retry_after_s
from .rows import one_lane
from .worker import OwnThread
