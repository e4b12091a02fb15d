"""``edgewatch rehearse``: the whole station, through the same code as ``watch``, on a simulated line."""

from __future__ import annotations

import argparse
import contextlib
import dataclasses
import json
import math
import os
import statistics
import sys
import threading
import time
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import cv2
import paho.mqtt.client as paho
from paho.mqtt.enums import CallbackAPIVersion

from edgewatch.commands.options import add_bands, add_station, load_settings
from edgewatch.commands.shipped import find_calib
from edgewatch.commands.watch import bar_text, run_until_stopped
from edgewatch.errors import DeviceError, EdgewatchError, SettingsError
from edgewatch.frames.rehearsal import RehearsalSource
from edgewatch.link.private_broker import PrivateBroker, find_mosquitto
from edgewatch.settings import Settings
from edgewatch.station.station import Outcome, Station
from edgewatch.wire.messages import plain
from edgewatch.wire.topics import Topics

EXAMPLE = "edgewatch rehearse --bars 20 --foreign 3 --seed 7"


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``rehearse``."""
    add_station(parser)
    add_bands(parser)
    parser.add_argument("--bars", type=int, metavar="N", help="bars on the line (default 12)")
    parser.add_argument("--foreign", type=int, metavar="N", help="of these, bars of another grade (default 2)")
    parser.add_argument("--seed", type=int, metavar="N", help="seed of everything random (default 1)")
    parser.add_argument("--grade", help="grade that the line expects (default C45)")
    parser.add_argument("--folder", metavar="DIR", help="where journal and pictures go (default rehearsal-TIME)")
    parser.add_argument("--no-broker", action="store_true", help="journal only, even where Mosquitto is installed")
    parser.add_argument("--pace", choices=("real", "fast"), default="fast", help="real: at the camera's frame rate")
    parser.add_argument("--json", action="store_true", help="JSON lines: one a bar, then the result")


def run(args: argparse.Namespace) -> int:
    """Run ``rehearse``: 0 when every foreign bar was caught and no good one condemned, else 1."""
    settings, folder = _settings(args)
    # one core draws the pictures: OpenCV's threads, which would wait for it, cost the judging a tenth on two cores
    cv2.setNumThreads(max(1, len(os.sched_getaffinity(0)) - 1))
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise DeviceError(
            f"{folder.absolute()}: cannot be made: {error.strerror or error}; --folder names another"
        ) from error
    with contextlib.ExitStack() as stack:
        listener = None
        if settings.mqtt.enabled and not args.no_broker:
            port = stack.enter_context(PrivateBroker())
            mqtt = dataclasses.replace(settings.mqtt, host="127.0.0.1", port=port, tls=False, user="", password_file="")
            settings = dataclasses.replace(settings, mqtt=mqtt)
            listener = stack.enter_context(Listener(port, Topics.of(settings.station)))
        lines: list[Mapping[str, Any]] = []
        begun_s = time.monotonic()

        def told(line: Mapping[str, Any]) -> None:
            lines.append(line)
            print(json.dumps(plain(line), allow_nan=False) if args.json else bar_text(line), flush=True)

        real = args.pace == "real"
        try:
            station = Station(
                settings, folder, live=False, paced=real, named=args.grade, on_told=told, on_notice=_notice
            )
        except EdgewatchError:
            with contextlib.suppress(OSError):
                folder.rmdir()  # nothing came about; a folder that holds something stays
            raise
        if not args.json:
            _introduce(settings, broker=listener is not None)
        outcome = run_until_stopped(station)
        seconds = time.monotonic() - begun_s
        if listener is not None:
            listener.wait_quiet()
    source = station.source
    assert isinstance(source, RehearsalSource)
    result = score(source.bars, lines)
    result |= {
        "messages_delivered": listener.received if listener else 0,
        "messages_unsent": outcome.unsent,
        "frames": outcome.frames,
        "seconds": seconds,
        "journal": str(folder / settings.journal.file),
        "evidence": str(folder / settings.evidence.folder),
        "pictures": outcome.pictures,
    }
    if args.json:
        print(json.dumps(plain(result), allow_nan=False))
    else:
        _print_table(result, outcome, broker=listener is not None)
    good = result["foreign_caught"] == result["foreign"] and not result["false_alarms"]
    return 0 if good and result["bars_judged"] == result["bars"] else 1


def _settings(args: argparse.Namespace) -> tuple[Settings, Path]:
    """Settings of the rehearsal: the station file's where given, on the simulated line, in a folder of its own."""
    if args.station is None:
        args.station = str(find_calib() / "rehearsal.toml")
    settings, origin = load_settings(args)
    changes = {name: getattr(args, name) for name in ("bars", "foreign", "seed", "grade")}
    rehearsal = dataclasses.replace(settings.rehearsal, **{k: v for k, v in changes.items() if v is not None})
    if rehearsal.bars < 1 or not 0 <= rehearsal.foreign <= rehearsal.bars or rehearsal.seed < 0:
        raise SettingsError(
            f"--bars {rehearsal.bars} --foreign {rehearsal.foreign} --seed {rehearsal.seed}: at least one bar, "
            "no more foreign ones than bars, and a seed of 0 or more are needed"
        )
    folder = Path(args.folder or time.strftime("rehearsal-%Y%m%d-%H%M%S"))
    broker = find_mosquitto() is not None and not args.no_broker
    return (
        dataclasses.replace(
            settings,
            source=dataclasses.replace(settings.source, uri="rehearsal:"),
            rehearsal=rehearsal,
            judge=dataclasses.replace(
                settings.judge, expect=rehearsal.grade, bands=str((origin / settings.judge.bands).absolute())
            ),
            journal=dataclasses.replace(settings.journal, file="journal.sqlite"),
            evidence=dataclasses.replace(settings.evidence, folder="evidence"),
            mqtt=dataclasses.replace(settings.mqtt, enabled=broker),
            orders=dataclasses.replace(settings.orders, enabled=False),
        ),
        folder,
    )


def _introduce(settings: Settings, *, broker: bool) -> None:
    station, rehearsal = settings.station, settings.rehearsal
    print(
        f"{station.site}, {station.line}, {station.name}: {rehearsal.bars} bars, {rehearsal.grade} expected, "
        f"{rehearsal.foreign} foreign among them"
    )
    if not broker:
        print("no broker (Mosquitto is not installed or not wanted): journal only")
    sys.stdout.flush()


def _notice(text: str) -> None:
    print(f"edgewatch: {text}", file=sys.stderr, flush=True)


def score(truth: Sequence[Any], lines: Sequence[Mapping[str, Any]]) -> dict[str, Any]:
    """Hold the judged bars against the simulated ones: a judged bar belongs to the one whose contact it overlaps most.

    ``truth``: objects with ``begin_s``, ``end_s``, ``expected``, ``grade``. Counts of bars, verdicts, foreign bars
    caught, false alarms, bars missed and bars that were never there, and the median contact time to decide.
    """
    found: dict[int, Mapping[str, Any]] = {}
    ghosts = 0
    for line in lines:
        overlaps = [min(bar.end_s, line["end_s"]) - max(bar.begin_s, line["begin_s"]) for bar in truth]
        best = max(range(len(truth)), key=lambda index: overlaps[index], default=None)
        if best is None or overlaps[best] <= 0 or best in found:
            ghosts += 1
        else:
            found[best] = line
    verdicts = dict.fromkeys(("conforming", "nonconforming", "inconclusive"), 0)
    for line in found.values():
        verdicts[line["verdict"]] += 1
    foreign = [index for index, bar in enumerate(truth) if bar.grade != bar.expected]
    caught = [found[index] for index in foreign if index in found and found[index]["verdict"] == "nonconforming"]
    alarms = [
        line
        for index, line in found.items()
        if truth[index].grade == truth[index].expected and line["verdict"] == "nonconforming"
    ]
    return {
        "bars": len(truth),
        "bars_judged": len(found),
        "bars_not_seen": len(truth) - len(found),
        "bars_not_there": ghosts,
        **verdicts,
        "foreign": len(foreign),
        "foreign_caught": len(caught),
        "false_alarms": len(alarms),
        "decided_after_median_s": statistics.median(line["decided_after_s"] for line in caught) if caught else math.nan,
    }


def _print_table(result: Mapping[str, Any], outcome: Outcome, *, broker: bool) -> None:
    after = result["decided_after_median_s"]
    rows = [
        ("bars on the line", f"{result['bars']}, of these judged {result['bars_judged']}"),
        ("conforming", result["conforming"]),
        ("nonconforming", result["nonconforming"]),
        ("inconclusive", result["inconclusive"]),
        ("foreign bars caught", f"{result['foreign_caught']} of {result['foreign']}"),
        ("false alarms", result["false_alarms"]),
        ("contact time to decide", f"{after:.2f} s (median of foreign bars)" if math.isfinite(after) else "-"),
        ("messages delivered", f"{result['messages_delivered']}, unsent {outcome.unsent}" if broker else "no broker"),
        ("frames", f"{outcome.frames} in {result['seconds']:.0f} s, {outcome.skipped} skipped"),
        ("journal", result["journal"]),
        ("evidence", f"{result['evidence']} ({outcome.pictures} pictures)"),
    ]
    print()
    for name, value in rows:
        print(f"{name:<24}{value}")


class Listener:
    """An MQTT client apart from the station that counts the journalled messages the broker hands it, each once."""

    def __init__(self, port: int, topics: Topics) -> None:
        self._client = paho.Client(CallbackAPIVersion.VERSION2)
        self._client.on_message = self._on_message
        self._port, self._filter = port, f"{topics.base}/#"
        self._seen: set[int] = set()
        self._last_s = 0.0
        self._ready = threading.Event()
        self._client.on_subscribe = lambda *_: self._ready.set()

    def __enter__(self) -> Listener:
        self._client.connect("127.0.0.1", self._port)
        self._client.subscribe(self._filter, qos=1)
        self._client.loop_start()
        self._ready.wait(5.0)
        return self

    def __exit__(self, *_: object) -> None:
        self._client.loop_stop()
        self._client.disconnect()

    @property
    def received(self) -> int:
        """Different journalled messages received."""
        return len(self._seen)

    def wait_quiet(self, *, quiet_s: float = 0.3, longest_s: float = 5.0) -> None:
        """Wait until nothing has come for a moment."""
        give_up_s = time.monotonic() + longest_s
        while time.monotonic() < give_up_s and time.monotonic() - self._last_s < quiet_s:
            time.sleep(0.05)  # messages come from another thread; nothing tells that there are no more

    def _on_message(self, client: paho.Client, userdata: object, message: paho.MQTTMessage) -> None:
        self._last_s = time.monotonic()
        try:
            seq = json.loads(message.payload).get("seq")
        except (ValueError, AttributeError):
            return
        if isinstance(seq, int):
            self._seen.add(seq)
