"""What befalls one life of a simulated process: where it dies, and which operations on its disk and stores fail.

Decides, from the world's own randomness, and counts; what must come of it is judged elsewhere.
"""

from __future__ import annotations

import errno
import random
from collections.abc import Callable

from sim_loop import PowerCut
from simdisk import Faults

# How much more or less often an operation fails than the share that is set: reading fails rarely, but it does.
WEIGHTS = {"view": 0.2, "open": 0.2, "names": 0.2}
SHORT = OSError(errno.ENOSPC, "No space left on device")


class Weather(Faults):
    """Faults of a SimDisk by chance. `errors` counts what failed; `dead` once the process has died."""

    def __init__(self, chance: random.Random, *, error_share: float = 0.0) -> None:
        super().__init__()
        self.chance = chance
        self.error_share = error_share
        self.errors = self.operations = 0
        self.dies_in: int | None = None
        self.dies_in_store: int | None = None
        self.store_fails_in: int | None = None
        self.store_error: Callable[[], Exception] = lambda: OSError(errno.EIO, "simulated")
        self.dead = False
        self.starved = False  # a file could not be made for want of room

    def meet(self, name: str, path: str, partly: Callable[[], None] = lambda: None) -> None:
        """One operation on the disk is about to happen."""
        if self.dead:
            raise OSError(errno.EIO, "this process is dead")
        self.operations += 1
        if self.dies_in is not None:
            self.dies_in -= 1
            if self.dies_in <= 0:
                if self.chance.random() < 0.5:
                    partly()
                self.die(f"{name} {path}")
        if self.error_share and self.chance.random() < self.error_share * WEIGHTS.get(name, 1.0):
            self.errors += 1
            partly()
            raise SHORT if name == "create" and self.chance.random() < 0.5 else OSError(errno.EIO, "simulated")

    def meet_store(self) -> None:
        """One step of a store's work is about to happen."""
        if self.dead:
            raise OSError(errno.EIO, "this process is dead")
        if self.dies_in_store is not None:
            self.dies_in_store -= 1
            if self.dies_in_store <= 0:
                self.die("a store")
        if self.store_fails_in is not None:
            self.store_fails_in -= 1
            if self.store_fails_in <= 0:
                self.store_fails_in = None
                raise self.store_error()

    def die(self, where: str) -> None:
        """The process dies, and does nothing any more."""
        self.dead = True
        raise PowerCut(where)
