"""One MQTT connection, driven from one thread: connect, turn, publish, close. The only module that uses paho-mqtt.

paho's external-loop interface is used (``loop_read``, ``loop_write``, ``loop_misc``), with our own ``select`` and our
own wake-up. No callback here may raise: each only notes what happened, and ``turn`` raises from the note.
"""

from __future__ import annotations

import contextlib
import select
import socket
import ssl
import time
from collections import deque
from collections.abc import Callable
from typing import Any, cast

import paho.mqtt.client as paho
from paho.mqtt.enums import CallbackAPIVersion, MQTTErrorCode
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.subscribeoptions import SubscribeOptions

from edgewatch.link.state import LinkState, from_reason_code
from edgewatch.settings import MqttSettings

CONNECT_S = 5.0
"""Longest wait for the TCP connection and for the broker's answer to CONNECT."""
MOST_INCOMING_BYTES = 1_000_000
"""Told to an MQTT 5 broker: it then never hands us more, whatever somebody publishes."""
HEADER_BYTES = 16
"""Of a PUBLISH besides topic, properties and payload, at most."""
KEEP_ALIVE_TIMEOUT = 0x8D
FAILURE = 0x80
"""MQTT 5 section 2.4: reason codes from here on mean failure."""

OnMessage = Callable[[str, bytes, bool, str, bytes], None]


def _properties(packet: int) -> Any:
    return Properties(packet)  # type: ignore[no-untyped-call]


class ConnectionLostError(Exception):
    """The connection is over; ``state`` says why."""

    def __init__(self, state: LinkState) -> None:
        super().__init__(f"{state.reason}: {state.detail}")
        self.state = state


class Connection:
    """One connection to the broker. Only ``wake`` may be called from another thread.

    ``on_message(topic, payload, retained, response_topic, correlation)``; ``on_answer(packet identifier)`` when the
    broker has answered a QoS 1 message or a barrier.
    """

    def __init__(
        self,
        settings: MqttSettings,
        *,
        client_id: str,
        password: str | None,
        tls: ssl.SSLContext | None,
        will: tuple[str, bytes] | None,
        on_message: OnMessage,
        on_answer: Callable[[int], Any],
    ) -> None:
        self._settings = settings
        self._five = settings.version == "5"
        self._on_message = on_message
        self._on_answer = on_answer
        self._up = False
        self._over: LinkState | None = None
        self._messages: deque[paho.MQTTMessage] = deque()
        self._answers: deque[int] = deque()
        self._most_bytes = 268_435_455  # MQTT section 2.2.3: the largest remaining length
        self.most_in_flight = 65535
        self._waker, self._sleeper = socket.socketpair()
        self._waker.setblocking(False)
        self._sleeper.setblocking(False)
        client = self._client = paho.Client(
            CallbackAPIVersion.VERSION2,
            client_id=client_id,
            clean_session=None if self._five else True,
            protocol=paho.MQTTv5 if self._five else paho.MQTTv311,
            reconnect_on_failure=False,
        )
        client.connect_timeout = CONNECT_S
        client.max_inflight_messages_set(0)  # our own limit holds; paho must neither hold back nor reorder
        if settings.user or password is not None:
            client.username_pw_set(settings.user, password)
        if tls is not None:
            client.tls_set_context(tls)
        if will is not None:
            client.will_set(will[0], will[1], qos=1, retain=True)
        client.on_connect = self._connected
        client.on_disconnect = self._disconnected
        client.on_message = self._arrived
        client.on_publish = self._published
        client.on_unsubscribe = self._unsubscribed
        client.on_subscribe = self._subscribed

    # ------------------------------------------------------------------ callbacks of paho: note, never raise

    def _connected(self, client: Any, data: Any, flags: Any, code: Any, properties: Any) -> None:
        if code.value >= FAILURE:
            self._over = from_reason_code(code.value, str(code))
            return
        self.most_in_flight = int(getattr(properties, "ReceiveMaximum", 65535))
        self._most_bytes = int(getattr(properties, "MaximumPacketSize", self._most_bytes))
        self._up = True

    def _disconnected(self, client: Any, data: Any, flags: Any, code: Any, properties: Any) -> None:
        if self._over is not None:
            return
        said = bool(getattr(flags, "is_disconnect_packet_from_server", False)) and code.value >= FAILURE
        if said or code.value == KEEP_ALIVE_TIMEOUT:  # the latter is paho's own finding: no answer to its PINGREQ
            self._over = from_reason_code(code.value, str(code))
        else:
            self._over = LinkState(state="offline", reason="closed", detail="the connection was closed")

    def _arrived(self, client: Any, data: Any, message: paho.MQTTMessage) -> None:
        self._messages.append(message)

    def _published(self, client: Any, data: Any, mid: int, code: Any, properties: Any) -> None:
        if code is not None and code.value >= FAILURE:
            self._over = self._over or from_reason_code(code.value, f"a message was refused: {code}")
        else:
            self._answers.append(mid)

    def _unsubscribed(self, client: Any, data: Any, mid: int, codes: Any, properties: Any) -> None:
        self._answers.append(mid)

    def _subscribed(self, client: Any, data: Any, mid: int, codes: Any, properties: Any) -> None:
        refused = [code for code in codes or () if code.value >= FAILURE]
        if refused:
            self._over = self._over or from_reason_code(refused[0].value, f"taking orders was refused: {refused[0]}")

    # ------------------------------------------------------------------ the one thread

    def open(self) -> None:
        """Connect and wait for the broker's answer.

        Raises ``OSError`` (TLS errors are), ``ValueError``, ``ConnectionLostError``.
        """
        properties = None
        if self._five:
            properties = _properties(PacketTypes.CONNECT)
            properties.MaximumPacketSize = MOST_INCOMING_BYTES
        rc = self._client.connect(
            self._settings.host,
            self._settings.port,
            keepalive=self._settings.keepalive_s,
            clean_start=True if self._five else paho.MQTT_CLEAN_START_FIRST_ONLY,
            properties=properties,
        )
        if rc != MQTTErrorCode.MQTT_ERR_SUCCESS:
            raise OSError(paho.error_string(rc))
        sock = self._socket()
        if sock is not None:  # a message is small and must not wait for the answer to the one before (Nagle)
            sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        until_s = time.monotonic() + CONNECT_S
        while not self._up:
            self.turn(0.1)
            if time.monotonic() > until_s:
                raise ConnectionLostError(LinkState(state="offline", reason="no_answer", detail="no CONNACK in time"))

    def turn(self, timeout_s: float) -> None:
        """Wait for the socket or a ``wake`` for up to ``timeout_s``, work off what came, report what was answered.

        Raises ``ConnectionLostError``.
        """
        client, sock = self._client, self._socket()
        if sock is None or self._over is not None:
            raise self._lost()
        writers = [sock] if client.want_write() else []
        try:
            ready, writable, _ = select.select([sock, self._sleeper], writers, [], timeout_s)
            if self._sleeper in ready:
                with contextlib.suppress(BlockingIOError):
                    self._sleeper.recv(4096)
            if writable:
                client.loop_write()
            if sock in ready:
                client.loop_read()
                while isinstance(sock, ssl.SSLSocket) and self._socket() is sock and sock.pending():
                    client.loop_read()  # TLS has decoded more than one read took: select would not tell
            client.loop_misc()
        except (OSError, ValueError) as error:  # ValueError: the descriptor is closed
            self._over = self._over or LinkState(state="offline", reason="closed", detail=str(error))
        while self._answers:
            self._on_answer(self._answers.popleft())
        while self._messages:
            self._hand_on(self._messages.popleft())
        if self._over is not None or self._socket() is None:
            raise self._lost()

    def _socket(self) -> socket.socket | None:
        return cast("socket.socket | None", self._client.socket())

    def _lost(self) -> ConnectionLostError:
        return ConnectionLostError(self._over or LinkState(state="offline", reason="closed", detail="no socket"))

    def _hand_on(self, message: paho.MQTTMessage) -> None:
        properties = message.properties
        response_topic = str(getattr(properties, "ResponseTopic", "") or "")
        correlation = bytes(getattr(properties, "CorrelationData", b"") or b"")
        try:
            topic = message.topic
        except UnicodeDecodeError:
            return
        self._on_message(topic, bytes(message.payload), bool(message.retain), response_topic, correlation)

    def publish(self, topic: str, payload: bytes, *, qos: int, retain: bool = False, correlation: bytes = b"") -> int:
        """Send one message and return its packet identifier. Raises ``ConnectionLostError``."""
        properties = None
        if self._five:
            properties = _properties(PacketTypes.PUBLISH)
            properties.PayloadFormatIndicator = 1  # UTF-8
            properties.ContentType = "application/json"
            if correlation:
                properties.CorrelationData = correlation
        info = self._client.publish(topic, payload, qos=qos, retain=retain, properties=properties)
        self._check(info.rc)
        return int(info.mid)

    def barrier(self, topic: str) -> int:
        """Ask for something that changes nothing and is answered in order: end a subscription that does not exist."""
        rc, mid = self._client.unsubscribe(topic)
        self._check(rc)
        return int(mid or 0)

    def subscribe(self, topic: str) -> None:
        """Take messages at QoS 1; retained ones too, marked as such, so that they are refused and answered."""
        if self._five:
            rc, _ = self._client.subscribe(topic, options=SubscribeOptions(qos=1, retainAsPublished=True))
        else:
            rc, _ = self._client.subscribe(topic, qos=1)
        self._check(rc)

    def _check(self, rc: int) -> None:
        if rc != MQTTErrorCode.MQTT_ERR_SUCCESS:
            self._over = self._over or LinkState(state="offline", reason="closed", detail=paho.error_string(rc))
            raise self._lost()

    def too_large(self, payload: bytes) -> bool:
        """Whether the broker has said that it takes no packet as large as this."""
        return len(payload) + HEADER_BYTES + 512 > self._most_bytes

    def wake(self) -> None:
        """End the wait in ``turn``; from any thread."""
        with contextlib.suppress(OSError):
            self._waker.send(b"w")

    def leave(self) -> None:
        """Disconnect in order: the broker then does not send the will."""
        with contextlib.suppress(OSError, ValueError):
            self._client.disconnect()
            until_s = time.monotonic() + 1.0
            while self._client.want_write() and (sock := self._socket()) and time.monotonic() < until_s:
                select.select([], [sock], [], 0.1)
                self._client.loop_write()

    def close(self) -> None:
        """Close the sockets at once; a second call does nothing."""
        sock = self._socket()
        if sock is not None:
            with contextlib.suppress(OSError):
                sock.close()
        self._waker.close()
        self._sleeper.close()
