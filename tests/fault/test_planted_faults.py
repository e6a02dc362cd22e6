"""The test of the tests: faults that somebody could make are planted in the real code, and each must be found.

Each row of the table is one fault, the harness that finds it, and what it says then. Without the fault the same harness
finds nothing at the same place. A fault that no harness finds would mean that a promise is not tested.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import pytest
from hypothesis import HealthCheck, Phase, settings
from hypothesis.stateful import run_state_machine_as_test
from planting import Change, planted
from sim_ordeal import power_failures, operations_that_fail
from simulate import Violation, play
from strandline import runtime as runtime_module
from strandline.core import saved
from strandline.core.feed import Feed
from strandline.core.merge import Merger
from strandline.core.runs import OpenRuns
from strandline.core.sources import Sources
from strandline.core.state import State
from strandline.housekeeping import Housekeeper
from strandline.journal import journal as journal_module
from strandline.journal import reading, recovery
from strandline.journal.journal import Journal
from strandline.journal.spares import Spares
from strandline.sinks.ndjson import NdjsonSink
from strandline.sinks.sqlite import SqliteSink
