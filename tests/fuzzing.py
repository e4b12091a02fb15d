"""Fuzz targets by name, and a small coverage-guided fuzzer that feeds them altered bytes.

A target is a function of bytes that raises nothing but what it documents; what else it raises is a finding. To add one:
write the function, give it seeds, and put it into ``TARGETS``. ``tests/test_fuzzing.py`` runs each briefly,
``tests/bench/bench_fuzz.py`` a million inputs.
"""

from __future__ import annotations

import contextlib
import json
import random
import sys
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from types import FrameType
from typing import Any

from edgewatch.commands import journal as journal_command
from edgewatch.errors import DeviceError, SettingsError
from edgewatch.judge.bands import read_band
from edgewatch.record import reading
from edgewatch.record.journal import Journal
from edgewatch.record.tomlfile import read_toml
from edgewatch.settings import StationSettings, read_settings
from edgewatch.wire import messages, relayframes
from edgewatch.wire.messages import Stamp
from edgewatch.wire.orders import ORDERS, Order, Refusal, answer, read_order
from edgewatch.wire.times import read_time, write_time
from edgewatch.wire.topics import Topics
from tests.record.entries import alert, bar, condition, stamp, window

Run = Callable[[bytes], None]
ROOT = Path(__file__).parents[1]
TOKENS = (
    *(b"null", b"true", b"-1", b"1e999", b"NaN", b"{}", b"[]", b'""', b"\x00", b"\xff\xff\xff\xff", b"\n", b"\\u0000"),
    *(b"..", b"/", b"9" * 40, b"[[x]]", b"=", b'"', b"'", b"\xed\xa0\x80", b"\xef\xbb\xbf", b"2026-02-30T24:60:60Z"),
)
"""Bytes that mean something to somebody."""


@dataclass(frozen=True, kw_only=True)
class Target:
    """``run`` gets altered ``seeds``; ``share``: of the inputs of a fast target (slow ones write files)."""

    run: Run
    seeds: tuple[bytes, ...]
    share: float = 1.0


@dataclass
class Found:
    """What one target did: inputs tried, seeds kept because they reached new lines, inputs that broke it."""

    inputs: int = 0
    kept: int = 0
    broke: list[tuple[bytes, str]] = field(default_factory=list)


def altered(corpus: list[bytes], rng: random.Random) -> bytes:
    """One input: a seed with bytes changed, parts cut, doubled, swapped with another seed's, or tokens put in."""
    content = bytearray(rng.choice(corpus))
    for _ in range(rng.choice((1, 1, 1, 2, 4, 16))):
        at = rng.randrange(len(content) + 1)
        end = min(len(content), at + rng.choice((1, 2, 8, 64)))
        step = rng.randrange(7)
        if step == 0 and at < len(content):
            content[at] ^= 1 << rng.randrange(8)
        elif step == 1 and at < len(content):
            content[at] = rng.randrange(256)
        elif step == 2:
            del content[at:end]
        elif step == 3:
            content[at:at] = rng.choice(TOKENS)
        elif step == 4:
            content[at:at] = content[at:end]
        elif step == 5:
            other = rng.choice(corpus)
            begin = rng.randrange(len(other) + 1)
            content[at:end] = other[begin : begin + rng.choice((1, 8, 64))]
        elif step == 6 and rng.random() < 0.2:
            del content[at:]
    return bytes(content)


def fuzz(target: Target, inputs: int, seed: int, *, watch_every: int = 20) -> Found:
    """Feed ``inputs`` altered seeds; every ``watch_every``-th is watched line by line, and kept if it reached a line
    of the package that none reached before.
    """
    rng = random.Random(seed)
    corpus = list(target.seeds)
    lines: set[tuple[str, int]] = set()
    found = Found()
    for seed_input in target.seeds:
        with watched(lines):
            target.run(seed_input)  # a seed must not break it
    for number in range(inputs):
        data = altered(corpus, rng)
        before = len(lines)
        try:
            with watched(lines) if number % watch_every == 0 else contextlib.nullcontext():
                target.run(data)
        except Exception as error:  # noqa: BLE001 - any exception that the target lets out is what is looked for
            found.broke.append((data, f"{type(error).__name__}: {error}"[:300]))
            if len(found.broke) >= 5:
                break
        if len(lines) > before and len(corpus) < 1000:
            corpus.append(data)
            found.kept += 1
        found.inputs += 1
    return found


@contextlib.contextmanager
def watched(lines: set[tuple[str, int]]) -> Iterator[None]:
    """Add every line of the package that runs within to ``lines``."""
    package = str(ROOT / "edgewatch")

    def trace(frame: FrameType, event: str, _: Any) -> Any:
        if not frame.f_code.co_filename.startswith(package):
            return None
        lines.add((frame.f_code.co_filename, frame.f_lineno))
        return trace

    earlier = sys.gettrace()
    sys.settrace(trace)
    try:
        yield
    finally:
        sys.settrace(earlier)


# ---------------------------------------------------------------------- targets

_TOPICS = Topics.of(StationSettings())
_STAMP = Stamp(boot="b", monotonic_s=0.0, utc_s=0.0, synced=True)
_ORDER = {"id": "1", "sent": "2026-03-01T06:00:00Z", "who": "desk"}
_ORDER_PARTS: dict[str, dict[str, Any]] = {
    "expect": {"grade": "C45", "heat": "H1", "order_number": "7", "wheel_surface_speed_m_s": 35.5},
    "acknowledge": {"alert": "nonconforming_bar"},
    "release": {"reason": "seen"},
    "view": {},
    "teach": {"grade": "C45", "bars": 5},
}


def _order(data: bytes) -> None:
    """Any bytes to each order: an order or a refusal, and an answer that is strict JSON."""
    for name in ORDERS:
        found = read_order(_TOPICS.order(name), data, topics=_TOPICS)
        assert isinstance(found, (Order, Refusal))
        raw = messages.encode(messages.finish("order", answer(found), _STAMP, seq=1))
        json.loads(raw.decode("utf-8"), parse_constant=_fail)


def _fail(text: str) -> None:
    raise AssertionError(f"{text} in a message")


def _order_topic(data: bytes) -> None:
    """Any topic and response topic, as far as MQTT lets them be text."""
    text = data.decode("utf-8", "surrogateescape")
    found = read_order(f"{_TOPICS.base}/order/{text}", b"{}", topics=_TOPICS, response_topic=text)
    if found is not None:
        messages.encode(messages.finish("order", answer(found), _STAMP, seq=1))


def _time(data: bytes) -> None:
    """Any text as a time; what is read can be written and read again."""
    text = data.decode("latin-1")
    for read in (read_time, lambda part: journal_command.read_when("--since", part, now_utc_s=1e9)):
        with contextlib.suppress(ValueError, SettingsError):
            utc_s = read(text)
            assert abs(read_time(write_time(utc_s)) - utc_s) < 0.001


def _settings(data: bytes) -> None:
    """Any bytes as a configuration."""
    with _folder() as folder:
        path = folder / "station.toml"
        path.write_bytes(data)
        with contextlib.suppress(SettingsError):
            read_settings(read_toml(path), file="station.toml").sight_optics()


def _band(data: bytes) -> None:
    """Any bytes as a band file."""
    with _folder() as folder:
        path = folder / "C45.toml"
        path.write_bytes(data)
        with contextlib.suppress(SettingsError):
            read_band(read_toml(path), file="C45.toml")


def _modbus(data: bytes) -> None:
    """Any bytes as the answer of a relay."""
    for request, find in (
        (relayframes.write_coil(1, 0, True), relayframes.find_written),
        (relayframes.read_coil(1, 0), relayframes.find_coil),
    ):
        with contextlib.suppress(relayframes.FrameError):
            find(request, data)


def _journal(data: bytes) -> None:
    """Any bytes as a journal of ours: it opens or is set aside, and records go on above."""
    with _folder() as folder:
        path = folder / "j.sqlite"
        path.write_bytes(data)
        (folder / "j.sqlite.seq").write_bytes(_journal_seed()[1])
        journal = Journal(path)
        try:
            journal.pending(100)
            journal.rows()
            journal.latest("condition")
            (seq,) = journal.append([alert()], stamp=stamp(1e9))
            assert seq > 12
        finally:
            journal.close()


def _journal_reading(data: bytes) -> None:
    """Any bytes given to the ``journal`` command: records or one line, and the file is left alone."""
    with _folder() as folder:
        path = folder / "j.sqlite"
        path.write_bytes(data)
        with contextlib.suppress(DeviceError):
            reading.read_findings(path)
            list(reading.read_records(path, ("bar", "window", "condition")))
        assert path.read_bytes() == data


@contextlib.contextmanager
def _folder() -> Iterator[Path]:
    memory = Path("/dev/shm")
    with tempfile.TemporaryDirectory(dir=memory if memory.is_dir() else None) as name:
        yield Path(name)


_SEED: list[tuple[bytes, bytes]] = []


def _journal_seed() -> tuple[bytes, bytes]:
    """Bytes of a small journal and of its number file."""
    if not _SEED:
        with _folder() as folder:
            path = folder / "j.sqlite"
            journal = Journal(path)
            for number in range(4):
                journal.append([window(number), bar(number), condition()], stamp=stamp(1e9 + number), state={"x": 1})
            journal.delivered([1, 2, 3])
            journal.close()
            _SEED.append((path.read_bytes(), Path(f"{path}.seq").read_bytes()))
    return _SEED[0]


def targets() -> dict[str, Target]:
    """Every target by name."""
    sample = (ROOT / "deploy" / "station.toml").read_bytes()
    bands = tuple(path.read_bytes() for path in sorted((ROOT / "calib").glob("**/*.toml")))[:4]
    journal = (_journal_seed()[0],)
    orders = tuple(json.dumps({**_ORDER, **part}).encode() for part in _ORDER_PARTS.values())
    small = (
        b"[station]\nname='a'\n[optics]\nmm_per_px=0.5\ncontact_px=[1,2]\n[relay]\nkind='frames'\non_frame='A0 01'\n"
    )
    return {
        "orders": Target(run=_order, seeds=orders),
        "order topics": Target(run=_order_topic, seeds=(b"expect", b"a/b", b"desk/answers", _TOPICS.base.encode())),
        "times": Target(
            run=_time, seeds=(b"2026-03-01T06:00:00.5+01:00", b"1990-12-31T23:59:60Z", b"8h", b"2026-03-01")
        ),
        "relay answers": Target(run=_modbus, seeds=(relayframes.write_coil(1, 0, True), b"\x01\x01\x01\x00\x51\x88")),
        "settings": Target(run=_settings, seeds=(small, sample), share=0.1),
        "bands": Target(run=_band, seeds=bands, share=0.1),
        "journal file": Target(run=_journal, seeds=journal, share=0.01),
        "journal reading": Target(run=_journal_reading, seeds=journal, share=0.02),
    }
