"""How far the watermark stays behind: anything with a `slack_ns` that is read anew for each candidate."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(slots=True)
class FixedSlack:
    """A slack that stays as it was configured."""

    slack_ns: int
