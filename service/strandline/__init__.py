"""Strandline keeps timestamped event feeds in order although events arrive late.

For use as a library: `strandline.order` orders any iterable; `strandline.core.feed.Feed` is the core itself.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from .ordering import order as order

__all__ = ["order"]


def __getattr__(name: str) -> Any:
    # On first use only: importing numpy takes some 100 ms, and `strandline --help` must not wait for it.
    if name == "order":
        from .ordering import order  # noqa: PLC0415

        return order
    raise AttributeError(f"module 'strandline' has no attribute {name!r}")
