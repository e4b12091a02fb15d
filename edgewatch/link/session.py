"""The MQTT session: one thread that connects, sends the outbox and live messages, takes orders, and connects again.

paho-mqtt serves as the protocol only, one client object a connection: its own queue, its reconnecting and its thread
stay unused, because what it holds lives in RAM and dies with the process. Everything of paho runs in our one thread.
"""

from __future__ import annotations

import contextlib
import json
import random
import threading
import time
from collections import OrderedDict, deque
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.link.connection import Connection, ConnectionLostError
from edgewatch.link.secrets import make_tls, read_password
from edgewatch.link.sender import IN_FLIGHT, Outbox, Sender
from edgewatch.link.state import LinkState, from_error
from edgewatch.settings import MqttSettings, OrderSettings
from edgewatch.wire import messages
from edgewatch.wire.kinds import KINDS, STATES
from edgewatch.wire.messages import Stamp
from edgewatch.wire.orders import Order, Refusal, read_order
from edgewatch.wire.topics import Topics

FIRST_WAIT_S = 0.5
LONGEST_WAIT_S = 30.0
"""Back-off between attempts: doubled each time, up to half a minute, each multiplied by a random 0.5 to 1 so that a
works full of stations does not come back in step after a power cut."""
SETTLED_S = 10.0
"""A connection that lasted longer than this was a good one: the next wait is the first again."""
POLL_S = 0.1
"""Longest sleep in the loop; a new record or a packet ends it at once."""
LOOK_S = 1.0
"""The outbox is looked into this often even when nobody said that something was recorded."""
STUCK_S = 30.0
"""A broker that answers nothing for so long although messages wait for its answer is left and connected to anew."""
VIEWS = 4
"""Pictures held while they cannot be sent; the newest win."""


class Link:
    """The session of one station. ``start`` it, ``publish`` live messages, ``wake`` it after recording, ``stop`` it.

    ``outbox``: the journal; ``stamp``: time of a live message; ``on_order``: called with each order or refusal;
    ``on_state``: called with each change of state; ``on_fault``: with an exception that nobody expected, after which
    the session connects anew. They are called from the session's thread, must be short, and may not stop it: what they
    raise is caught and counted in ``callback_errors``. Paths in ``settings`` start at
    ``folder``. Raises ``SettingsError`` at once when password, certificates or key cannot be used.
    """

    def __init__(
        self,
        settings: MqttSettings,
        topics: Topics,
        outbox: Outbox,
        *,
        stamp: Callable[[], Stamp],
        version: str,
        on_order: Callable[[Order | Refusal], None] | None = None,
        on_state: Callable[[LinkState], None] | None = None,
        on_fault: Callable[[Exception], None] | None = None,
        orders: OrderSettings | None = None,
        folder: Path = Path(),
        jitter: random.Random | None = None,
    ) -> None:
        read_password(settings, folder)
        make_tls(settings, folder)
        self._settings = settings
        self._topics = topics
        self._outbox = outbox
        self._stamp = stamp
        self._version = version
        self._on_order = on_order
        self._on_state = on_state
        self._on_fault = on_fault
        self._orders = orders if orders is not None and orders.enabled else None
        self._folder = folder
        self._jitter = jitter or random.Random()
        self._sender = Sender(outbox)
        self._live: OrderedDict[str, bytes] = OrderedDict()
        self._views: deque[bytes] = deque(maxlen=VIEWS)
        self._lock = threading.Lock()
        self._stopping = threading.Event()
        self._flush_until_s = 0.0
        self._waker: Callable[[], None] | None = None
        self._thread: threading.Thread | None = None
        self._since_utc_s = stamp().utc_s
        self.state = LinkState(state="stopped")
        self.callback_errors = 0
        self.connections = 0
        self._attempts = 0
        self._late = self._earlier_run = 0
        self.heartbeat_s = time.monotonic()
        """Monotonic time of the loop's last turn: what a supervisor watches, rather than a flag."""

    # ------------------------------------------------------------------ from any thread

    def start(self) -> None:
        """Start the session's thread; it never gives up by itself. Raises ``ValueError`` when it runs already."""
        if self._thread is not None and self._thread.is_alive():
            raise ValueError("the session runs already")
        self._stopping.clear()
        self._attempts = 0
        self._late = 0
        self._earlier_run = self._newest()
        self._thread = threading.Thread(target=self._run, name="mqtt", daemon=True)
        self._thread.start()

    def alive(self) -> bool:
        """Whether the session's thread runs."""
        return self._thread is not None and self._thread.is_alive()

    def publish(self, kind: str, body: Mapping[str, Any]) -> None:
        """Send a live message (``summary``, ``view``): at once when connected, ahead of any backlog.

        Not connected: the newest summary and the last few views wait.
        """
        if KINDS[kind].journalled:
            raise ValueError(f"kind = {kind!r}: is journalled and goes through the outbox")
        payload = messages.encode(messages.finish(kind, body, self._stamp()))
        with self._lock:
            if kind == "view":
                self._views.append(payload)
            else:
                self._live[kind] = payload
        self._wake()

    def wake(self) -> None:
        """Say that something was recorded, so that it is sent at once."""
        self._sender.wake()
        self._wake()

    def stop(self, flush_s: float = 5.0) -> bool:
        """Send what waits for up to ``flush_s``, say that the station is offline, and end. True: all was delivered."""
        self._flush_until_s = time.monotonic() + flush_s
        self._stopping.set()
        self._wake()
        thread = self._thread
        if thread is not None:
            thread.join(flush_s + 15.0)  # connecting, which cannot be interrupted, is limited to 10 s
        return self._sender.idle

    def _wake(self) -> None:
        waker = self._waker
        if waker is not None:
            waker()

    # ------------------------------------------------------------------ the session's thread

    def _run(self) -> None:
        wait_s = FIRST_WAIT_S
        while not self._stopping.is_set():
            begun_s = time.monotonic()
            state = self._supervised()
            if self._stopping.is_set():
                break
            self._tell(state)
            if time.monotonic() - begun_s >= SETTLED_S:
                wait_s = FIRST_WAIT_S
            if state.reason == "taken_over":  # two stations of one name would throw each other out for ever
                wait_s = LONGEST_WAIT_S
            self._rest(wait_s * self._jitter.uniform(0.5, 1.0))
            wait_s = min(wait_s * 2, LONGEST_WAIT_S)
        self._tell(LinkState(state="stopped"))

    def _rest(self, seconds: float) -> None:
        until_s = time.monotonic() + seconds
        while not self._stopping.is_set() and time.monotonic() < until_s:
            self.heartbeat_s = time.monotonic()
            self._stopping.wait(min(1.0, max(0.0, until_s - time.monotonic())))

    def _supervised(self) -> LinkState:
        """One connection; a bug in here, or in the MQTT client, costs a connection and not the session."""
        try:
            return self._one_connection()
        except Exception as error:  # noqa: BLE001 - whatever it is, records wait in the outbox and must go out
            if self._on_fault is not None:
                self._guarded(self._on_fault, error)
            return LinkState(state="offline", reason="fault", detail=f"{type(error).__name__}: {error}"[:300])

    def _one_connection(self) -> LinkState:
        """Connect, serve until the connection ends, and return why it ended."""
        self._attempts += 1
        self._tell(LinkState(state="connecting"))
        connection: Connection | None = None
        try:
            connection = self._connected()
            self._serve(connection)
            return LinkState(state="stopped")
        except ConnectionLostError as error:
            return error.state
        except SettingsError as error:
            return LinkState(state="offline", reason="settings", detail=str(error))
        except (OSError, ValueError) as error:
            return from_error(error)
        finally:
            self._waker = None
            if connection is not None:
                connection.close()

    def _connected(self) -> Connection:
        will = messages.presence(online=False, version=self._version, since_utc_s=float("nan"), reason="lost")
        connection = Connection(
            self._settings,
            client_id=self._settings.client_id or self._topics.base.replace("/", "-"),
            password=read_password(self._settings, self._folder),
            tls=make_tls(self._settings, self._folder),
            will=(self._topics.topic("presence"), self._payload("presence", will)),
            on_message=self._incoming,
            on_answer=lambda mid: self._sender.answered(mid, time.monotonic()),
        )
        self._waker = connection.wake
        try:
            connection.open()
        except BaseException:
            connection.close()
            raise
        return connection

    def _serve(self, connection: Connection) -> None:
        # What an earlier run left is late, and all that waits when the first attempt failed or a connection was lost.
        self._late = self._earlier_run if self._attempts == 1 else max(self._late, self._newest())
        self._sender.begin(min(connection.most_in_flight, IN_FLIGHT), late=self._late)
        self.connections += 1
        self._say_presence(connection, online=True, reason="")
        if self._orders is not None:
            connection.subscribe(self._topics.orders)
        self._repeat_states(connection)
        self._tell(LinkState(state="online"))
        looked_s = time.monotonic()
        while not (self._stopping.is_set() and self._finished()):
            now_s = self.heartbeat_s = time.monotonic()
            if now_s - looked_s >= LOOK_S:
                looked_s = now_s
                self._sender.wake()
            self._send(connection, now_s)
            oldest_s = self._sender.oldest_unanswered_s
            if oldest_s is not None and now_s - oldest_s > STUCK_S:
                raise ConnectionLostError(LinkState(state="offline", reason="no_answer", detail="messages unanswered"))
            connection.turn(POLL_S)
        self._leave(connection)

    def _newest(self) -> int:
        try:
            return self._outbox.newest()
        except DeviceError:
            return 0  # told when the outbox is read next; windows then go as live ones do

    def _finished(self) -> bool:
        return time.monotonic() >= self._flush_until_s or (self._sender.idle and not self._live)

    def _leave(self, connection: Connection) -> None:
        """Say offline, wait a moment for the answer, and disconnect so that the will is not sent."""
        mid = self._say_presence(connection, online=False, reason="stopped")
        until_s = time.monotonic() + 1.0
        while mid in self._sender.unanswered and time.monotonic() < until_s:
            connection.turn(POLL_S)
        with contextlib.suppress(DeviceError):
            self._sender.flush(time.monotonic(), all_of_it=True)
        connection.leave()

    def _send(self, connection: Connection, now_s: float) -> None:
        """Send live messages, then as much of the outbox as may be on its way."""
        self._send_live(connection, now_s)
        try:
            while (item := self._sender.next()) is not None:
                if connection.too_large(item.payload):
                    raise ConnectionLostError(
                        LinkState(
                            state="offline",
                            reason="too_large",
                            detail=f"record {item.seq} has {len(item.payload)} bytes: raise the broker's limit",
                        )
                    )
                kind = KINDS[item.kind]
                retain = kind.retained and self._is_newest(item.kind, item.seq)
                mid = connection.publish(
                    self._topics.topic(item.kind), item.payload, qos=self._sender.qos(item), retain=retain
                )
                self._sender.sent(item, mid, now_s)
                if item.reply_topic:
                    copy = connection.publish(item.reply_topic, item.payload, qos=1, correlation=item.correlation)
                    self._sender.sent_other(copy, now_s)
            if self._sender.barrier_due(now_s):
                self._sender.sent_other(connection.barrier(f"{self._topics.base}/order"), now_s)
            self._sender.flush(now_s)
            if self.state.reason == "journal":
                self._tell(LinkState(state="online"))
        except DeviceError as error:  # the session and its live messages go on; the outbox is tried again
            self._tell(LinkState(state="online", reason="journal", detail=str(error)))

    def _send_live(self, connection: Connection, now_s: float) -> None:
        with self._lock:
            live = list(self._live.items())
            live += [("view", payload) for payload in self._views]
            self._live.clear()
            self._views.clear()
        for kind, payload in live:
            if connection.too_large(payload):
                continue
            qos = KINDS[kind].qos
            mid = connection.publish(self._topics.topic(kind), payload, qos=qos, retain=KINDS[kind].retained)
            if qos:
                self._sender.sent_other(mid, now_s)

    def _is_newest(self, kind: str, seq: int) -> bool:
        """Whether this is the state in force: an older one must not stay behind as the retained message."""
        latest = self._outbox.latest(kind)
        return latest is None or latest[0] <= seq

    def _say_presence(self, connection: Connection, *, online: bool, reason: str) -> int:
        since_utc_s = self._since_utc_s if online else self._stamp().utc_s
        body = messages.presence(online=online, version=self._version, since_utc_s=since_utc_s, reason=reason)
        mid = connection.publish(self._topics.topic("presence"), self._payload("presence", body), qos=1, retain=True)
        self._sender.sent_other(mid, time.monotonic())
        return mid

    def _repeat_states(self, connection: Connection) -> None:
        """Send the states in force anew: a broker without persistence has lost what it retained."""
        for kind in STATES:
            try:
                latest = self._outbox.latest(kind)
            except DeviceError:
                return  # told when the outbox is read next
            if latest is None:
                continue
            payload = messages.encode(messages.repeated(json.loads(latest[1])))
            mid = connection.publish(self._topics.topic(kind), payload, qos=1, retain=True)
            self._sender.sent_other(mid, time.monotonic())

    def _payload(self, kind: str, body: Mapping[str, Any]) -> bytes:
        return messages.encode(messages.finish(kind, body, self._stamp()))

    def _incoming(self, topic: str, payload: bytes, retained: bool, response_topic: str, correlation: bytes) -> None:
        if self._orders is None:
            return
        found = read_order(
            topic,
            payload,
            topics=self._topics,
            retained=retained,
            most_bytes=self._orders.most_bytes,
            response_topic=response_topic,
            correlation=correlation,
        )
        if found is not None and self._on_order is not None:
            self._guarded(self._on_order, found)

    def _tell(self, state: LinkState) -> None:
        if state != self.state:
            self.state = state
            if self._on_state is not None:
                self._guarded(self._on_state, state)

    def _guarded(self, callback: Callable[[Any], None], value: Any) -> None:
        try:
            callback(value)
        except Exception:  # noqa: BLE001 - whatever the station's code does wrong, the session goes on
            self.callback_errors += 1
