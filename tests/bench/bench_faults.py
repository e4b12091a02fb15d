"""Fault campaign, long form: kills, outages up to a simulated week, a disk that is full at random moments, and every
fault of the ports and threads again and again in one running station.

``python -m tests.bench.bench_faults [--kills 200] [--seed 1] [--days 7] [--rounds 10]`` prints a table for each part
(``--longest``: of the outages only the longest);
the exit status is 1 when anything was lost, altered, sent out of order or numbered twice, or did not recover. The short
form is in the tests.
"""

from __future__ import annotations

import argparse
import json
import platform
import random
import resource
import signal
import sqlite3
import sys
import tempfile
import time
from collections.abc import Callable
from importlib.metadata import version
from pathlib import Path

from edgewatch.errors import DeviceError
from edgewatch.link.session import Link
from edgewatch.record.journal import Entry, Journal
from edgewatch.settings import MqttSettings, StationSettings
from edgewatch.wire import messages
from edgewatch.wire.topics import Topics
from tests.brokers import Broker, Reader, Seen, running, wait_until
from tests.link.kills import campaign
from tests.record.entries import alert, condition, figures, stamp, window
from tests.station.faults import FAULTS, LAST, Rig, Row

WINDOWS_A_SECOND = 4
BAR_EVERY_S = 2.0
"""Full rate: windows of 0.25 s without a pause, a bar every two seconds."""


def kills(count: int, seed: int) -> bool:
    """SIGKILL at random moments."""
    with tempfile.TemporaryDirectory() as folder:
        began_s = time.monotonic()
        outcome = campaign(Path(folder), kills=count, seed=seed)
        print(f"\nSIGKILL at random moments ({time.monotonic() - began_s:.0f} s)")
        for situation, number in sorted(outcome.kills.items()):
            print(f"  {situation:22} {number:5d} kills")
        print(f"  records {outcome.recorded}, sent again with the same number {outcome.repeats}")
        for name in ("lost_records", "not_delivered", "altered", "out_of_order", "second_use"):
            print(f"  {name.replace('_', ' '):22} {len(getattr(outcome, name)):5d}")
        return outcome.clean


class Tally(Reader):
    """Counts rather than keeps: a week is half a million messages."""

    def __init__(self, broker: Broker) -> None:
        self.last = self.firsts = self.repeats = self.strays = self.bars = self.told = self.summaries = 0
        super().__init__(broker)

    def take(self, message: Seen) -> None:
        """Count one message."""
        payload = message.payload
        seq = payload.get("seq", 0)
        if message.topic.endswith("/summary"):
            self.summaries += 1
        elif seq > self.last:
            self.last = seq
            self.firsts += 1
            self.bars += message.topic.endswith("/bar")
            self.told += payload.get("count", 0)
        elif seq:
            self.repeats += 1  # or out of order: then fewer first sights than messages sent are counted


def whole_bar(number: int) -> Entry:
    """A bar with everything that a station says of one: some 1400 bytes as a message."""
    body = messages.bar(
        bar=number,
        expected="42CrMo4",
        verdict="nonconforming",
        values=figures(number),
        decided_after_s=0.7512345678,
        nearest=[(grade, 0.123456789012345) for grade in ("C45", "C15", "42CrMo4", "100Cr6", "16MnCr5")],
        heat="H4711",
        order_number="mes-20260301-17",
        band=messages.band(
            grade="42CrMo4",
            burst_rate_low_per_m=0.8312345678901,
            burst_rate_high_per_m=1.0212345678901,
            reach_low_mm=312.1234567890,
            reach_high_mm=355.1234567890,
        ),
        pictures=[f"20260301T060000Z-bar{number:06d}-{place}.jpg" for place in (1, 2, 3)],
        extra={
            "figure": "burst_rate",
            "log_evidence": 12.3456789012345,
            "ended_by": "quiet",
            "reach_at_taught_speed_mm": 330.123456789012,
        },
    )
    return Entry(kind="bar", body=body)


def outages(seconds: list[float]) -> bool:
    """The broker is away for a simulated time at full rate, then everything is delivered."""
    print(
        "\nBroker away at full rate (4 windows a second, a bar every 2 s), journal 1024 MB, windows thinned above 64 MB"
    )
    print(
        "  away        recorded   thinned      file   append ms      sent     msg/s   bars            delivered"
        "  repeats  live s"
    )
    good = True
    for away_s in seconds:
        with tempfile.TemporaryDirectory() as folder:
            good &= _outage(Path(folder), away_s)
    return good


def _outage(folder: Path, away_s: float) -> bool:
    journal = Journal(folder / "j.sqlite")
    slowest_ms = total_s = 0.0
    steps = round(away_s)
    bars = 0
    together = 1 if steps <= 3600 else 10  # seconds that share a transaction, or a week would take hours to write
    for second in range(0, max(1, steps), together):
        entries = []
        for part in range(second, second + together):
            entries += [window(part) for _ in range(WINDOWS_A_SECOND)]
            if part % BAR_EVERY_S == 0:
                entries.append(whole_bar(part))
                bars += 1
            if part % 3600 == 0:
                entries.append(condition("good"))
        began_s = time.perf_counter()
        journal.append(entries, stamp=stamp(1e9 + second))
        took_s = time.perf_counter() - began_s
        total_s += took_s
        slowest_ms = max(slowest_ms, took_s * 1e3)
    status = journal.status()
    broker = Broker(folder / "broker")
    with running(broker):
        reader = Tally(broker)
        reader.ready(broker)
        link = Link(
            MqttSettings(host="127.0.0.1", port=broker.port),
            Topics.of(StationSettings()),
            journal,
            stamp=stamp,
            version="0",
        )
        began_s = time.monotonic()
        link.start()
        longest_live_s = _live_while_draining(journal, link, reader)
        drained_s = time.monotonic() - began_s
        wait_until(lambda: reader.firsts >= status.unsent, "all arrived in order", within_s=900)
        link.stop()
        reader.stop()
    good = reader.bars == bars and reader.firsts == status.unsent
    good &= reader.told <= status.windows_thinned < reader.told + 1001
    print(
        f"  {_span(away_s):>8} {status.next_seq - 1:11d} {status.windows_thinned:9d} {status.used_bytes / 1e6:6.0f} MB"
        f" {total_s * together / max(1, steps) * 1e3:5.2f}/{slowest_ms:5.1f} {reader.firsts:9d}"
        f" {reader.firsts / drained_s:9.0f}"
        f" {'all' if reader.bars == bars else 'LOST':>6} {'all, once, in order' if good else 'WRONG':>20}"
        f" {reader.repeats:8d} {longest_live_s:7.2f}",
        flush=True,
    )
    journal.close()
    return good


def _live_while_draining(journal: Journal, link: Link, reader: Tally) -> float:
    """Publish a summary now and then; return the longest time until the subscriber saw one."""
    longest_s = 0.0
    while journal.status().unsent:
        before = reader.summaries
        link.publish("summary", {"condition": "good"})
        began_s = time.monotonic()
        while reader.summaries == before and journal.status().unsent:
            time.sleep(0.005)  # the answer comes from another process; five ms are the resolution of the figure
        longest_s = max(longest_s, time.monotonic() - began_s)
        time.sleep(0.1)  # a live message now and then, as a station sends them
    return longest_s


def _span(seconds: float) -> str:
    for size, name in ((86400, "d"), (3600, "h"), (60, "min")):
        if seconds >= size:
            return f"{seconds / size:g} {name}"
    return f"{seconds:g} s"


def full_disk(rounds: int, seed: int) -> bool:
    """The largest file allowed shrinks and grows at random moments: records are refused whole or kept whole."""
    rng = random.Random(seed)
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    kept = refused = 0
    expected: list[int] = []
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "j.sqlite"
        journal = Journal(path)
        for _ in range(rounds):
            resource.setrlimit(resource.RLIMIT_FSIZE, (rng.choice((20_000, 150_000, 300_000, 3_000_000, hard)), hard))
            entries = [alert("x" * rng.randrange(2000)) for _ in range(rng.randrange(1, 30))]
            try:
                expected += journal.append(entries, stamp=stamp())
                kept += 1
            except DeviceError:
                refused += 1
            if rng.random() < 0.02:
                resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
                journal.close()
                journal = Journal(path)
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        found = [row.seq for row in journal.rows()]
        journal.close()
        with sqlite3.connect(path) as db:
            sound = db.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
        db.close()
    good = found == expected == list(range(1, len(expected) + 1)) and sound
    print(f"\nDisk full at random moments: {kept} transactions kept, {refused} refused, {len(found)} records,")
    print(f"  {'no record lost or half written, no gap, file sound' if good else 'WRONG'}")
    return good


def ports(rounds: int, seed: int) -> bool:
    """Every fault in each round, in another order each time; those that last end a round and a station."""
    rng = random.Random(seed)
    print(f"\nFaults of ports and threads in a running station, {rounds} rounds in random order; a bar every 0.96 s")
    print(f"  {'fault':26} {'times':>5} {'bars':>5} {'relay':>6} {'recovered':>10} {'after s':>8} {'lost':>5}  said")
    found: dict[str, list[Row]] = {name: [] for name in FAULTS}
    lost = judged = 0
    for number in range(rounds):
        with tempfile.TemporaryDirectory() as folder:
            rig = Rig(Path(folder), seed=seed + number)
            order = [name for name in FAULTS if name not in LAST]
            rng.shuffle(order)
            for name in (*order, *LAST):
                found[name].append(rig.put_in(name))
                if rig.troubles:
                    print(f"  {name}: {rig.troubles.pop()}", flush=True)
            rig.close()
            lost += len(rig.missing())
            judged += len(rig.told)
    for name, rows in found.items():
        always = set.intersection(*(set(row.said) for row in rows))
        now_and_then = set.union(*(set(row.said) for row in rows)) - always
        said = ", ".join(sorted(always)) + (f" (at times {', '.join(sorted(now_and_then))})" if now_and_then else "")
        print(
            f"  {name:26} {len(rows):5d} {sum(row.bars for row in rows):5d} {sum(row.switches for row in rows):6d}"
            f" {sum(row.recovered for row in rows):7d}/{len(rows):<2d} {max(row.seconds for row in rows):8.1f}"
            f" {max(row.missing for row in rows):5d}  {said or '-'}"
        )
    good = lost == 0 and all(row.recovered and not row.missing for rows in found.values() for row in rows)
    print(f"  {judged} bars judged, {lost} of them never reached the reader")
    return good


def main() -> int:
    """Run all parts."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--kills", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--days", type=float, default=7.0, help="the longest simulated outage")
    parser.add_argument("--longest", action="store_true", help="only the longest outage")
    parser.add_argument("--rounds", type=int, default=10)
    parser.add_argument("--part", choices=["kills", "outages", "disk", "ports"], action="append")
    args = parser.parse_args()
    print(f"{platform.machine()}, {platform.system()} {platform.release()}, Python {platform.python_version()},")
    print(f"SQLite {sqlite3.sqlite_version}, paho-mqtt {version('paho-mqtt')}, seed {args.seed}")
    spans = [span for span in (1.0, 60.0, 3600.0, 86400.0) if span < args.days * 86400] + [args.days * 86400]
    spans = spans[-1:] if args.longest else spans
    parts: dict[str, Callable[[], bool]] = {
        "kills": lambda: kills(args.kills, args.seed),
        "outages": lambda: outages(spans),
        "disk": lambda: full_disk(3000, args.seed),
        "ports": lambda: ports(args.rounds, args.seed),
    }
    good = [job() for name, job in parts.items() if not args.part or name in args.part]
    print(json.dumps({"good": all(good)}))
    return 0 if all(good) else 1


if __name__ == "__main__":
    sys.exit(main())
