"""A real Mosquitto on a free loopback port, and ``mosquitto_sub`` as a second, independent reader."""

from __future__ import annotations

import contextlib
import json
import os
import shutil
import signal
import socket
import subprocess
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

MOSQUITTO = shutil.which("mosquitto") or "/usr/sbin/mosquitto"
MARK = "tests/reader"
PATIENCE_S = 5.0
WAIT_S = 20.0
"""Longest wait for something that takes milliseconds on an idle machine."""


def free_port() -> int:
    """Return a TCP port that is free on the loopback address."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def wait_until(true: Callable[[], Any], what: str, within_s: float = WAIT_S) -> None:
    """Wait until ``true()``; fail after ``within_s``."""
    until_s = time.monotonic() + within_s
    while not true():
        assert time.monotonic() < until_s, f"not within {within_s} s: {what}"
        time.sleep(0.01)  # polled: the events happen in other processes


class Broker:
    """A Mosquitto of our own. ``lines``: more lines of its configuration."""

    def __init__(
        self,
        folder: Path,
        *,
        passwords: dict[str, str] | None = None,
        tls: Certificates | None = None,
        persistence: bool = False,
        acl: str = "",
        lines: tuple[str, ...] = (),
    ) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.folder = folder
        self.port = free_port()
        self.tls = tls
        self._process: subprocess.Popen[bytes] | None = None
        # Mosquitto started by root changes to another user unless told otherwise; "user" is ignored for others.
        config = [
            "user root",
            f"listener {self.port} 127.0.0.1",
            f"allow_anonymous {'false' if passwords else 'true'}",
            "max_queued_messages 0",
            "queue_qos0_messages true",
            *lines,
        ]
        if passwords is not None:
            file = folder / "passwords"
            file.touch(mode=0o600)
            for user, password in passwords.items():
                subprocess.run(["mosquitto_passwd", "-b", str(file), user, password], check=True, capture_output=True)
            config.append(f"password_file {file}")
        if acl:
            (folder / "acl").write_text(acl)
            config.append(f"acl_file {folder / 'acl'}")
        if tls is not None:
            config += [f"certfile {tls.cert}", f"keyfile {tls.key}"]
        if persistence:
            config += ["persistence true", f"persistence_location {folder}/", "autosave_interval 1"]
        self.config = folder / "mosquitto.conf"
        self.config.write_text("\n".join(config) + "\n")

    @property
    def up(self) -> bool:
        """Whether it was started and not stopped."""
        return self._process is not None

    def start(self) -> None:
        """Start it and wait until it answers."""
        with (self.folder / "mosquitto.log").open("ab") as log:
            self._process = subprocess.Popen([MOSQUITTO, "-c", str(self.config)], stdout=log, stderr=log)
        wait_until(self._answers, f"mosquitto answers ({self.folder / 'mosquitto.log'})")

    def _answers(self) -> bool:
        assert self._process is not None and self._process.poll() is None, (self.folder / "mosquitto.log").read_text()
        try:
            socket.create_connection(("127.0.0.1", self.port), timeout=1).close()
        except OSError:
            return False
        return True

    def stop(self, *, kill: bool = False) -> None:
        """Stop it, with SIGKILL if ``kill``; a second call does nothing."""
        process, self._process = self._process, None
        if process is not None:
            process.send_signal(signal.SIGKILL if kill else signal.SIGTERM)
            process.wait(WAIT_S)

    def pause(self) -> None:
        """Freeze it: the connection stays and nothing is answered."""
        assert self._process is not None
        self._process.send_signal(signal.SIGSTOP)

    def resume(self) -> None:
        """Let it go on."""
        assert self._process is not None
        self._process.send_signal(signal.SIGCONT)

    def publish(self, topic: str, payload: str, *options: str) -> None:
        """Publish one message with ``mosquitto_pub`` at QoS 1."""
        words = ["mosquitto_pub", "-h", "127.0.0.1", "-p", str(self.port), "-q", "1", "-t", topic, "-m", payload]
        subprocess.run([*words, *options], check=True, timeout=WAIT_S)


@contextlib.contextmanager
def running(broker: Broker) -> Iterator[Broker]:
    """Start ``broker``, and stop it at the end."""
    broker.start()
    try:
        yield broker
    finally:
        broker.stop()


class Line:
    """The network between station and broker: bytes pass through until the line is cut, in the middle of a message or
    not. Subscribers are connected to the broker itself and stay.
    """

    def __init__(self, broker: Broker) -> None:
        self._broker = broker
        self._open = True
        self._pairs: set[tuple[socket.socket, socket.socket]] = set()
        self._lock = threading.Lock()
        self._server = socket.create_server(("127.0.0.1", 0))
        self.port = int(self._server.getsockname()[1])
        self._thread = threading.Thread(target=self._accept, daemon=True)
        self._thread.start()

    def _accept(self) -> None:
        while True:
            try:
                near, _ = self._server.accept()
            except OSError:
                return
            with self._lock:
                if not self._open:
                    near.close()
                    continue
                far = socket.create_connection(("127.0.0.1", self._broker.port))
                for end in (near, far):
                    end.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                self._pairs.add((near, far))
            for source, target in ((near, far), (far, near)):
                threading.Thread(target=self._pass_on, args=(source, target, (near, far)), daemon=True).start()

    def _pass_on(self, source: socket.socket, target: socket.socket, pair: tuple[socket.socket, socket.socket]) -> None:
        with contextlib.suppress(OSError):
            while data := source.recv(257):  # an odd size, so that a cut falls within messages
                target.sendall(data)
        self._end(pair)

    def _end(self, pair: tuple[socket.socket, socket.socket]) -> None:
        with self._lock:
            self._pairs.discard(pair)
        for end in pair:
            with contextlib.suppress(OSError):
                end.shutdown(socket.SHUT_RDWR)
            end.close()

    def cut(self) -> None:
        """End every connection at once and take no new one."""
        with self._lock:
            self._open = False
            pairs = list(self._pairs)
        for pair in pairs:
            self._end(pair)

    def mend(self) -> None:
        """Take connections again."""
        self._open = True

    def close(self) -> None:
        """End it for good."""
        self.cut()
        self._server.shutdown(socket.SHUT_RDWR)
        self._server.close()
        self._thread.join(WAIT_S)


@dataclass(frozen=True)
class Seen:
    """One message as ``mosquitto_sub`` saw it."""

    topic: str
    qos: int
    retained: bool
    raw: str
    properties: dict[str, Any]

    @property
    def payload(self) -> dict[str, Any]:
        """The JSON object in it."""
        found = json.loads(self.raw)
        assert isinstance(found, dict)
        return found


class Reader:
    """``mosquitto_sub`` on all topics below ``root``; comes back by itself when the broker does."""

    def __init__(self, broker: Broker, topic: str = "#", *options: str, session: str = "") -> None:
        self.seen: list[Seen] = []
        self._marks = 0
        self._marked: set[str] = set()
        # Where QoS 0 waits too, Mosquitto 2.0.11 loses QoS 1 messages beyond what may be in flight, as it hands on what
        # waited for a session. mosquitto_sub allows 20 unless told otherwise.
        many = ("-D", "connect", "receive-maximum", "60000")
        keep = ["-c", "-i", session, "-x", "4294967295", *many] if session else []
        self._process = subprocess.Popen(
            [
                *("mosquitto_sub", "-V", "mqttv5", "-h", "127.0.0.1", "-p", str(broker.port), "-q", "1", "-t", topic),
                *("-F", "%j"),
                *keep,
                *options,
            ],
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            env={**os.environ, "LC_ALL": "C.UTF-8"},
        )
        self._thread = threading.Thread(target=self._read, daemon=True)
        self._thread.start()

    def _read(self) -> None:
        assert self._process.stdout is not None
        for line in self._process.stdout:
            part = json.loads(line)
            if part["topic"].startswith(MARK):
                self._marked.add(part["topic"])
                continue
            self.take(
                Seen(
                    topic=part["topic"],
                    qos=part["qos"],
                    retained=bool(part["retain"]),
                    raw=part["payload"] if isinstance(part["payload"], str) else json.dumps(part["payload"]),
                    properties=part.get("properties", {}),
                )
            )

    def take(self, message: Seen) -> None:
        """Keep one message."""
        self.seen.append(message)

    def ready(self, broker: Broker) -> Reader:
        """Wait until the subscription stands: a message of our own comes through. Again after the broker was away."""
        self._marks += 1
        mark = f"{MARK}/{self._marks}"

        def through() -> bool:
            broker.publish(mark, "{}")
            return mark in self._marked

        wait_until(through, "the reader's subscription")
        return self

    def stop(self) -> None:
        """End it; a second call does nothing.

        mosquitto_sub disconnects in its signal handler, which waits for ever when the signal comes while the library
        holds the lock that this takes. What it has read is out by then, so it is killed.
        """
        self._process.terminate()
        try:
            self._process.wait(PATIENCE_S)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait(WAIT_S)
        self._thread.join(WAIT_S)
        if self._process.stdout is not None:
            self._process.stdout.close()

    def on(self, topic_end: str) -> list[Seen]:
        """Messages whose topic ends so."""
        return [message for message in self.seen if message.topic.endswith(f"/{topic_end}")]

    def seqs(self) -> list[int]:
        """Every ``seq`` in the order of arrival."""
        return [message.payload["seq"] for message in self.seen if "seq" in message.payload]


@dataclass(frozen=True)
class Certificates:
    """A test authority and a server certificate signed by it."""

    ca: Path
    cert: Path
    key: Path


def make_certificates(folder: Path, *, days: int = 2, expired: bool = False, host: str = "localhost") -> Certificates:
    """Make a certificate authority and a server certificate for ``host`` with openssl."""
    folder.mkdir(parents=True, exist_ok=True)

    def openssl(*words: str) -> None:
        subprocess.run(["openssl", *words], check=True, capture_output=True, cwd=folder)

    curve = ("-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1", "-nodes")
    openssl("req", "-x509", *curve, "-keyout", "ca.key", "-out", "ca.pem", "-days", str(days), "-subj", "/CN=Test")
    openssl("req", *curve, "-keyout", "server.key", "-out", "server.csr", "-subj", f"/CN={host}")
    (folder / "ext").write_text(f"subjectAltName=DNS:{host}\n")
    (folder / "index").write_text("")
    (folder / "ca.conf").write_text(
        "[ca]\ndefault_ca=x\n[x]\ndatabase=index\nnew_certs_dir=.\ndefault_md=sha256\npolicy=p\nrand_serial=yes\n"
        "unique_subject=no\n[p]\ncommonName=supplied\n"
    )
    begin, end = ("20200101000000Z", "20200102000000Z") if expired else ("20200101000000Z", "20991231000000Z")
    openssl(
        *("ca", "-batch", "-config", "ca.conf", "-cert", "ca.pem", "-keyfile", "ca.key", "-in", "server.csr"),
        *("-out", "server.pem", "-notext", "-extfile", "ext", "-startdate", begin, "-enddate", end),
    )
    return Certificates(ca=folder / "ca.pem", cert=folder / "server.pem", key=folder / "server.key")
