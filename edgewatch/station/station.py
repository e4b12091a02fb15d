"""The running station: wires source, monitor, journal, link, relay and pictures together, and decides nothing.

The judging runs in the caller's thread; each port has a supervised thread of its own, and talks to the judging through
one inbox. So a slow card, a silent broker or a dead relay never holds up a frame.
"""

from __future__ import annotations

import dataclasses
import queue
import random
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

from edgewatch import __version__
from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.reopen import open_lasting
from edgewatch.frames.values import Frame, Source
from edgewatch.judge.bands import Band
from edgewatch.link.session import Link
from edgewatch.link.state import LinkState
from edgewatch.monitor.effects import (
    Effect,
    KeepPicture,
    Publish,
    Record,
    Remember,
    SaveBand,
    SendView,
    SetRelay,
    Told,
)
from edgewatch.monitor.filling import Filling
from edgewatch.monitor.memory import KEYS, Memory, read_memory
from edgewatch.monitor.monitor import Monitor
from edgewatch.monitor.stop import StopState
from edgewatch.record.bandfiles import load_bands, save_band
from edgewatch.record.evidence import EvidenceStore
from edgewatch.record.journal import Entry, Journal
from edgewatch.relay.contact import ContactInput
from edgewatch.relay.keeper import RelayKeeper, RelayReport
from edgewatch.relay.port import open_relay
from edgewatch.settings import Settings
from edgewatch.sight.picture import reduce_picture
from edgewatch.station.clock import Clock
from edgewatch.station.pictures import PictureDesk
from edgewatch.station.recorder import Batch, Recorder
from edgewatch.station.supervise import Part
from edgewatch.station.teller import Teller
from edgewatch.station.watchdog import Watchdog
from edgewatch.wire import messages
from edgewatch.wire.orders import Order, OrderGate, Refusal
from edgewatch.wire.topics import Topics

TICK_S = 0.2
"""Time between ticks of the monitor (s)."""
READ_S = 0.1
"""Longest wait for a frame before orders and ticks get their turn (s)."""
BACKLOG_S = 2.0
"""The outbox is counted this often (s)."""
FLUSH_S = 10.0
"""Longest wait for the journal and the pictures at the end (s)."""
NOTICE_APART_S = 60.0
"""A part that fails again and again is told of this often (s)."""
MOST_DETAIL = 300
"""Characters of a refused record in the condition; the notice has more."""
STEADY_S = 600.0
"""After so long without a fault the station is good again (s)."""
MOST_FAULTS = 20
"""So many faults of the seeing in a row, and the station ends and is started anew from outside."""

Input = Callable[[Monitor, messages.Stamp], list[Effect]]
"""Something that happened, as a call on the monitor."""


@dataclasses.dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What a run came to. ``unsent``: messages that still wait in the outbox; ``pictures``: evidence stored."""

    frames: int
    skipped: int
    unsent: int
    pictures: int
    faults: int


class Station:
    """One station. Build it, ``run`` it; ``request_stop`` from anywhere, also from a signal handler.

    ``folder``: where relative paths of the settings start. ``live``: sources that can be either run at their own pace
    and the newest frame wins; without it they wait for the judging. ``paced``: a clip is played at its own frame rate.
    ``named``: grade named on the command line. ``on_told``: called with one line a bar; it may block, and what it
    raises ends the run.

    Raises ``SettingsError`` and ``DeviceError`` when something needed from the start is wrong or not there.
    """

    def __init__(
        self,
        settings: Settings,
        folder: Path,
        *,
        live: bool = True,
        paced: bool = False,
        named: str | None = None,
        on_told: Callable[[Mapping[str, Any]], None] = lambda line: None,
        on_notice: Callable[[str], None] = lambda text: None,
    ) -> None:
        self._live, self._paced = live, paced
        self._folder = folder
        self._on_notice = on_notice
        self._teller = Teller(on_told, on_failure=self.request_stop)
        self._stopping = threading.Event()
        self._inbox: queue.SimpleQueue[Input] = queue.SimpleQueue()
        self._clock = Clock()
        self._frames = self._skipped = self._faults = self._faults_in_a_row = 0
        self._parts: list[Part] = []
        self._fault_s: dict[str, float] = {}
        self._deviations: tuple[str, ...] = ()
        self._link: Link | None = None
        self._relay: RelayKeeper | None = None
        self._waits_for_us = False
        self._unreadable: list[str] = []
        bands = load_bands(folder / settings.judge.bands, on_problem=self._unreadable.append)
        self._source = self._open(settings)
        try:
            self._settings = self._fitted(settings)
            self._open_ports(bands, named)
        except BaseException:
            self._source.close()
            raise

    # ------------------------------------------------------------------ building

    def _open(self, settings: Settings) -> Source:
        """Open the source; live ones come back when lost, and the newest frame wins."""
        return open_lasting(
            settings.source.uri,
            settings,
            clock=time.monotonic,
            chance=random.random,
            live=self._live,
            patient=settings.mqtt.enabled,  # where nobody can be told that the camera is missing, the start fails
        )

    def _fitted(self, settings: Settings) -> Settings:
        """Settings with the picture size that the source really has: a clip brings its own."""
        info = self._source.info
        if info.live:
            return settings
        source = dataclasses.replace(settings.source, width_px=info.width_px, height_px=info.height_px)
        return dataclasses.replace(settings, source=source)

    def _open_ports(self, bands: Mapping[str, Band], named: str | None) -> None:
        settings, folder = self._settings, self._folder
        self._waits_for_us = not self._source.info.live
        self._journal = Journal(
            folder / settings.journal.file,
            most_mb=settings.journal.most_mb,
            thin_windows_mb=settings.journal.thin_windows_mb,
            keep_damaged=settings.journal.keep_damaged,
            on_set_aside=self._set_aside,
            patient=settings.mqtt.enabled,  # where somebody can be told, judging begins on a full disk too
        )
        memory = self._read_memory()
        self.monitor = Monitor(settings, bands=bands, memory=memory, named=named, live=self._source.info.live)
        self._gate = OrderGate(
            most_per_minute=settings.orders.most_per_minute,
            oldest_s=settings.orders.oldest_s,
            seen=memory.orders,
            monotonic_s=time.monotonic(),
        )
        self._recorder = Recorder(
            self._journal, on_state=self._journal_state, on_written=self._written, on_refused=self._refused
        )
        self._add("journal", self._recorder.work)
        self._add("backlog", self._count_backlog)
        store = None
        if settings.evidence.folder:
            store = EvidenceStore(folder / settings.evidence.folder, most_mb=settings.evidence.most_mb)
        if settings.mqtt.enabled:
            self._link = Link(
                settings.mqtt,
                Topics.of(settings.station),
                self._journal,
                stamp=self._clock.now,
                version=__version__,
                on_order=self._order,
                on_state=self._link_state,
                on_fault=lambda error: self._part_fault("mqtt", error),
                orders=settings.orders,
                folder=folder,
            )
        self._pictures = PictureDesk(
            settings.sight_optics(),
            store=store,
            publish=self._link.publish if self._link else None,
            on_state=lambda trouble: self._tell({"evidence_lost": bool(trouble)}, trouble),
        )
        self._add("pictures", self._pictures.work)
        self._add("told", self._teller.work)
        if settings.relay.kind != "none":
            self._relay = RelayKeeper(lambda: open_relay(settings.relay), self._relay_report, chance=random.random)
            self._add("relay", self._relay.run)
        if settings.contact.port:
            self._add("contact input", ContactInput(settings.contact, self._bar_at_wheel).run)
        self._filling = Filling()
        self._watchdog = Watchdog()

    def _read_memory(self) -> Memory:
        """What the last run remembered; where that cannot be read, the safe reading of the latch is "stopped"."""
        try:
            return read_memory({key: self._journal.state(key) for key in KEYS})
        except DeviceError as error:
            self._tell({"journal_lost": True}, str(error))
            return Memory(stop=StopState.LATCHED, stop_reason="it is not known whether the line was stopped")

    def _add(self, name: str, work: Callable[[threading.Event], None]) -> None:
        self._parts.append(Part(name, work, on_fault=self._part_fault))

    @property
    def source(self) -> Source:
        """Where the pictures come from."""
        return self._source

    # ------------------------------------------------------------------ running

    def request_stop(self) -> None:
        """End soon: the frame under way is judged, the contact closed, everything recorded and flushed."""
        self._stopping.set()

    def run(self) -> Outcome:
        """Run until stopped or until the source ends. Raises ``DeviceError`` when a clip cannot be read on."""
        for part in self._parts:
            part.start()
        if self._link is not None:
            self._link.start()
        for problem in self._unreadable:
            self._on_notice(problem)
        try:
            self._carry_out(self.monitor.begin(self._clock.now()))
            self._tell({"band_unreadable": bool(self._unreadable)}, "; ".join(self._unreadable)[:300])
            self._check_deviations()
            self._watchdog.ready()
            self._judge()
            self._take_inbox()
            self._carry_out(self.monitor.end(self._clock.now()))
        finally:
            self._close()
        if self._teller.failure is not None:
            raise self._teller.failure
        return Outcome(
            frames=self._frames,
            skipped=self._skipped,
            unsent=self._unsent_at_end,
            pictures=self._pictures.kept,
            faults=self._faults,
        )

    def _judge(self) -> None:
        """The judging loop."""
        tick_s = last_frame_s = time.monotonic()
        first_s: float | None = None
        while not self._stopping.is_set():
            self._take_inbox()
            now_s = time.monotonic()
            if now_s - tick_s >= TICK_S:
                tick_s = now_s
                self._tick()
                self._watchdog.progress(self.monitor.status)
            frame = self._next_frame()
            if frame is None:
                if self._ended:
                    return
                continue
            last_frame_s = time.monotonic()
            if self._paced and self._waits_for_us:
                first_s = last_frame_s - frame.t_s if first_s is None else first_s
                self._stopping.wait(max(0.0, first_s + frame.t_s - last_frame_s))
            self._see(frame)

    _ended = False

    def _next_frame(self) -> Frame | None:
        """Read a frame; ``None`` if none is there now, or, with ``_ended``, at the end."""
        try:
            frame = self._source.read(READ_S)
        except StalledError:
            return None  # the monitor's ticks tell when that has lasted too long
        except DeviceError as error:
            if self._waits_for_us:
                raise
            self._complain({"camera_lost": True}, str(error))
            self._stopping.wait(READ_S)
            return None
        if frame is None:
            self._ended = True
            return None
        self._complain({"camera_lost": False})
        return frame

    def _see(self, frame: Frame) -> None:
        self._frames += 1
        self._skipped += frame.skipped
        source = self._settings.source
        stamp = self._clock.now()
        try:
            if source.region_px or source.binning > 1:
                region = source.region_px or None
                frame = dataclasses.replace(frame, picture=reduce_picture(frame.picture, region, source.binning))
            effects = self.monitor.see(frame, stamp)
            self._faults_in_a_row = 0
        except Exception as error:
            self._faults += 1
            self._faults_in_a_row += 1
            if self._faults_in_a_row >= MOST_FAULTS:
                raise
            self.monitor.reset_sight()
            self._part_fault("judging", error)
            return
        self._carry_out(effects, stamp)
        self._watchdog.progress(self.monitor.status)

    def _check_deviations(self) -> None:
        """What the camera took otherwise than asked, also after it was opened anew."""
        deviations = self._source.info.deviations
        if deviations == self._deviations:
            return
        self._deviations = deviations
        for deviation in deviations:
            self._on_notice(deviation)
        wrong = [one for one in deviations if one.startswith(("exposure", "automatic exposure"))]
        self._complain({"wrong_exposure": bool(wrong)}, "; ".join(wrong)[:300])

    def _tick(self) -> None:
        self._check_deviations()
        stamp = self._clock.now()
        unsent, thinned, filling = self._backlog
        if self._fault_s and stamp.monotonic_s - max(list(self._fault_s.values())) >= STEADY_S:
            self._fault_s.clear()
            self._complain({"part_restarted": False})
        self._carry_out(self.monitor.tick(stamp, unsent=unsent, thinned=thinned, filling=filling), stamp)

    def _take_inbox(self) -> None:
        while True:
            try:
                happened = self._inbox.get_nowait()
            except queue.Empty:
                return
            stamp = self._clock.now()
            self._carry_out(happened(self.monitor, stamp), stamp)

    def _complain(self, causes: Mapping[str, bool], detail: str = "") -> None:
        """From the judging thread."""
        stamp = self._clock.now()
        self._carry_out(self.monitor.complain(causes, stamp, detail=detail), stamp)

    def _tell(self, causes: Mapping[str, bool], detail: str = "") -> None:
        """From any thread."""
        self._inbox.put(lambda monitor, stamp: monitor.complain(causes, stamp, detail=detail))

    # ------------------------------------------------------------------ carrying out

    def _carry_out(self, effects: Sequence[Effect], stamp: messages.Stamp | None = None) -> None:
        """Do what the monitor wants: the relay first, records and what belongs to them in one batch."""
        entries: list[Entry] = []
        state: dict[str, Any] = {}
        for effect in effects:
            if isinstance(effect, SetRelay) and self._relay is not None:
                self._relay.set(effect.stop, effect.reason)
        for effect in effects:
            if isinstance(effect, Record):
                entries.append(
                    Entry(
                        kind=effect.kind,
                        body=effect.payload,
                        reply_topic=effect.reply_topic,
                        correlation=effect.correlation,
                    )
                )
            elif isinstance(effect, Remember):
                state.update(effect.values)
            elif isinstance(effect, Publish):
                if self._link is not None:
                    self._link.publish(effect.kind, effect.payload)
            elif isinstance(effect, (KeepPicture, SendView)):
                self._pictures.put(effect)
            elif isinstance(effect, SaveBand):
                self._save_band(effect)
            elif isinstance(effect, Told):
                self._teller.put(effect.line, wait=self._waits_for_us and not self._paced)
        if entries or state:
            batch = Batch(entries=tuple(entries), state=state, stamp=stamp or self._clock.now())
            if self._waits_for_us and not self._paced:
                self._recorder.put_when_room(batch)
            else:
                self._recorder.put(batch)

    def _save_band(self, effect: SaveBand) -> None:
        folder = self._folder / self._settings.judge.bands
        try:
            save_band(folder / f"{effect.band.grade}.toml", effect.band)
        except DeviceError as error:
            self._on_notice(str(error))

    # ------------------------------------------------------------------ what the ports tell, each from its own thread

    def _order(self, found: Order | Refusal) -> None:
        def admit(monitor: Monitor, stamp: messages.Stamp) -> list[Effect]:
            admitted = self._gate.admit(found, utc_s=stamp.utc_s, monotonic_s=stamp.monotonic_s)
            return monitor.order(admitted, stamp, seen=self._gate.remembered())

        self._inbox.put(admit)

    def _link_state(self, state: LinkState) -> None:
        if state.state in ("connecting", "stopped"):
            return  # on the way: nothing is known yet
        refused = state.reason in ("wrong_password", "not_authorised", "rejected", "settings", "taken_over")
        untrusted = state.reason.startswith(("certificate_", "tls_"))
        lost = state.state == "offline" and not refused and not untrusted
        detail = f"{state.reason}: {state.detail}" if state.reason else ""
        self._tell({"broker_lost": lost, "broker_refuses": refused, "broker_untrusted": untrusted}, detail)

    def _bar_at_wheel(self, closed: bool) -> None:
        self._inbox.put(lambda monitor, stamp: monitor.bar_at_wheel(closed, stamp))

    def _relay_report(self, report: RelayReport) -> None:
        self._inbox.put(
            lambda monitor, stamp: monitor.relay_report(
                stop=report.stop, reason=report.reason, read_back=report.read_back, error=report.error, stamp=stamp
            )
        )

    def _journal_state(self, error: DeviceError | None, shed: int) -> None:
        self._tell({"journal_lost": error is not None, "records_shed": shed > 0}, str(error or f"{shed} records"))

    def _refused(self, what: str) -> None:
        count, told = self._recorder.refused, what[:MOST_DETAIL]

        def complain(monitor: Monitor, stamp: messages.Stamp) -> list[Effect]:
            ended = monitor.complain({"records_refused": False}, stamp)  # each one is an alert of its own
            return ended + monitor.complain({"records_refused": True}, stamp, detail=f"{count} so far; {told}")

        self._inbox.put(complain)
        self._on_notice(f"journal: cannot be recorded, left out: {what}")

    def _written(self) -> None:
        if self._link is not None:
            self._link.wake()

    def _set_aside(self, path: Path, reason: str) -> None:
        said = f"{path.name}: {reason}"

        def complain(monitor: Monitor, stamp: messages.Stamp) -> list[Effect]:
            ended = monitor.complain({"journal_damaged": False}, stamp)  # each damaged file is an alert of its own
            return ended + monitor.complain({"journal_damaged": True}, stamp, detail=said) + monitor.remember()

        self._inbox.put(complain)
        self._on_notice(f"journal: set aside as {said}")

    def _records_aside(self, files: int, size: int) -> None:
        """So many files hold undelivered records and have no bound: each is the only copy; whoever looks must know."""
        detail = f"{files} file{'s' if files > 1 else ''}, {size / 1e6:.1f} MB"

        def complain(monitor: Monitor, stamp: messages.Stamp) -> list[Effect]:
            ended = monitor.complain({"records_aside": False}, stamp)  # another number is an alert of its own
            return ended + (monitor.complain({"records_aside": True}, stamp, detail=detail) if files else [])

        self._inbox.put(complain)

    def _part_fault(self, name: str, error: BaseException) -> None:
        what = " ".join(f"{name}: {type(error).__name__}: {error}".split())[:300]
        self._tell({"part_restarted": True}, what)
        now_s = time.monotonic()
        if now_s - self._fault_s.get(name, float("-inf")) >= NOTICE_APART_S:
            self._on_notice(f"{what}; it goes on")
        self._fault_s[name] = now_s

    def _count_backlog(self, stop: threading.Event) -> None:
        """Unsent and thinned messages, whether they fill the journal, and what lies beside it; the work of a supervised
        thread.

        Not of the judging: the journal may be busy with a slow card, or be locked by another process for a second.
        """
        aside = (0, 0)
        while not stop.is_set():
            try:
                status = self._journal.status()
                filling = self._filling.update(
                    time.monotonic(),
                    unsent=status.unsent,
                    used_bytes=status.unsent_room_bytes,
                    room_bytes=status.room_bytes,
                )
                self._backlog = (status.unsent, status.windows_thinned, filling)
                if (status.aside, status.aside_bytes) != aside:
                    aside = status.aside, status.aside_bytes
                    self._records_aside(*aside)
            except DeviceError:
                pass  # the recorder tells of it
            stop.wait(BACKLOG_S)

    _backlog = (0, 0, "")

    # ------------------------------------------------------------------ the end

    _unsent_at_end = 0

    def _close(self) -> None:
        """Flush and end every part; what cannot be flushed in time stays in the journal's outbox."""
        self._watchdog.stopping()
        self._source.close()
        if not self._recorder.flush(FLUSH_S):
            self._on_notice(f"journal: {self._recorder.waiting} records could not be written before the end")
        self._pictures.flush(FLUSH_S)
        self._teller.flush(None if self._waits_for_us else FLUSH_S)
        if self._link is not None:
            self._link.wake()
            self._link.stop(FLUSH_S if self._link.state.state == "online" else 1.0)
        for part in self._parts:
            part.stop(FLUSH_S)
        try:
            self._unsent_at_end = self._journal.status().unsent
        except DeviceError as error:
            self._on_notice(str(error))
        self._journal.close()
