"""A process that records and sends as a station does, until it is killed: ``python -m tests.link.writer FOLDER PORT
VERSION SEED``. Prints each number after ``append`` has returned it.
"""

from __future__ import annotations

import os
import random
import sys
import time
from pathlib import Path

from edgewatch.link.session import Link
from edgewatch.record.journal import Entry, Journal
from edgewatch.settings import MqttSettings, StationSettings
from edgewatch.wire.topics import Topics
from tests.record.entries import alert, bar, condition, stamp, window


def main() -> None:
    """Record bursts of one to five entries at random moments, for ever."""
    folder, port, version, seed = sys.argv[1:]
    rng = random.Random(int(seed))
    # Small limits, so that pruning is under way while the process is killed.
    journal = Journal(Path(folder) / "station.sqlite", most_mb=2)
    link = Link(
        MqttSettings(host="127.0.0.1", port=int(port), version=version),
        Topics.of(StationSettings()),
        journal,
        stamp=stamp,
        version="0",
    )
    link.start()
    number = journal.state("number", 0)
    while True:
        number += 1
        entries: list[Entry] = [window(number) for _ in range(rng.randrange(4))]
        entries += rng.choice(([], [bar(number)], [alert(f"text {rng.random()}")], [condition("failure")]))
        seqs = journal.append(entries, stamp=stamp(boot=f"boot-{seed}"), state={"number": number})
        link.wake()
        os.write(1, "".join(f"{seq}\n" for seq in seqs).encode())  # at once: a buffer would die with the process
        time.sleep(rng.choice((0.0, 0.001, 0.01)))  # the pace of a line, so that moments differ


if __name__ == "__main__":
    main()
