"""The core without its shell as a state machine; its rules and the ten-line model stand in `feed_machine`."""

from __future__ import annotations

from feed_machine import FeedMachine
from hypothesis import settings

TestFeedMachine = FeedMachine.TestCase
TestFeedMachine.settings = settings(max_examples=80, stateful_step_count=40)
