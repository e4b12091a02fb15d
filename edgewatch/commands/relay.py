"""``edgewatch relay``: read, set or test the relay by hand, or take back a stop that is latched."""

from __future__ import annotations

import argparse
import getpass
import json
import sys
import threading
import time
from pathlib import Path
from typing import Any

from edgewatch.commands.options import add_station, load_settings
from edgewatch.errors import DeviceError, SettingsError
from edgewatch.monitor.memory import read_memory
from edgewatch.monitor.stop import StopEvent, StopState, after
from edgewatch.record.journal import Entry, Journal
from edgewatch.relay.port import Relay, open_relay
from edgewatch.settings import RelaySettings, Settings
from edgewatch.station.clock import Clock
from edgewatch.wire import messages
from edgewatch.wire.relayframes import is_energised

EXAMPLE = """\
edgewatch relay state --station station.toml
  edgewatch relay stop
  edgewatch relay test --yes
  edgewatch relay release --who foreman"""

CAUTION = (
    "The relay is a process stop, never a safety function: it replaces no emergency stop, guard or interlock. Before "
    "anybody works on the line it is isolated and locked by the plant's own means."
)
PAUSE_S = 1.0
"""Between two switches of a test: contactors and drives need not follow faster (s)."""
WORDS = {True: "stop", False: "run", None: "unknown"}


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``relay``."""
    parser.add_argument(
        "job",
        choices=("state", "run", "stop", "test", "release"),
        help="state: read it back; run, stop: bring the line to it; test: switch there and back; "
        "release: take back a latched stop of a station that is not running",
    )
    add_station(parser)
    parser.add_argument(
        "--yes", action="store_true", help="nobody is at the line and it may start: needed to run, test"
    )
    parser.add_argument("--hold", type=float, metavar="S", help="hold a control line this long (default: until Ctrl-C)")
    parser.add_argument("--cycles", type=int, default=3, metavar="N", help="cycles of a test (default: 3)")
    parser.add_argument("--journal", metavar="FILE", help="journal file (overrides journal.file)")
    parser.add_argument("--who", metavar="NAME", help="who releases (default: the user's login name)")
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(args: argparse.Namespace) -> int:
    """Do the job; 1 when the relay does not read back as wanted, or cannot be read."""
    settings, folder = load_settings(args)
    if settings.relay.kind == "none":
        raise SettingsError('relay.kind = "none": no relay is configured; allowed is "line", "frames" or "modbus"')
    if args.job in ("run", "test") and not args.yes:
        raise SettingsError(f"relay {args.job}: the line may start: make sure that nobody is at it, then add --yes")
    if not 1 <= args.cycles <= 1000:
        raise SettingsError(f"--cycles {args.cycles}: from 1 to 1000")
    if args.hold is not None and not 0 <= args.hold <= 86400:
        raise SettingsError(f"--hold {args.hold:g}: from 0 to 86400 s")
    if args.job != "state":
        print(f"edgewatch: {CAUTION}", file=sys.stderr)
    relay = open_relay(settings.relay)
    try:
        if args.job == "state":
            return _state(relay, args)
        if args.job == "release":
            return _release(settings, folder / settings.journal.file, args)
        if args.job == "test":
            return _test(relay, args)
        return _set(relay, settings.relay, args)
    finally:
        relay.close(leave=args.job != "test")


def _state(relay: Relay, args: argparse.Namespace) -> int:
    read_back = relay.read_back()
    _say(args, {"line": WORDS[read_back]}, f"the line is to {WORDS[read_back]}")
    if read_back is None:
        print("edgewatch: this kind of relay cannot be read without switching it", file=sys.stderr)
    return int(read_back is None)


def _set(relay: Relay, settings: RelaySettings, args: argparse.Namespace) -> int:
    stop = args.job == "stop"
    done = _switch(relay, stop)
    _say(args, done, f"{done['wanted']}: reads back as {done['read_back']} after {done['ms']:.1f} ms")
    if settings.kind == "line" and is_energised(stop, settings.energise_to):
        held = "until Ctrl-C" if args.hold is None else f"for {args.hold:g} s"
        print(f"edgewatch: the control line is held {held}; it falls when this program ends", file=sys.stderr)
        threading.Event().wait(args.hold)
    return int(done["read_back"] not in (done["wanted"], "unknown"))


def _test(relay: Relay, args: argparse.Namespace) -> int:
    """Run and stop in turn; the line is left stopped where the wiring allows."""
    switches = []
    for cycle in range(args.cycles):
        for stop in (False, True):
            if cycle or stop:
                time.sleep(PAUSE_S)  # of the machine that is switched, not of ours
            done = _switch(relay, stop)
            switches.append(done)
            if not args.json:
                print(f"{done['wanted']:<5} reads back as {done['read_back']:<8} {done['ms']:7.1f} ms", flush=True)
    wrong = sum(done["read_back"] not in (done["wanted"], "unknown") for done in switches)
    unknown = sum(done["read_back"] == "unknown" for done in switches)
    slowest = max(done["ms"] for done in switches)
    text = f"{len(switches)} switches, {wrong} wrong, {unknown} without read-back, slowest {slowest:.1f} ms"
    _say(args, {"switches": switches, "wrong": wrong, "unknown": unknown, "slowest_ms": slowest}, text)
    return int(wrong > 0)


def _switch(relay: Relay, stop: bool) -> dict[str, Any]:
    begin_s = time.monotonic()
    relay.apply(stop)
    read_back = relay.read_back()
    return {"wanted": WORDS[stop], "read_back": WORDS[read_back], "ms": 1000.0 * (time.monotonic() - begin_s)}


def _release(settings: Settings, path: Path, args: argparse.Namespace) -> int:
    """Take back a stop that the journal remembers. The port is ours meanwhile, so no station uses the journal."""
    if not path.is_file():
        raise DeviceError(f"journal {path}: is not there, so no stop is remembered")
    journal = Journal(path)
    try:
        memory = read_memory({"stop": journal.state("stop")})
        if memory.stop is StopState.RUN:
            _say(args, {"released": False}, "no stop is latched")
            return 0
        stop = after(memory.stop, StopEvent.RELEASE)
        reason = f"released by hand: {memory.stop_reason}"
        body = messages.relay(
            wanted="run",
            energised=is_energised(False, settings.relay.energise_to),
            read_back="unknown",
            reason=reason,
            latched=False,
            who=(args.who if args.who is not None else _login())[:128],
        )
        journal.append(
            [Entry(kind="relay", body=body)], stamp=Clock().now(), state={"stop": {"state": stop.value, "reason": ""}}
        )
    finally:
        journal.close()
    _say(args, {"released": True, "reason": memory.stop_reason}, f"released: {memory.stop_reason}")
    print("edgewatch: the line may run as soon as the station is started", file=sys.stderr)
    return 0


def _login() -> str:
    try:
        return getpass.getuser()
    except (KeyError, OSError):  # a user without a name
        return "by hand"


def _say(args: argparse.Namespace, data: dict[str, Any], text: str) -> None:
    print(json.dumps(messages.plain(data), allow_nan=False) if args.json else text, flush=True)
