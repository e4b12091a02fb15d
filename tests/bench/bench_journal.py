"""What the journal writes, for the life of a card, and how long a transaction takes.

``python -m tests.bench.bench_journal [--minutes 20] [--folder DIR]``: simulated time at full rate (4 windows a second,
a bar every two seconds), everything delivered as it comes, each transaction synced as in service. Bytes are those that
the kernel charges to this process for the block device (``write_bytes`` of /proc/self/io), so the folder must lie on a
disk; the file system's own journal comes on top.
"""

from __future__ import annotations

import argparse
import platform
import sqlite3
import statistics
import tempfile
import time
from pathlib import Path

from edgewatch.record.journal import Entry, Journal
from tests.record.entries import bar, stamp, window


def written_bytes() -> int:
    """Bytes that this process has caused to be written to block devices."""
    lines = Path("/proc/self/io").read_text().splitlines()
    return next(int(line.split()[1]) for line in lines if line.startswith("write_bytes"))


def run(folder: Path, minutes: float, together_s: float) -> tuple[float, float, float, float]:
    """Return megabytes an hour, payload megabytes an hour, median and 99th percentile of a transaction (ms)."""
    journal = Journal(folder / f"j-{together_s}.sqlite", most_mb=8)  # small, so that pruning is at work
    before = written_bytes()
    times_ms: list[float] = []
    payload = 0
    waiting: list[Entry] = []
    steps = round(minutes * 60 * 4)
    for step in range(steps):
        waiting.append(window(step))
        if step % 8 == 7:
            waiting.append(bar(step))
        if (step + 1) % round(together_s * 4):
            continue
        began_s = time.perf_counter()
        journal.append(waiting, stamp=stamp(1e9 + step / 4))
        times_ms.append((time.perf_counter() - began_s) * 1e3)
        waiting = []
        if step % 4 == 3:  # the sender takes delivered messages out about once a second at this rate
            messages = journal.pending(100)
            payload += sum(len(message.payload) for message in messages)
            journal.delivered([message.seq for message in messages])
    journal.close()
    hours = minutes / 60
    times_ms.sort()
    return (
        (written_bytes() - before) / 1e6 / hours,
        payload / 1e6 / hours,
        statistics.median(times_ms),
        times_ms[int(0.99 * len(times_ms))],
    )


def main() -> None:
    """Compare one transaction a window with one a second."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--minutes", type=float, default=20.0)
    parser.add_argument("--folder", default=None)
    args = parser.parse_args()
    print(f"{platform.machine()}, {platform.system()} {platform.release()}, Python {platform.python_version()},")
    print(f"SQLite {sqlite3.sqlite_version}")
    print("one transaction every   written MB/h   payload MB/h   ratio   median ms   99 % ms")
    for together_s in (0.25, 1.0):
        with tempfile.TemporaryDirectory(dir=args.folder) as folder:
            written, payload, median_ms, worst_ms = run(Path(folder), args.minutes, together_s)
        print(
            f"{together_s:18.2f} s {written:14.0f} {payload:14.1f} {written / payload:7.1f}"
            f" {median_ms:11.2f} {worst_ms:9.2f}",
            flush=True,
        )


if __name__ == "__main__":
    main()
