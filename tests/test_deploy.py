"""What deploy/ hands out works: systemd understands the unit, Mosquitto the broker's configuration and rights."""

from __future__ import annotations

import configparser
import os
import re
import shutil
import socket
import subprocess
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import paho.mqtt.client as mqtt
import pytest

DEPLOY = Path(__file__).parents[1] / "deploy"
PATH = f"{os.environ.get('PATH', '')}:/usr/sbin:/sbin"
"""Debian keeps mosquitto in a folder that an ordinary user's PATH leaves out."""
BASE = "edgewatch/hollowmere/peel-2/wheel-a"
PATIENCE_S = 10.0


def program(name: str) -> str:
    """Full path of a program that deploy/run-tests.sh installs."""
    found = shutil.which(name, path=PATH)
    assert found, f"{name} is missing: sh deploy/run-tests.sh installs it"
    return found


def free_port() -> int:
    """A loopback port that nobody listens on at this moment."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def broker(config: Path, port: int) -> Iterator[None]:
    """A Mosquitto with this configuration, until the block ends."""
    process = subprocess.Popen([program("mosquitto"), "-c", str(config)], stderr=subprocess.PIPE, text=True)
    try:
        limit = time.monotonic() + PATIENCE_S
        while True:
            assert process.poll() is None, process.stderr.read() if process.stderr else ""
            try:
                socket.create_connection(("127.0.0.1", port), 0.2).close()
                break
            except OSError:
                assert time.monotonic() < limit, "the broker does not listen"
                time.sleep(0.02)  # between two attempts to connect: there is nothing to wait on
        yield
    finally:
        process.terminate()
        process.communicate(timeout=PATIENCE_S)


def client(name: str, port: int, *words: str) -> subprocess.CompletedProcess[str]:
    """Run one of Mosquitto's clients to its end."""
    command = [program(name), "-h", "127.0.0.1", "-p", str(port), *words]
    return subprocess.run(command, capture_output=True, text=True, check=False, timeout=PATIENCE_S)


def loopback_config(folder: Path, port: int) -> str:
    """The shipped configuration with another port, after what Debian's mosquitto.conf has said with another folder."""
    text = (DEPLOY / "mosquitto-loopback.conf").read_text(encoding="utf-8")
    assert re.findall(r"^listener (.*)$", text, re.MULTILINE) == ["1883 127.0.0.1"]
    debian = f"persistence true\npersistence_location {folder}/\nlog_dest file {folder}/log\n"
    text = debian + text.replace("listener 1883", f"listener {port}")
    return f"{text}\nuser root\n" if os.geteuid() == 0 else text


@pytest.mark.slow
def test_the_loopback_broker_keeps_states_over_a_restart(tmp_path: Path) -> None:
    """Mosquitto takes the file as it is, and a retained state published before a restart is there after it."""
    port = free_port()
    config = tmp_path / "mosquitto.conf"
    config.write_text(loopback_config(tmp_path, port), encoding="utf-8")
    with broker(config, port):
        sent = client("mosquitto_pub", port, "-q", "1", "-r", "-t", f"{BASE}/condition", "-m", "good")
        assert sent.returncode == 0, sent.stderr
    with broker(config, port):
        assert client("mosquitto_sub", port, "-C", "1", "-W", "5", "-t", f"{BASE}/#").stdout == "good\n"


@pytest.mark.slow
@pytest.mark.parametrize("version", ["mqttv311", "mqttv5"])
def test_the_loopback_broker_keeps_everything_for_a_reader_that_is_away(tmp_path: Path, version: str) -> None:
    """A session that sleeps while windows (QoS 0) and bars (QoS 1) come mixed, more than may be in flight."""
    port = free_port()
    config = tmp_path / "mosquitto.conf"
    config.write_text(loopback_config(tmp_path, port), encoding="utf-8")
    topic = f"{BASE}/bar"
    session = ["-V", version, "-c", "-i", "reader", "-q", "1", "-t", topic]
    session += ["-x", "3600"] if version == "mqttv5" else []
    bars = [str(number) for number in range(60)]
    with broker(config, port):
        assert client("mosquitto_sub", port, *session, "-E").returncode == 0
        station = mqtt.Client(mqtt.CallbackAPIVersion.VERSION2, protocol=mqtt.MQTTv5)
        station.max_inflight_messages_set(0)
        station.connect("127.0.0.1", port)
        station.loop_start()
        sent = []
        for number in bars:
            sent += [station.publish(topic, f"window before {number}", qos=0), station.publish(topic, number, qos=1)]
        for one in sent:
            one.wait_for_publish(PATIENCE_S)
        station.disconnect()
        station.loop_stop()
        assert client("mosquitto_sub", port, *session, "-C", "60", "-W", "10").stdout.split() == bars


@pytest.mark.slow
def test_the_rights_of_the_mqtt_guide_hold(tmp_path: Path) -> None:
    """With the guide's list the supervisor's order arrives at the station, and the display's does not."""
    guide = (DEPLOY / "guides" / "mqtt.md").read_text(encoding="utf-8")
    block = re.search(r"^    user wheel-a\n(?:(?:    .*)?\n)+", guide, re.MULTILINE)
    assert block
    (tmp_path / "acl").write_text(re.sub(r"^    ", "", block[0], flags=re.MULTILINE), encoding="utf-8")
    passwords = tmp_path / "passwd"
    passwords.touch(0o600)
    for user in ("wheel-a", "display", "supervisor"):
        subprocess.run([program("mosquitto_passwd"), "-b", str(passwords), user, "pw"], check=True, capture_output=True)
    port = free_port()
    config = tmp_path / "mosquitto.conf"
    config.write_text(
        loopback_config(tmp_path, port).replace("allow_anonymous true", "allow_anonymous false")
        + f"password_file {passwords}\nacl_file {tmp_path}/acl\n",
        encoding="utf-8",
    )

    def orders_seen(sender: str) -> str:
        """What arrives at the station when ``sender`` gives an order and the supervisor a second one."""
        topic = f"{BASE}/order/release"
        words = [
            program("stdbuf"),
            "-oL",
            program("mosquitto_sub"),
            "-h",
            "127.0.0.1",
            "-p",
            str(port),
            "-u",
            "wheel-a",
            "-P",
            "pw",
            "-d",
        ]
        station = subprocess.Popen(
            [*words, "-C", "1", "-W", "8", "-t", f"{BASE}/order/#"], stdout=subprocess.PIPE, text=True
        )
        assert station.stdout
        for line in station.stdout:
            if "received SUBACK" in line:
                break
        for user in (sender, "supervisor"):
            client("mosquitto_pub", port, "-u", user, "-P", "pw", "-q", "1", "-t", topic, "-m", f"from {user}")
        text, _ = station.communicate(timeout=PATIENCE_S)
        (arrived,) = re.findall(r"^from .*$", text, re.MULTILINE)
        return str(arrived)

    with broker(config, port):
        assert client("mosquitto_sub", port, "-C", "1", "-W", "2", "-t", "#").returncode != 0  # anonymous: refused
        assert orders_seen("display") == "from supervisor"
        assert orders_seen("supervisor") == "from supervisor"
        state = ("-r", "-t", f"{BASE}/condition", "-m", "good")
        assert client("mosquitto_pub", port, "-u", "wheel-a", "-P", "pw", "-q", "1", *state).returncode == 0
        read = client("mosquitto_sub", port, "-u", "display", "-P", "pw", "-C", "1", "-W", "5", "-t", f"{BASE}/#")
        assert read.stdout == "good\n"


def unit() -> configparser.RawConfigParser:
    """The service unit; a key that is given several times keeps its last value here."""
    parser = configparser.RawConfigParser(strict=False)
    parser.optionxform = str  # type: ignore[assignment,method-assign] # keys of units are case-sensitive
    parser.read(DEPLOY / "edgewatch.service", encoding="utf-8")
    return parser


def test_the_unit_is_watched_and_confined() -> None:
    """It tells systemd when it is ready, is ended when it hangs, and is not started anew on a bad configuration."""
    service = unit()["Service"]
    assert service["Type"] == "notify"
    assert int(service["WatchdogSec"]) > 0
    assert service["Restart"] == "on-failure"
    assert service["RestartPreventExitStatus"] == "2"
    assert set(service["SupplementaryGroups"].split()) == {"dialout", "video"}
    assert service["StateDirectory"] == "edgewatch"
    assert int(service["CPUWeight"]) > 100  # systemd.resource-control(5): what every other service has
    assert service["WorkingDirectory"] == f"/var/lib/{service['StateDirectory']}"
    for key in ("NoNewPrivileges", "ProtectHome", "PrivateTmp", "LockPersonality", "RestrictRealtime"):
        assert service[key] == "yes", key


@pytest.mark.slow
def test_systemd_understands_the_unit(tmp_path: Path) -> None:
    """``systemd-analyze`` has nothing to say about it, and rates its exposure at 2 of 10 or less."""
    copy = tmp_path / "edgewatch.service"
    text = (DEPLOY / "edgewatch.service").read_text(encoding="utf-8")
    copy.write_text(re.sub(r"(?m)^ExecStart=\S+", "ExecStart=/bin/true", text), encoding="utf-8")
    checked = subprocess.run([program("systemd-analyze"), "verify", str(copy)], capture_output=True, text=True)
    assert (checked.returncode, checked.stdout + checked.stderr) == (0, "")
    rating = ["security", "--offline=yes", "--threshold=20", "--no-pager", str(copy)]
    rated = subprocess.run([program("systemd-analyze"), *rating], capture_output=True, text=True)
    assert rated.returncode == 0, rated.stdout
