"""Child processes of `unit/test_compiled_start.py`: what can end a process, or must be so before any import."""

from __future__ import annotations

import ctypes
import mmap
import sys
from random import Random
from types import ModuleType

PR_SET_MDWE, REFUSE_EXEC_GAIN = 65, 1  # linux/prctl.h
BODIES = 30_000
FEED = '[[feed]]\nname = "river"\ndecoding = "compiled"\n'
LINES = (
    b'{"ts":1772344800013797817,"station":"gauge-02","id":1000000170,"level":6.95,"on":true,"x":null}',
    b'{"ts":-5,"station":"ford","a":{"b":[1,2,{"c":"d"}]},"note":"\\u00f6 \\"x\\"","off":false}',
    b'{"station":"weir","v":-1.5e-3,"ts":0}',
    b'{"ts":1,"station":"a"}',
    b'{"ts":1,"s":1}',
    b'{"ts":1,}',
)


def refused() -> None:
    """Print why there is no compiled decoding, and why there are no compiled copies."""
    from strandline.config import parse  # noqa: PLC0415 - after what the caller has set up
    from strandline.decoding import copier_of  # noqa: PLC0415
    from strandline.errors import StrandlineError  # noqa: PLC0415
    from strandline.ingest.decode import Decoder  # noqa: PLC0415

    Decoder("river", "/ts", "ns")
    (feed,) = parse(FEED, {}).feeds
    for make in (lambda: Decoder("river", "/ts", "ns", is_compiled=True), lambda: copier_of(feed)):
        try:
            make()
        except StrandlineError as error:
            print(error)


def warm() -> None:
    """Print how many ways to copy are compiled once a feed has its copier, before it has copied anything."""
    from strandline.config import parse  # noqa: PLC0415
    from strandline.decoding import copier_of  # noqa: PLC0415

    (feed,) = parse(FEED, {}).feeds
    copier_of(feed)
    from strandline.journal import compiled_copies  # noqa: PLC0415

    print(len(compiled_copies._copy.signatures))


def without_executable_memory() -> None:
    """As systemd's MemoryDenyWriteExecute has it."""
    if ctypes.CDLL(None, use_errno=True).prctl(PR_SET_MDWE, REFUSE_EXEC_GAIN, 0, 0, 0):
        raise OSError(ctypes.get_errno(), "prctl")
    refused()


def without_numba() -> None:
    """As where the extra was not installed."""
    sys.modules["numba"] = sys.modules["llvmlite"] = None  # type: ignore[assignment]
    refused()


def with_unwilling_numba() -> None:
    """As where a release of numba does not know the numpy that is there: it says so as it is imported."""
    sys.modules["numba"] = ModuleType("numba")  # has nothing to import
    refused()


def guarded() -> tuple[mmap.mmap, int]:
    """Three pages, of which the last cannot be read, and the address where that begins."""
    pages = mmap.mmap(-1, 3 * mmap.PAGESIZE)
    guard = ctypes.addressof(ctypes.c_char.from_buffer(pages)) + 2 * mmap.PAGESIZE
    if ctypes.CDLL(None, use_errno=True).mprotect(ctypes.c_void_p(guard), mmap.PAGESIZE, 0):
        raise OSError(ctypes.get_errno(), "mprotect")
    return pages, guard


def copies_from_the_end_of_memory() -> None:
    """Copy lines that end where a page ends that cannot be read behind."""
    import numpy as np  # noqa: PLC0415
    from strandline.journal.compiled_copies import copied  # noqa: PLC0415
    from strandline.journal.gather import Source  # noqa: PLC0415

    pages, _ = guarded()
    end, rng = 2 * mmap.PAGESIZE, np.random.default_rng(7)
    pages[:end] = rng.integers(10, 13, end, np.uint8).tobytes()
    source = Source(memoryview(pages)[:end], 0, end)
    for _ in range(3000):
        lengths = rng.integers(0, 200, rng.integers(1, 9))
        offsets = end - lengths - rng.integers(0, 3, len(lengths)) * rng.integers(0, 90, len(lengths))
        found = copied([source], None, offsets, lengths)
        rows = zip(offsets.tolist(), lengths.tolist(), strict=True)
        assert found == b"".join(pages[offset : offset + length] + b"\n" for offset, length in rows)
    print("all")


def at_the_end_of_memory() -> None:
    """Scan damaged bodies that end where a page ends that cannot be read behind; a byte too far ends the process."""
    import numpy as np  # noqa: PLC0415
    from fuzz_mutate import mutated  # noqa: PLC0415
    from strandline.ingest.compiled import Scanner, compiled_lines  # noqa: PLC0415
    from strandline.ingest.limits import BodyLimits  # noqa: PLC0415
    from strandline.ingest.lines import split_lines  # noqa: PLC0415

    pages, guard = guarded()
    scanner, module, draw = Scanner("/ts", "ns", "/station", 9), compiled_lines(), Random(7)
    scan, survey, work = module.scan, module.survey, np.empty(module.WORK_ITEMS, np.int64)
    taken = scanned = 0
    for _ in range(BODIES):
        seed = b"".join(draw.choice(LINES) + b"\n" for _ in range(draw.choice((1, 1, 2, 3))))
        lines = split_lines(mutated(draw, seed)[: 2 * mmap.PAGESIZE - 1], BodyLimits())
        if not lines.is_regular:
            continue
        count, size = len(lines.ends), len(lines.payload)
        pages[2 * mmap.PAGESIZE - size : 2 * mmap.PAGESIZE] = lines.payload
        assert survey(guard - size, guard) == (lines.payload.count(b"\n"), lines.payload.isascii())
        columns = np.empty(count, np.int64), np.empty(count, np.uint32), np.empty(count, np.uint32)
        names = np.empty((count, 2), np.int64), np.zeros(64, np.uint32)
        found = scan(guard - size, guard, count, scanner.keys, False, 8, *columns, *names, work)
        scanned, taken = scanned + 1, taken + (found >= 0)
    print(scanned, taken)


if __name__ == "__main__":
    modes = {"guard": at_the_end_of_memory, "mdwe": without_executable_memory, "bare": without_numba}
    (modes | {"unwilling": with_unwilling_numba, "warm": warm, "copies": copies_from_the_end_of_memory})[sys.argv[1]]()
