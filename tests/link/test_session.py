"""The MQTT session against a real Mosquitto, with ``mosquitto_sub`` as the independent reader."""

from __future__ import annotations

import base64
import contextlib
import json
import socket
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.link.session import Link
from edgewatch.link.state import REASONS, STATES, LinkState
from edgewatch.record.journal import Entry, Journal
from edgewatch.settings import MqttSettings, OrderSettings, StationSettings
from edgewatch.wire import messages
from edgewatch.wire.kinds import KINDS
from edgewatch.wire.orders import Order, Refusal, answer
from edgewatch.wire.times import write_time
from edgewatch.wire.topics import Topics
from tests.brokers import Broker, Reader, make_certificates, running, wait_until
from tests.record.entries import alert, bar, condition, figures, stamp, window
from tests.wire.schemas import check_message

TOPICS = Topics.of(StationSettings(site="hollowmere", line="peel-2", name="wheel-a"))
VERSIONS = ("5", "3.1.1")


class Station:
    """A journal and a session on it, with what the session told."""

    def __init__(self, place: Path, port: int, **options: Any) -> None:
        self.journal = Journal(place / "station.sqlite")
        self.states: list[LinkState] = []
        self._waited = 0
        self.orders: list[Order | Refusal] = []
        settings = {"enabled": True, "host": "127.0.0.1", "port": port, "keepalive_s": 5, **options.pop("mqtt", {})}
        self.link = Link(
            MqttSettings(**settings),
            TOPICS,
            self.journal,
            stamp=stamp,
            version="0.1.0",
            on_state=self.states.append,
            on_order=options.pop("on_order", self.orders.append),
            **options,
        )

    def record(self, *entries: Entry) -> tuple[int, ...]:
        """Record and wake the session."""
        seqs = self.journal.append(entries, stamp=stamp())
        self.link.wake()
        return seqs

    def online(self) -> Station:
        """Start, and wait for the broker."""
        self.link.start()
        self.wait("online")
        return self

    def wait(self, state: str, reason: str = "") -> None:
        """Wait for a state that was told since the last one waited for; it may be over by now."""

        def told() -> bool:
            for place in range(self._waited, len(self.states)):
                if (self.states[place].state, self.states[place].reason) == (state, reason):
                    self._waited = place + 1
                    return True
            return False

        wait_until(told, f"{state} {reason}")

    def emptied(self) -> None:
        """Wait until the outbox is empty."""
        wait_until(lambda: self.journal.status().unsent == 0, "the outbox is empty")

    def close(self) -> None:
        """Stop both."""
        self.link.stop(0.5)
        self.journal.close()


Make = Callable[..., Station]


@pytest.fixture
def make_station(tmp_path: Path) -> Iterator[Make]:
    """Make stations that are closed at the end."""
    made: list[Station] = []

    def make(port: int, **options: Any) -> Station:
        folder = tmp_path / f"station-{len(made)}"
        folder.mkdir(exist_ok=True)
        made.append(Station(folder, port, **options))
        return made[-1]

    yield make
    for station in made:
        station.close()


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Broker]:
    """A broker without passwords."""
    with running(Broker(tmp_path / "broker")) as made:
        yield made


@pytest.fixture
def reader(broker: Broker) -> Iterator[Reader]:
    """The independent reader, subscribed."""
    made = Reader(broker).ready(broker)
    yield made
    made.stop()


def _order(order_id: str, **content: Any) -> str:
    return json.dumps({"id": order_id, "sent": write_time(time.time()), "who": "desk", **content})


@pytest.mark.parametrize("version", VERSIONS)
def test_every_kind_arrives_valid_with_its_qos(broker: Broker, reader: Reader, make_station: Make, version: str):
    """All kinds, through outbox or live, as another program sees them; in order, each number once."""
    station = make_station(broker.port, mqtt={"version": version}).online()
    station.record(
        condition(),
        Entry(kind="expected", body=messages.expected(grade="C45", heat="H-1")),
        window(),
        bar(),
        alert("eine Stange weicht ab: Ø 30 mm"),
        Entry(
            kind="relay",
            body=messages.relay(wanted="stop", energised=False, read_back="stop", reason="bar", latched=True),
        ),
        Entry(kind="thinned", body=messages.thinned(count=1, first_seq=1, last_seq=1, keep_every=1, total=1)),
        Entry(kind="order", body=messages.reply(order="view", accepted=True)),
    )
    station.link.publish(
        "summary",
        messages.summary(
            condition="good",
            expected="C45",
            since_utc_s=1.0,
            conforming=1,
            nonconforming=0,
            inconclusive=0,
            values=figures(),
        ),
    )
    jpeg = b"\xff\xd8\xff" + bytes(range(256))
    station.link.publish("view", messages.view(jpeg=jpeg, width_px=1, height_px=1, frame=0))
    station.emptied()
    wait_until(lambda: len(reader.seqs()) == 8 and reader.on("view") and reader.on("summary"), "all arrived")
    assert reader.seqs() == list(range(1, 9))
    for message in reader.seen:
        check_message(message.topic, message.payload)
        kind = next(kind for kind in KINDS.values() if message.topic == f"{TOPICS.base}/{kind.leaf}")
        assert message.qos == kind.qos
    assert {message.topic.rsplit("/", 1)[1] for message in reader.seen} == {kind.leaf for kind in KINDS.values()}
    assert base64.b64decode(reader.on("view")[0].payload["jpeg_base64"]) == jpeg
    assert "Ø" in reader.on("alert")[0].raw


def test_states_are_retained_and_events_are_not(broker: Broker, make_station: Make):
    """Who comes later sees presence, condition, expected, summary, and no old bar."""
    station = make_station(broker.port).online()
    station.record(condition("failure"), condition(), bar(), alert(), window())
    body = messages.summary(
        condition="good", expected="", since_utc_s=1.0, conforming=0, nonconforming=0, inconclusive=0
    )
    station.link.publish("summary", body)
    station.emptied()
    late = Reader(broker)
    wait_until(lambda: len(late.seen) >= 3, "retained messages")
    late.ready(broker)
    late.stop()
    assert {message.topic.rsplit("/", 1)[1] for message in late.seen} == {"presence", "condition", "summary"}
    assert all(message.retained for message in late.seen)
    assert late.on("condition")[0].payload["condition"] == "good"


def test_presence_and_will(broker: Broker, reader: Reader, make_station: Make):
    """Online at the start, ``stopped`` after an orderly end, ``lost`` by the broker when the station just vanishes."""
    station = make_station(broker.port).online()
    station.link.stop()
    wait_until(lambda: len(reader.on("presence")) == 2, "online and offline")
    assert [(m.payload["state"], m.payload["reason"]) for m in reader.on("presence")] == [
        ("online", ""),
        ("offline", "stopped"),
    ]
    station = make_station(broker.port).online()
    other = make_station(broker.port).online()  # takes the client identifier over: the broker drops the first
    station.wait("offline", "closed")
    wait_until(lambda: any(m.payload["reason"] == "lost" for m in reader.on("presence")), "the will")
    for message in reader.on("presence"):
        check_message(message.topic, message.payload)
    other.link.stop()


@pytest.mark.parametrize("version", VERSIONS)
def test_an_outage_loses_nothing(tmp_path: Path, make_station: Make, version: str):
    """The broker goes and comes back while records go on: all arrive, in order, unaltered; late windows too."""
    broker = Broker(tmp_path / "broker", persistence=True)
    with running(broker):
        reader = Reader(broker, session="reader").ready(broker)
        station = make_station(broker.port, mqtt={"version": version}).online()
        count = 0
        for number in range(3):
            for _ in range(20):
                count += len(station.record(window(number), bar(number)))
            if number < 2:
                # What the broker has acknowledged is its own to keep: let it hand that on before it goes.
                station.emptied()
                wait_until(lambda: len(set(reader.seqs())) == count, "all so far")  # noqa: B023
                broker.stop(kill=number == 1)
                station.wait("offline", "closed")
                for _ in range(20):
                    count += len(station.record(window(number), alert()))
                broker.start()
                station.wait("online")
                reader.ready(broker)  # live windows are for those who are there
        station.emptied()
        wait_until(lambda: len(set(reader.seqs())) == count, "every number")
        reader.stop()
    recorded = {row.seq: row.payload for row in station.journal.rows()}
    seen = [message.payload for message in reader.seen if "seq" in message.payload]
    assert all(payload == recorded[payload["seq"]] for payload in seen)
    assert list(dict.fromkeys(payload["seq"] for payload in seen)) == list(range(1, count + 1))
    assert {message.qos for message in reader.on("window")} == {0, 1}


@pytest.mark.slow
def test_a_broker_that_hangs_is_left_and_found_again(broker: Broker, reader: Reader, make_station: Make):
    """The connection stands and nothing is answered: told by the keep alive, and nothing is lost."""
    station = make_station(broker.port, mqtt={"keepalive_s": 2}).online()
    station.record(bar())
    station.emptied()
    broker.pause()
    try:
        for number in range(100):
            station.record(window(number), bar(number))
        station.wait("offline", "no_answer")
    finally:
        broker.resume()
    station.wait("online")
    station.emptied()
    wait_until(lambda: len(set(reader.seqs())) == 201, "every number")
    recorded = {row.seq: row.payload for row in station.journal.rows()}
    assert all(m.payload == recorded[m.payload["seq"]] for m in reader.seen if "seq" in m.payload)


def test_a_broker_without_memory_gets_the_states_again(tmp_path: Path, make_station: Make):
    """After a restart of a broker that kept nothing, the condition in force is retained anew, without a number."""
    broker = Broker(tmp_path / "broker")
    with running(broker):
        station = make_station(broker.port).online()
        station.record(condition("maintenance_required"))
        station.emptied()
        broker.stop()
        station.wait("offline", "closed")
        broker.start()
        station.wait("online")
        late = Reader(broker)
        wait_until(lambda: late.on("condition"), "the condition")
        late.stop()
    payload = late.on("condition")[0].payload
    assert (payload["condition"], payload["repeat_of_seq"]) == ("maintenance_required", 1)
    check_message("x/condition", payload)


def test_an_old_state_in_a_backlog_does_not_stay_behind_as_retained(broker: Broker, make_station: Make):
    """Only the newest of a kind is sent as retained: no moment at which a stale ``good`` stands."""
    station = make_station(broker.port)
    reader = Reader(broker).ready(broker)
    station.record(condition("good"), *[alert()] * 300, condition("failure"))
    station.online()
    station.emptied()
    late = Reader(broker)
    wait_until(lambda: late.on("condition"), "the condition")
    wait_until(lambda: len(reader.seqs()) == 302, "all")
    for one in (reader, late):
        one.stop()
    assert [m.payload["condition"] for m in reader.on("condition")] == ["failure", "good", "failure"]
    assert [m.payload["condition"] for m in late.on("condition")] == ["failure"]


def test_live_messages_pass_a_long_backlog(broker: Broker, reader: Reader, make_station: Make):
    """A summary and a view arrive while the backlog is sent, and the backlog arrives although they keep coming."""
    station = make_station(broker.port)
    for _ in range(20):
        station.record(*[bar()] * 100)
    station.online()
    body = messages.summary(
        condition="good", expected="", since_utc_s=1.0, conforming=0, nonconforming=0, inconclusive=0
    )
    while station.journal.status().unsent:
        station.link.publish("summary", body)
        station.link.publish("view", messages.view(jpeg=b"\xff\xd8\xff", width_px=1, height_px=1, frame=0))
        time.sleep(0.02)  # fifty a second: faster than any station publishes
    wait_until(lambda: len(reader.seqs()) == 2000, "the backlog")
    places = {leaf: [at for at, m in enumerate(reader.seen) if m.topic.endswith(leaf)] for leaf in ("summary", "view")}
    last = max(at for at, m in enumerate(reader.seen) if "seq" in m.payload)
    assert reader.seqs() == list(range(1, 2001))
    for found in places.values():
        assert sum(at < last for at in found) >= 3


def test_windows_alone_leave_the_outbox(broker: Broker, reader: Reader, make_station: Make):
    """At QoS 0 nothing is acknowledged; the barrier proves them all the same."""
    station = make_station(broker.port).online()
    for number in range(10):
        station.record(window(number))
    station.emptied()
    wait_until(lambda: reader.seqs() == list(range(1, 11)), "the windows")


def test_stopping_sends_what_waits(broker: Broker, reader: Reader, make_station: Make):
    """``stop`` flushes, and says that all was delivered."""
    station = make_station(broker.port)
    station.record(*[bar()] * 500)
    station.online()
    assert station.link.stop(10.0) is True
    assert station.journal.status().unsent == 0
    wait_until(lambda: len(reader.seqs()) == 500, "all")
    assert station.link.state == LinkState(state="stopped")
    assert not station.link.alive()


def test_stopping_without_a_broker_ends_soon(make_station: Make):
    """Nothing answers: the session ends within its time and keeps what waits."""
    station = make_station(_closed_port())
    station.record(bar())
    station.link.start()
    station.wait("offline", "unreachable")
    began_s = time.monotonic()
    assert station.link.stop(0.2) is False
    assert time.monotonic() - began_s < 5
    assert station.journal.status().unsent == 1


def _closed_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def test_a_host_name_that_does_not_exist_is_named(make_station: Make):
    """RFC 6761: names below ``invalid`` never resolve."""
    station = make_station(1883, mqtt={"host": "broker.invalid"})
    station.link.start()
    station.wait("offline", "unknown_host")


def test_a_server_that_never_answers_is_named(make_station: Make, monkeypatch: pytest.MonkeyPatch):
    """Something listens and is no broker; we wait less long for it here."""
    monkeypatch.setattr("edgewatch.link.connection.CONNECT_S", 1.0)
    with socket.create_server(("127.0.0.1", 0)) as server:
        station = make_station(server.getsockname()[1])
        station.link.start()
        station.wait("offline", "no_answer")


CONNACK_5 = bytes.fromhex("20 03 00 00 00")
"""MQTT 5 section 3.2: no session, success, no properties."""


@pytest.mark.parametrize(
    ("after", "reason"),
    [
        (bytes.fromhex("E0 01 8E"), "taken_over"),
        (bytes.fromhex("E0 01 8B"), "closed"),
        (bytes.fromhex("E0 01 95"), "too_large"),
        (bytes.fromhex("E0 01 87"), "not_authorised"),
        (bytes.fromhex("40 04 00 01 97 00"), "rejected"),
        (bytes.fromhex("40 04 00 01 87 00"), "not_authorised"),
    ],
)
def test_reason_codes_of_a_broker_are_named(make_station: Make, after: bytes, reason: str):
    """DISCONNECT and PUBACK with MQTT 5's reason codes (section 2.4), byte by byte from a server of our own."""

    def serve(server: socket.socket) -> None:
        connection, _ = server.accept()
        with connection:
            connection.recv(4096)
            connection.sendall(CONNACK_5)
            connection.recv(4096)
            connection.sendall(after)
            connection.settimeout(5)
            with contextlib.suppress(OSError):
                while connection.recv(4096):
                    pass

    with socket.create_server(("127.0.0.1", 0)) as server:
        thread = threading.Thread(target=serve, args=(server,))
        thread.start()
        station = make_station(server.getsockname()[1])
        station.link.start()
        station.wait("offline", reason)
        thread.join()


def test_a_server_that_talks_nonsense_is_survived(make_station: Make):
    """Random bytes where CONNACK should be: the session tries again."""
    stop = threading.Event()
    accepted = []

    def serve(server: socket.socket) -> None:
        server.settimeout(0.1)
        while not stop.is_set():
            try:
                connection, _ = server.accept()
            except TimeoutError:
                continue
            accepted.append(1)
            connection.sendall(bytes(range(256)))
            connection.close()

    with socket.create_server(("127.0.0.1", 0)) as server:
        thread = threading.Thread(target=serve, args=(server,))
        thread.start()
        station = make_station(server.getsockname()[1])
        station.link.start()
        wait_until(lambda: len(accepted) >= 2, "another attempt")
        assert station.link.alive()
        stop.set()
        thread.join()


# ---------------------------------------------------------------------- passwords and certificates


def _secret(path: Path, text: str, mode: int = 0o600) -> Path:
    path.write_text(text)
    path.chmod(mode)
    return path


@pytest.mark.parametrize("version", VERSIONS)
def test_user_and_password(tmp_path: Path, make_station: Make, version: str):
    """The right password opens, a wrong one is named and tried again; a mended file is picked up without a restart."""
    file = _secret(tmp_path / "password", "wrong\n")
    broker = Broker(tmp_path / "broker", passwords={"wheel-a": "sparks, 1 2 3"})
    mqtt = {"version": version, "user": "wheel-a", "password_file": "password"}
    with running(broker):
        station = make_station(broker.port, mqtt=mqtt, folder=tmp_path)
        station.link.start()
        station.wait("offline", "not_authorised")
        _secret(file, "sparks, 1 2 3\nsecond line\n")
        station.wait("online")
        file.unlink()
        broker.stop()
        broker.start()
        station.wait("offline", "settings")
        _secret(file, "sparks, 1 2 3\n")
        station.wait("online")
    assert all("sparks" not in f"{state}" for state in station.states)


@pytest.mark.parametrize(
    ("mode", "text", "said"),
    [(0o640, "x\n", "others may read it"), (0o604, "x\n", "others may read it"), (0o600, "\n", "holds no password")],
)
def test_an_open_or_empty_password_file_is_refused(tmp_path: Path, mode: int, text: str, said: str):
    """At once, with file and key named, and without the password in the text."""
    _secret(tmp_path / "password", text, mode)
    with pytest.raises(SettingsError, match=f"mqtt.password_file.*{said}"):
        Link(
            MqttSettings(password_file="password"),
            TOPICS,
            Journal(tmp_path / "j.sqlite"),
            stamp=stamp,
            version="0",
            folder=tmp_path,
        )


def test_tls_is_verified(tmp_path: Path, make_station: Make):
    """The right authority opens; another, an expired certificate, and a wrong host name are each named."""
    good = make_certificates(tmp_path / "good")
    expired = make_certificates(tmp_path / "expired", expired=True)
    tls = {"tls": True, "host": "localhost"}
    with running(Broker(tmp_path / "one", tls=good)) as broker:
        station = make_station(broker.port, mqtt={**tls, "ca_file": str(good.ca)}).online()
        station.record(*[bar()] * 50)
        station.emptied()
        other = make_station(broker.port, mqtt={**tls, "ca_file": str(expired.ca)})
        other.link.start()
        other.wait("offline", "certificate_not_trusted")
        system = make_station(broker.port, mqtt=tls)
        system.link.start()
        system.wait("offline", "certificate_not_trusted")
        wrong = make_station(broker.port, mqtt={**tls, "host": "127.0.0.1", "ca_file": str(good.ca)})
        wrong.link.start()
        wrong.wait("offline", "certificate_wrong_host")
        plain = make_station(broker.port, mqtt={"host": "localhost"})
        plain.link.start()
        wait_until(lambda: plain.link.state.state == "offline", "plain text to a TLS port fails")
    with running(Broker(tmp_path / "two", tls=expired)) as broker:
        station = make_station(broker.port, mqtt={**tls, "ca_file": str(expired.ca)})
        station.link.start()
        station.wait("offline", "certificate_expired")
        assert station.link.alive()
    with running(Broker(tmp_path / "three")) as broker:
        station = make_station(broker.port, mqtt={**tls, "ca_file": str(good.ca)})
        station.link.start()
        wait_until(lambda: station.link.state.reason in ("tls_failed", "unreachable"), "TLS to a plain port fails")


def test_a_client_certificate_opens_where_the_broker_asks_for_one(tmp_path: Path, make_station: Make):
    """With certificate and key; a key that others can read is refused at once."""
    made = make_certificates(tmp_path / "tls")
    lines = ("require_certificate true", f"cafile {made.ca}")
    mqtt = {"tls": True, "host": "localhost", "ca_file": str(made.ca)}
    with running(Broker(tmp_path / "broker", tls=made, lines=lines)) as broker:
        without = make_station(broker.port, mqtt=mqtt)
        without.link.start()
        wait_until(lambda: without.link.state.state == "offline", "refused without a certificate")
        made.key.chmod(0o600)
        certified = {**mqtt, "cert_file": str(made.cert), "key_file": str(made.key)}
        make_station(broker.port, mqtt=certified).online()
        made.key.chmod(0o644)
        with pytest.raises(SettingsError, match=r"mqtt.key_file.*others may read it"):
            make_station(broker.port, mqtt=certified)


@pytest.mark.parametrize(
    ("settings", "said"),
    [
        ({"ca_file": "nothing.pem"}, "mqtt.ca_file"),
        ({"ca_file": "junk.pem"}, "mqtt.ca_file"),
        ({"cert_file": "junk.pem", "key_file": "junk.pem"}, "mqtt.cert_file"),
    ],
)
def test_certificate_files_that_are_none_are_named(tmp_path: Path, settings: dict[str, str], said: str):
    """Missing, or not PEM."""
    _secret(tmp_path / "junk.pem", "junk")
    with pytest.raises(SettingsError, match=said):
        Link(
            MqttSettings(tls=True, **settings),
            TOPICS,
            Journal(tmp_path / "j.sqlite"),
            stamp=stamp,
            version="0",
            folder=tmp_path,
        )


def test_a_broker_that_forbids_publishing_keeps_the_outbox_whole(tmp_path: Path, make_station: Make):
    """Access denied on one topic (MQTT 5 says so): named, and nothing counts as delivered until it is allowed."""
    acl = f"topic write {TOPICS.base}/presence\ntopic write {TOPICS.base}/alert\n"
    broker = Broker(tmp_path / "broker", acl=acl)
    with running(broker):
        station = make_station(broker.port)
        # Nothing after the bar: Mosquitto 2.0.11 closes as well, and what it had not read would cost us its answer.
        station.record(alert(), bar())
        station.link.start()
        station.wait("offline", "not_authorised")
        wait_until(lambda: station.journal.status().unsent == 1, "the first alert")
        assert station.journal.pending(1)[0].kind == "bar"


# ---------------------------------------------------------------------- orders

ORDERS = OrderSettings(enabled=True)


@pytest.mark.parametrize("version", VERSIONS)
def test_orders_arrive_and_are_answered(broker: Broker, reader: Reader, make_station: Make, version: str):
    """A right order comes in as a value, a wrong one as a refusal; answers go to ``reply`` with a number."""
    station = make_station(broker.port, mqtt={"version": version}, orders=ORDERS).online()
    broker.publish(TOPICS.order("expect"), _order("1", grade="C45"))
    broker.publish(TOPICS.order("expect"), "not JSON")
    broker.publish(TOPICS.order("shutdown"), _order("3"))
    broker.publish(TOPICS.order("view"), _order("4", who="x" * 5000))
    wait_until(lambda: len(station.orders) == 4, "four orders")
    order, *refused = station.orders
    assert isinstance(order, Order)
    assert (order.name, order.grade, order.who) == ("expect", "C45", "desk")
    assert [refusal.reason.split(":")[0].split(";")[0] for refusal in refused] == [
        "malformed",
        "unknown order",
        "oversized",
    ]
    for found in station.orders:
        station.record(Entry(kind="order", body=answer(found)))
    wait_until(lambda: len(reader.on("reply")) == 4, "four replies")
    assert [message.payload["accepted"] for message in reader.on("reply")] == [True, False, False, False]


def test_a_response_topic_is_honoured_with_its_correlation(broker: Broker, reader: Reader, make_station: Make):
    """MQTT 5: the answer goes there as well, with the data that the sender gave."""
    station = make_station(broker.port, orders=ORDERS).online()
    broker.publish(
        TOPICS.order("view"),
        _order("1"),
        *("-V", "mqttv5", "-D", "publish", "response-topic", "desk/answers"),
        *("-D", "publish", "correlation-data", "no 7"),
    )
    wait_until(lambda: station.orders, "the order")
    (order,) = station.orders
    station.record(
        Entry(kind="order", body=answer(order), reply_topic=order.reply_topic, correlation=order.correlation)
    )
    wait_until(lambda: any(m.topic == "desk/answers" for m in reader.seen) and reader.on("reply"), "both answers")
    (there,) = (message for message in reader.seen if message.topic == "desk/answers")
    assert there.payload == reader.on("reply")[0].payload
    assert there.properties["correlation-data"] == "no 7"


@pytest.mark.parametrize("version", VERSIONS)
def test_retained_orders_are_refused(broker: Broker, make_station: Make, version: str):
    """One that lay there before the station came."""
    broker.publish(TOPICS.order("release"), _order("1"), "-r")
    station = make_station(broker.port, mqtt={"version": version}, orders=ORDERS).online()
    wait_until(lambda: station.orders, "the refusal")
    (found,) = station.orders
    assert isinstance(found, Refusal)
    assert "retained" in found.reason


def test_a_retained_order_is_refused_while_connected(broker: Broker, make_station: Make):
    """MQTT 5 tells even a standing subscription that it was published to be kept."""
    station = make_station(broker.port, orders=ORDERS).online()
    broker.publish(TOPICS.order("release"), _order("1"), "-r")
    wait_until(lambda: station.orders, "the refusal")
    assert isinstance(station.orders[0], Refusal)


def test_orders_are_not_even_read_unless_turned_on(broker: Broker, make_station: Make):
    """Off by default: nothing is subscribed to."""
    station = make_station(broker.port, orders=OrderSettings()).online()
    broker.publish(TOPICS.order("view"), _order("1"))
    station.record(bar())
    station.emptied()
    assert station.orders == []


def test_callbacks_that_raise_do_not_end_the_session(broker: Broker, make_station: Make):
    """The station's own mistake is counted, and orders and messages go on."""

    def fails(found: Order | Refusal) -> None:
        raise RuntimeError("a bug")

    station = make_station(broker.port, orders=ORDERS, on_order=fails).online()
    for number in range(3):
        broker.publish(TOPICS.order("view"), _order(f"{number}"))
    wait_until(lambda: station.link.callback_errors == 3, "three errors")
    station.record(bar())
    station.emptied()
    assert station.link.state.state == "online"


def test_a_bug_in_the_session_costs_a_connection_and_no_message(
    broker: Broker, reader: Reader, make_station: Make, monkeypatch: pytest.MonkeyPatch
):
    """Something nobody expected is raised in the session's thread: told, offline for a moment, then all goes out."""
    faults: list[Exception] = []
    station = make_station(broker.port, on_fault=faults.append).online()
    broken = RuntimeError("a bug")

    def fails(*words: Any) -> None:
        monkeypatch.undo()
        raise broken

    monkeypatch.setattr(Link, "_send", fails)
    station.record(bar())
    station.wait("offline", "fault")
    station.emptied()
    assert faults == [broken]
    assert station.link.alive()
    wait_until(lambda: set(reader.seqs()) == {1}, "the bar")


# ---------------------------------------------------------------------- other troubles


def test_a_locked_journal_does_not_end_the_session(broker: Broker, reader: Reader, make_station: Make):
    """The outbox fails for a while: said, live messages go on, and afterwards everything is sent."""
    station = make_station(broker.port).online()
    station.record(bar())
    station.emptied()
    working = station.journal.pending

    def broken(limit: int, *, after: int = 0) -> Any:
        raise DeviceError("journal x: database is locked")

    station.journal.pending = broken  # type: ignore[method-assign]
    station.record(bar())
    station.wait("online", "journal")
    body = messages.summary(
        condition="good", expected="", since_utc_s=1.0, conforming=0, nonconforming=0, inconclusive=0
    )
    station.link.publish("summary", body)
    wait_until(lambda: reader.on("summary"), "the live message")
    station.journal.pending = working  # type: ignore[method-assign]
    station.emptied()
    station.wait("online")


def test_live_messages_are_only_those_without_a_number(make_station: Make):
    """A bar published live would have no number: our own mistake."""
    station = make_station(1)
    with pytest.raises(ValueError, match="goes through the outbox"):
        station.link.publish("bar", {})


def test_starting_twice_is_refused(broker: Broker, make_station: Make):
    """One thread a session; after an end it may start again."""
    station = make_station(broker.port).online()
    with pytest.raises(ValueError, match="runs already"):
        station.link.start()
    station.link.stop()
    station.online()


def test_every_reason_that_was_seen_is_explained():
    """States and reasons are declared in one table."""
    assert "online" in STATES
    assert all(text and text[0].islower() for text in REASONS.values())
