"""Faults put into a whole station one after another: what it says, what goes on meanwhile, what is lost.

The station runs in this process, so that its threads can be made to die; broker, reader, the process that locks the
journal, FIFO, board and disk limit are real. Every bar is foreign to the band: each one stops the line and raises an
alert, the next lets it run again, so the relay shows whether judging goes on.
"""

from __future__ import annotations

import contextlib
import dataclasses
import itertools
import os
import random
import resource
import shutil
import signal
import subprocess
import sys
import time
from collections import Counter
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from unittest import mock

import numpy as np

from edgewatch.frames.pipe import RawPipe
from edgewatch.link.session import Link
from edgewatch.record.bandfiles import save_band
from edgewatch.record.journal import Journal
from edgewatch.relay.keeper import RelayKeeper
from edgewatch.settings import read_settings
from edgewatch.sight.sight import Sight
from edgewatch.station.clock import Clock
from edgewatch.station.pictures import PictureDesk
from edgewatch.station.station import Outcome, Station
from edgewatch.wire.messages import Stamp
from tests.brokers import Broker, Reader, Seen, free_port, make_certificates, wait_until
from tests.monitor.streams import HEIGHT, WIDTH, band, quiet, sparks
from tests.relay.boards import Board
from tests.station.pictures import Grabber

FPS = 25
"""Slow, so that a busy machine follows: an overload is a fault of its own (``test_overload.py``)."""
CONTACT_FRAMES, PAUSE_FRAMES = 15, 9
ON, OFF = bytes.fromhex("A00101A2"), bytes.fromhex("A00100A1")
LASTING = {"journal_damaged", "records_refused"}
"""Causes that stay until somebody has looked and started the station anew."""
LONG_S = 90.0
"""Longest wait for what takes a few seconds on an idle machine."""


@dataclass(frozen=True, kw_only=True)
class Row:
    """One fault. ``said``: causes that the station did not have before; ``bars``, ``switches``: judged and carried out
    while the fault lasted; ``seconds``: from its end until all was as before; ``missing``: bars that the reader never
    got, of those judged from its beginning to then.
    """

    fault: str
    said: tuple[str, ...]
    bars: int
    switches: int
    recovered: bool
    seconds: float
    missing: int


class BarReader(Reader):
    """Keeps which bars came, and under which ``seq``, so that nobody parses everything again and again."""

    def __init__(self, broker: Broker) -> None:
        self.bars: set[tuple[int, int]] = set()
        super().__init__(broker, session="reader")

    def take(self, message: Seen) -> None:
        """Keep one message."""
        super().take(message)
        if message.topic.endswith("/bar"):
            self.bars.add((message.payload["bar"], message.payload["seq"]))


class JumpingClock(Clock):
    """The station's clock with a wall clock that is set wrong."""

    offset_s = 0.0

    def now(self) -> Stamp:
        """A stamp with the wrong time of day."""
        stamp = super().now()
        return dataclasses.replace(stamp, utc_s=stamp.utc_s + JumpingClock.offset_s, synced=True)


class Rig:
    """A station with everything it talks to."""

    def __init__(self, folder: Path, seed: int = 1) -> None:
        self.folder = folder
        self.rng = random.Random(seed)
        self.told: list[Mapping[str, Any]] = []
        self.said: set[str] = set()
        self.troubles: list[str] = []
        self._undo = contextlib.ExitStack()
        self._prepare_broker()
        self.relay_name = folder / "ttyRELAY"
        self.plug_board()
        self.fifo = folder / "grabber"
        os.mkfifo(self.fifo)
        save_band(folder / "bands" / "C80.toml", band("C80", 1.4, 3.4))
        JumpingClock.offset_s = 0.0
        for name, value in (
            ("edgewatch.station.station.Clock", JumpingClock),
            ("edgewatch.station.station.STEADY_S", 1.0),  # or a fault would be named for ten minutes
            ("edgewatch.station.supervise.LONGEST_WAIT_S", 1.0),  # many faults in a row, as no station has them
            ("edgewatch.link.session.LONGEST_WAIT_S", 1.0),
        ):
            self._undo.enter_context(mock.patch(name, value))
        self.station = Station(self._settings(), folder, on_told=self.told.append)
        self._pool = ThreadPoolExecutor()
        self._run: Future[Outcome] = self._pool.submit(self.station.run)
        self.grabber = Grabber(self.fifo, _pictures(seed), fps=FPS)
        self.await_bars(1, sure=True)
        self.usual = set(self.station.monitor.causes)
        """Causes of this machine, as a clock that is not synchronised."""

    def _prepare_broker(self) -> None:
        folder = self.folder
        self.certificates = make_certificates(folder / "valid")
        self.expired = make_certificates(folder / "expired", expired=True)
        authorities = (self.certificates.ca.read_text(), self.expired.ca.read_text())
        (folder / "authorities.pem").write_text("".join(authorities))
        self.passwords = folder / "passwords"
        self.passwords.touch(mode=0o600)
        self.set_password("right")
        secret = folder / "secret"
        secret.touch(mode=0o600)
        secret.write_text("right\n")
        self._tls_port = free_port()
        cert, key = self.certificates.cert, self.certificates.key
        lines = (f"password_file {self.passwords}", f"listener {self._tls_port} 127.0.0.1")
        lines += (f"certfile {cert}", f"keyfile {key}")
        self.broker = Broker(folder / "broker", persistence=True, lines=lines)
        self.broker.start()
        self.reader = BarReader(self.broker)
        self.reader.ready(self.broker)

    def _settings(self) -> Any:
        answers = {"on_frame": ON.hex(), "off_frame": OFF.hex(), "on_answer": ON.hex(), "off_answer": OFF.hex()}
        secrets = {"ca_file": "authorities.pem", "user": "wheel-a", "password_file": "secret"}
        return read_settings(
            {
                "source": {"uri": f"pipe:{self.fifo}", "width_px": WIDTH, "height_px": HEIGHT, "stall_s": 1.0},
                "optics": {"mm_per_px": 2.0, "contact_px": [4, 100], "fps": FPS, "exposure_ms": 3.0},
                "judge": {"bands": "bands", "expect": "C80"},
                "journal": {"file": "journal.sqlite"},
                "mqtt": {"enabled": True, "host": "localhost", "port": self._tls_port, "tls": True, **secrets},
                "relay": {"kind": "frames", "port": str(self.relay_name), "latch": False, **answers},
            },
            file="test",
        )

    def set_password(self, password: str) -> None:
        """What the broker takes for the station's password from its next start on."""
        words = ["mosquitto_passwd", "-b", str(self.passwords), "wheel-a", password]
        subprocess.run(words, check=True, capture_output=True)

    def plug_board(self) -> None:
        """Put a board behind the relay's port."""
        self.board = Board({ON: True, OFF: False}, lambda request: [(0.0, request)])
        self.relay_name.symlink_to(self.board.port)

    def pull_board(self) -> None:
        """Take it away."""
        self.relay_name.unlink()
        self.board.pull()

    # ------------------------------------------------------------------ looking

    def await_(self, true: Callable[[], Any], what: str) -> None:
        """Wait until ``true()``, noting every cause that is said meanwhile."""

        def noting() -> bool:
            assert not self._run.done(), f"the station has ended: {self._run.result()}"
            self.said |= set(self.station.monitor.causes)
            return bool(true())

        wait_until(noting, what, LONG_S)

    def await_cause(self, cause: str) -> None:
        """Wait until it is in force."""
        self.await_(lambda: cause in self.station.monitor.causes, cause)

    def await_bars(self, more: int, *, sure: bool = False) -> None:
        """Wait until so many more bars have been judged; ``sure``: until so many in a row were called what they are."""
        until = len(self.told) + more

        def done() -> bool:
            verdicts = [line["verdict"] for line in self.told[-more:]]
            return len(self.told) >= until and not (sure and verdicts != ["nonconforming"] * more)

        self.await_(done, "bars to be judged")

    def is_well(self) -> bool:
        """Whether no fault is felt."""
        return not set(self.station.monitor.causes) - self.usual - LASTING

    @property
    def switches(self) -> int:
        """How often this board has been switched to another level."""
        levels = list(self.board.requests)
        return sum(a != b for a, b in itertools.pairwise(levels))

    def on(self, topic_end: str) -> list[dict[str, Any]]:
        """What came to the reader."""
        return [message.payload for message in self.reader.on(topic_end)]

    def received(self) -> Counter[int]:
        """Bars at the reader, with the number of different ``seq`` they came under."""
        return Counter(bar for bar, _ in list(self.reader.bars))

    def missing(self, first: int = 0) -> list[int]:
        """Bars that were judged, from place ``first`` on, and have not arrived."""
        got = self.received()
        return [line["bar"] for line in self.told[first:] if not got[line["bar"]]]

    # ------------------------------------------------------------------ faults

    def put_in(self, name: str) -> Row:
        """Put in one fault, end it, wait until all is as it was."""
        self.said = set()
        bars, board, switches = len(self.told), self.board, self.switches
        with FAULTS[name](self):
            pass
        bars_meanwhile = len(self.told) - bars
        switches_meanwhile = self.switches - (switches if self.board is board else 0)
        ended_s = time.monotonic()
        recovered = True
        last = self.told[-1]["bar"]
        try:
            self.await_(self.is_well, f"{name}: causes to go")
            self.await_bars(2, sure=True)
            last = self.told[-1]["bar"]
            self.await_(lambda: self.received()[last] and not self.missing(bars), f"{name}: bars to arrive")
            seen = self.switches
            self.await_(lambda: self.switches > seen, f"{name}: the relay to follow")
        except AssertionError as error:
            self.troubles.append(str(error))
            recovered = False
        return Row(
            fault=name,
            said=tuple(sorted(self.said - self.usual)),
            bars=bars_meanwhile,
            switches=switches_meanwhile,
            recovered=recovered,
            seconds=time.monotonic() - ended_s,
            missing=sum(bar <= last for bar in self.missing(bars)),  # a later one may be on its way
        )

    def close(self) -> Outcome:
        """End everything; what the run came to."""
        try:
            self.station.request_stop()
            outcome = self._run.result(60.0)
            with contextlib.suppress(AssertionError):  # what has not come by then is missing
                wait_until(lambda: not self.missing(), "the last bars", 20.0)
        finally:
            self.grabber.stop()
            self.reader.stop()
            self.broker.stop()
            self.board.pull()
            self._pool.shutdown()
            self._undo.close()
        return outcome


@contextlib.contextmanager
def dying(rig: Rig, owner: type, method: str, times: int) -> Iterator[None]:
    """``method`` raises what nobody expects the next ``times`` times; judging and relay are watched until then."""
    left = times
    whole = getattr(owner, method)

    def broken(*words: Any, **named: Any) -> Any:
        nonlocal left
        if left > 0:
            left -= 1
            raise RuntimeError(f"{method} was made to fail")
        return whole(*words, **named)

    with mock.patch.object(owner, method, broken):
        rig.await_(lambda: left == 0, f"{method} to fail")
        yield


@contextlib.contextmanager
def thread_dies(rig: Rig, owner: type, method: str) -> Iterator[None]:
    """A supervised thread dies twice; the others judge and switch on."""
    with dying(rig, owner, method, 2):
        rig.await_cause("part_restarted")
        rig.await_bars(1, sure=True)
        yield


@contextlib.contextmanager
def reader_dies(rig: Rig) -> Iterator[None]:
    """The camera's driver raises something odd, twice."""
    with dying(rig, RawPipe, "read", 2):
        yield


@contextlib.contextmanager
def camera_unplugged(rig: Rig) -> Iterator[None]:
    """The FIFO's writer goes."""
    rig.grabber.unplugged.set()
    rig.await_cause("camera_lost")
    yield
    rig.grabber.unplugged.clear()


@contextlib.contextmanager
def broker_away(rig: Rig, *, kill: bool) -> Iterator[None]:
    """The broker's process goes and is started again after two bars."""
    rig.broker.stop(kill=kill)
    rig.await_cause("broker_lost")
    rig.await_bars(2, sure=True)
    yield
    rig.broker.start()


@contextlib.contextmanager
def broker_refuses(rig: Rig) -> Iterator[None]:
    """The broker comes back with another password for the station."""
    rig.broker.stop()
    rig.set_password("another")
    rig.broker.start()
    rig.await_cause("broker_refuses")
    rig.await_bars(2, sure=True)
    yield
    rig.broker.stop()
    rig.set_password("right")
    rig.broker.start()


@contextlib.contextmanager
def certificate_expired(rig: Rig) -> Iterator[None]:
    """The broker comes back with a certificate that has expired."""
    names = ("cert", "key")
    valid = {name: getattr(rig.certificates, name).read_bytes() for name in names}
    rig.broker.stop()
    for name in names:
        shutil.copyfile(getattr(rig.expired, name), getattr(rig.certificates, name))
    rig.broker.start()
    rig.await_cause("broker_untrusted")
    rig.await_bars(2, sure=True)
    yield
    rig.broker.stop()
    for name in names:
        getattr(rig.certificates, name).write_bytes(valid[name])
    rig.broker.start()


@contextlib.contextmanager
def relay_gone(rig: Rig) -> Iterator[None]:
    """The relay's port vanishes, and another board appears under the same name."""
    rig.pull_board()
    rig.await_cause("relay_lost")
    rig.await_bars(2, sure=True)
    yield
    rig.plug_board()


@contextlib.contextmanager
def disk_full(rig: Rig) -> Iterator[None]:
    """No file can grow, anywhere."""
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (rig.rng.randrange(1, 4096), hard))
    try:
        rig.await_cause("journal_lost")
        rig.await_bars(2, sure=True)
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


_LOCK = """
import sqlite3, sys
db = sqlite3.connect(sys.argv[1], isolation_level=None, timeout=20)
db.execute("BEGIN IMMEDIATE")
print("locked", flush=True)
sys.stdin.read()
"""

_DAMAGE = """
import os, random, sqlite3, sys
db = sqlite3.connect(sys.argv[1], isolation_level=None, timeout=20)
version = db.execute("PRAGMA user_version").fetchone()[0]
print("ready", flush=True)
sys.stdin.readline()
db.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
db.execute("BEGIN IMMEDIATE")
with open(sys.argv[1], "r+b") as file:
    file.seek(8192)
    file.write(random.Random(int(sys.argv[2])).randbytes(os.path.getsize(sys.argv[1]) - 8192))
db.execute(f"PRAGMA user_version = {version}")  # whoever has pages in memory reads them anew
db.execute("COMMIT")
os._exit(0)
"""


@contextlib.contextmanager
def journal_locked(rig: Rig) -> Iterator[None]:
    """Another process holds the file's lock for two bars, longer than the journal waits."""
    words = [sys.executable, "-c", _LOCK, str(rig.folder / "journal.sqlite")]
    with subprocess.Popen(words, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as holder:
        assert holder.stdout is not None and holder.stdin is not None
        holder.stdout.readline()
        rig.await_cause("journal_lost")
        rig.await_bars(2, sure=True)
        yield
        holder.stdin.close()


@contextlib.contextmanager
def record_refused(rig: Rig) -> Iterator[None]:
    """One window that no journal can take in, whatever the card."""
    chosen: list[Any] = []
    insert = Journal._insert

    def refusing(journal: Journal, db: Any, seq: int, entry: Any, stamp: Stamp) -> None:
        if not chosen and entry.kind == "window":
            chosen.append(entry)
        if chosen and entry is chosen[0]:
            raise OverflowError("was made to be refused")
        insert(journal, db, seq, entry, stamp)

    with mock.patch.object(Journal, "_insert", refusing):
        rig.await_cause("records_refused")
        rig.await_bars(2, sure=True)
        yield


@contextlib.contextmanager
def journal_damaged(rig: Rig) -> Iterator[None]:
    """The file's pages are overwritten under the station; the cause stays until somebody has looked.

    Between two bars, when nothing waits to be sent: what waits may be gone with the pages that held it.
    """
    words = [sys.executable, "-c", _DAMAGE, str(rig.folder / "journal.sqlite"), str(rig.rng.randrange(1000))]
    with subprocess.Popen(words, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as vandal:
        assert vandal.stdout is not None and vandal.stdin is not None
        vandal.stdout.readline()
        bars = len(rig.told)
        rig.await_(lambda: len(rig.told) > bars and not rig.missing(), "a bar to be delivered")
        vandal.stdin.write(b"now\n")
        vandal.stdin.close()
    rig.await_cause("journal_damaged")
    rig.await_bars(2, sure=True)
    yield


@contextlib.contextmanager
def clock_jumps(rig: Rig, seconds: float) -> Iterator[None]:
    """The wall clock is set; it is never set back."""
    JumpingClock.offset_s += seconds
    rig.await_bars(2, sure=True)
    yield


FAULTS: dict[str, Callable[[Rig], contextlib.AbstractContextManager[None]]] = {
    "journal's thread dies": lambda rig: thread_dies(rig, Journal, "append"),
    "pictures' thread dies": lambda rig: thread_dies(rig, PictureDesk, "_do"),
    "relay's thread dies": lambda rig: thread_dies(rig, RelayKeeper, "_bring"),
    "session's thread dies": lambda rig: thread_dies(rig, Link, "_send"),
    "seeing fails": lambda rig: thread_dies(rig, Sight, "look"),
    "camera's reader dies": reader_dies,
    "camera unplugged": camera_unplugged,
    "broker killed": lambda rig: broker_away(rig, kill=True),
    "broker restarted": lambda rig: broker_away(rig, kill=False),
    "broker refuses password": broker_refuses,
    "certificate expired": certificate_expired,
    "relay port gone": relay_gone,
    "disk full": disk_full,
    "journal locked": journal_locked,
    "clock a day ahead": lambda rig: clock_jumps(rig, 86400.0),
    "clock two days back": lambda rig: clock_jumps(rig, -172800.0),
    "record refused": record_refused,
    "journal damaged": journal_damaged,
}
"""Name -> what happens; inside, the fault lasts."""
LAST = ("record refused", "journal damaged")
"""These come last: from then on their causes are in force."""


def _pictures(seed: int) -> list[bytes]:
    """Twelve bars of straight streaks, none the same."""
    rng = np.random.default_rng(seed)
    pictures = []
    for _ in range(12):
        pictures += [quiet(rng).tobytes() for _ in range(PAUSE_FRAMES)]
        pictures += [sparks(rng).tobytes() for _ in range(CONTACT_FRAMES)]
    return pictures
