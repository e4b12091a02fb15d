"""Kill a recording and sending process at random moments, broker in reach or not; compare journal and subscriber.

The line to the broker is cut and mended, in the middle of messages too; the subscriber stays with the broker all the
time, so whatever the broker took must arrive. Order is judged within one quality of service: a broker hands on QoS 0
at once while QoS 1 waits in a subscriber's queue (MQTT 5 section 4.6). That a broker restarts is tested in
``test_session.py``; what it does to its own queues then is not ours.
"""

from __future__ import annotations

import random
import signal
import subprocess
import sys
import time
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

from edgewatch.link.session import Link
from edgewatch.record.journal import Journal
from edgewatch.settings import MqttSettings, StationSettings
from edgewatch.wire.messages import encode
from edgewatch.wire.outgoing import Outgoing
from edgewatch.wire.topics import Topics
from tests.brokers import Broker, Line, Reader, running, wait_until
from tests.record.entries import stamp

ROOT = Path(__file__).parents[2]
SITUATIONS = ("broker there", "broker away", "line cut midway", "line mended midway")


@dataclass
class Outcome:
    """What a campaign found. All lists of numbers should be empty."""

    kills: Counter[str] = field(default_factory=Counter)
    recorded: int = 0
    repeats: int = 0
    lost_records: list[int] = field(default_factory=list)
    not_delivered: list[int] = field(default_factory=list)
    altered: list[int] = field(default_factory=list)
    out_of_order: list[int] = field(default_factory=list)
    second_use: list[int] = field(default_factory=list)

    @property
    def clean(self) -> bool:
        """Nothing lost, altered, out of order, or numbered twice."""
        return not (self.lost_records or self.not_delivered or self.altered or self.out_of_order or self.second_use)


def campaign(folder: Path, *, kills: int, seed: int) -> Outcome:
    """Run ``kills`` kills; the moments and situations follow from ``seed``."""
    rng = random.Random(seed)
    outcome = Outcome()
    promised: set[int] = set()
    payloads: dict[int, bytes] = {}
    with running(Broker(folder / "broker")) as broker:
        line = Line(broker)
        reader = Reader(broker).ready(broker)
        for number in range(kills):
            situation = SITUATIONS[number % 4]
            promised |= _one_kill(folder, line, rng, situation, number)
            _compare_journal(folder, promised, payloads, outcome)
            outcome.kills[situation] += 1
        line.close()
        _drain(folder, broker)
        until_s = time.monotonic() + 30.0
        while not payloads.keys() <= set(reader.seqs()) and time.monotonic() < until_s:
            time.sleep(0.1)  # what has not arrived by then is counted as not delivered
        reader.stop()
    outcome.recorded = len(payloads)
    _compare_reader(reader, payloads, outcome)
    return outcome


def _one_kill(folder: Path, line: Line, rng: random.Random, situation: str, number: int) -> set[int]:
    """Start the writer, kill it after a random time, and return the numbers that it was given."""
    if situation in ("broker away", "line mended midway"):
        line.cut()
    else:
        line.mend()
    version = "5" if number % 3 else "3.1.1"
    words = [sys.executable, "-m", "tests.link.writer", str(folder), str(line.port), version, str(number)]
    process = subprocess.Popen(words, stdout=subprocess.PIPE, cwd=ROOT)
    assert process.stdout is not None
    first = process.stdout.readline() if rng.random() < 0.9 else b""  # now and then before it has recorded anything
    time.sleep(rng.uniform(0, 0.5))  # the random moment is what is tested
    if situation == "line cut midway":
        line.cut()
    elif situation == "line mended midway":
        line.mend()
    time.sleep(rng.uniform(0, 0.7))
    process.send_signal(signal.SIGKILL)
    rest, _ = process.communicate()
    assert process.returncode == -signal.SIGKILL, "the writer ended by itself"
    lines = (first + rest).split(b"\n")
    return {int(one) for one in lines[:-1]}  # the last line may be torn


def _compare_journal(folder: Path, promised: set[int], payloads: dict[int, bytes], outcome: Outcome) -> None:
    """Every number that was handed out is in the journal, and what was there before is still the same."""
    journal = Journal(folder / "station.sqlite", most_mb=2)
    rows = {row.seq: row for row in journal.rows()}
    waiting: dict[int, Outgoing] = {message.seq: message for message in journal.pending(10**7)}
    oldest = min(rows, default=0)
    for seq in sorted(promised):
        if seq not in rows and (seq >= oldest or seq not in payloads):
            outcome.lost_records.append(seq)  # a record that gave way was seen by us before, and is older than all left
    outcome.lost_records += [seq for seq in waiting if seq not in rows]
    newest = max(payloads, default=0)
    for seq, row in rows.items():
        raw = waiting[seq].payload if seq in waiting else None
        known = payloads.get(seq)
        if known is None:
            if seq <= newest:
                outcome.second_use.append(seq)
            payloads[seq] = raw if raw is not None else encode(row.payload)
        elif known != encode(row.payload):
            outcome.altered.append(seq)
    journal.close()


def _drain(folder: Path, broker: Broker) -> None:
    """One last run that is not killed: whatever waits is sent."""
    journal = Journal(folder / "station.sqlite", most_mb=2)
    link = Link(
        MqttSettings(host="127.0.0.1", port=broker.port),
        Topics.of(StationSettings()),
        journal,
        stamp=stamp,
        version="0",
    )
    link.start()
    wait_until(lambda: journal.status().unsent == 0, "the outbox is empty", within_s=60)
    link.stop()
    journal.close()


def _compare_reader(reader: Reader, payloads: dict[int, bytes], outcome: Outcome) -> None:
    """What the subscriber saw is what was recorded, each number first seen in order within its quality of service."""
    seen: set[int] = set()
    newest = {0: 0, 1: 0}
    for message in reader.seen:
        payload = message.payload
        if "seq" not in payload:
            continue
        seq = payload["seq"]
        if seq in seen:
            outcome.repeats += 1
        elif seq < newest[message.qos]:
            outcome.out_of_order.append(seq)
        else:
            newest[message.qos] = seq
        if encode(payload) != payloads.get(seq):
            outcome.altered.append(seq)
        seen.add(seq)
    outcome.not_delivered += sorted(payloads.keys() - seen)
