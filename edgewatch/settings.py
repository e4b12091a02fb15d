"""Settings: a dict (from TOML) -> frozen values. Core: the file is read elsewhere.

Every key is declared once, with its default, what is allowed, and a line of help; the reader, the error texts, the
commented sample and its test all use that declaration. All errors are reported together; each names file, key, value
and what is allowed.
"""

from __future__ import annotations

import dataclasses
import difflib
import re
import reprlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, TypeVar

from edgewatch.errors import SettingsError
from edgewatch.sight.optics import Optics

_TOPIC_LEVEL = re.compile(r"[^\s/+#$\x00-\x1f][^/+#\x00-\x1f]{0,63}")
GRADE_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._+-]{0,39}")
"""A grade is also a file name and part of messages: letters, digits, dot, plus, minus, underline; 40 at most."""

MIN_SIDE_PX = 16
"""Shortest side of a picture that the sight works on (px)."""

_SECRET = re.compile(r"pass|secret|token|key|pin", re.IGNORECASE)
"""A key that is not known and looks like these may hold a secret: its value is not repeated in an error."""

_URL_USER = re.compile(r"//[^/\s]*@")
"""User and password of a URL (RFC 3986, section 3.2.1)."""

Check = Callable[[Any], Any]
S = TypeVar("S")


class _Shorten(reprlib.Repr):
    """``repr`` for errors: short, on one line, and safe. TOML has whole numbers of any length and tables of any depth,
    and the usual ``repr`` raises on both.
    """

    def repr_int(self, x: int, level: int) -> str:
        return repr(x) if x.bit_length() <= 256 else f"(a whole number of {x.bit_length()} bits)"


_shorten = _Shorten()
_shorten.maxstring = _shorten.maxother = 60
_shorten.maxlevel = 3


class _WrongValueError(Exception):
    """Carries what is allowed."""


def _declare(default: Any, check: Check, says: str) -> Any:
    """One key: its default, its check (returns the value to keep or raises), one line of help."""
    return field(default=default, metadata={"check": check, "help": says})


def _show(value: Any) -> str:
    """Return the value as an error repeats it; user and password of a URL are left out."""
    if isinstance(value, str):
        return _shorten.repr(_URL_USER.sub("//", value[:4096]))  # before it is cut: the @ that tells could be lost
    return _URL_USER.sub("//", _shorten.repr(value))


def _name(key: object) -> str:
    """Return a key that is not ours as an error repeats it: bare where TOML would have it bare, else quoted."""
    return key if isinstance(key, str) and re.fullmatch(r"[A-Za-z0-9_-]{1,60}", key) else _show(key)


def _is_between(value: Any, low: float, high: float) -> bool:
    """Whether it is a number (true and false are none, NaN is outside) from ``low`` to ``high``."""
    return isinstance(value, (int, float)) and not isinstance(value, bool) and low <= value <= high


def _number(low: float, high: float) -> Check:
    def check(value: Any) -> float:
        if not _is_between(value, low, high):
            raise _WrongValueError(f"a number from {low:.12g} to {high:.12g}")
        return float(value)

    return check


def _whole(low: int, high: int) -> Check:
    def check(value: Any) -> int:
        if not (isinstance(value, int) and not isinstance(value, bool) and low <= value <= high):
            raise _WrongValueError(f"a whole number from {low} to {high}")
        return value

    return check


def _flag() -> Check:
    def check(value: Any) -> bool:
        if not isinstance(value, bool):
            raise _WrongValueError("true or false")
        return value

    return check


def _choice(*names: str) -> Check:
    def check(value: Any) -> str:
        if not (isinstance(value, str) and value in names):
            raise _WrongValueError("one of " + ", ".join(f'"{name}"' for name in names))
        return value

    return check


def _text(longest: int = 1024, *, least: int = 0) -> Check:
    def check(value: Any) -> str:
        if not (isinstance(value, str) and least <= len(value) <= longest and value.isprintable()):
            raise _WrongValueError(f"text of {least} to {longest} printable characters")
        return value

    return check


def _matching(pattern: re.Pattern[str], allowed: str, *, empty: bool = False) -> Check:
    def check(value: Any) -> str:
        good = isinstance(value, str) and value.isprintable() and (pattern.fullmatch(value) or (empty and not value))
        if not good:
            raise _WrongValueError(allowed)
        return str(value)

    return check


def _topic_level() -> Check:
    return _matching(_TOPIC_LEVEL, "one topic level: 1 to 64 characters without /, +, # and control characters")


def _hex_bytes() -> Check:
    def check(value: Any) -> bytes:
        try:
            frame = bytes.fromhex(value) if isinstance(value, str) else None
        except ValueError:
            frame = None
        if frame is None or len(frame) > 256:
            raise _WrongValueError('bytes in hexadecimal such as "A0 01 01 A2", 256 at most')
        return frame

    return check


def _numbers(count: int, low: float, high: float, *, whole: bool = False) -> Check:
    def check(value: Any) -> tuple[float, ...]:
        good = isinstance(value, (list, tuple)) and len(value) in (0, count)
        if good:
            good = all(_is_between(part, low, high) for part in value)
        if good and whole:
            good = all(float(part).is_integer() for part in value)
        if not good:
            kind = "whole numbers" if whole else "numbers"
            raise _WrongValueError(f"a list of {count} {kind} from {low:.12g} to {high:.12g}, or an empty list")
        return tuple(int(part) if whole else float(part) for part in value)

    return check


def _names(pattern: re.Pattern[str], allowed: str) -> Check:
    def check(value: Any) -> tuple[str, ...]:
        if not (isinstance(value, (list, tuple)) and all(isinstance(v, str) and pattern.fullmatch(v) for v in value)):
            raise _WrongValueError(allowed)
        return tuple(value)

    return check


@dataclass(frozen=True, slots=True, kw_only=True)
class StationSettings:
    """Who this station is; the four make its topics."""

    root: str = _declare("edgewatch", _topic_level(), "first topic level")
    site: str = _declare("site", _topic_level(), "works or mill")
    line: str = _declare("line", _topic_level(), "line within the site")
    name: str = _declare("station", _topic_level(), "station on the line")


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceSettings:
    """Where pictures come from."""

    uri: str = _declare(
        "",
        _text(),
        "camera:/dev/video0, clip:PATH, pipe:- or pipe:FIFO, stream:URL, rehearsal:",
    )
    width_px: int = _declare(640, _whole(16, 16384), "picture width delivered by the source (px)")
    height_px: int = _declare(400, _whole(16, 16384), "picture height delivered by the source (px)")
    pixel_format: str = _declare(
        "gray8", _choice("gray8", "yuv420p"), "layout of raw frames on a pipe (yuv420p: luminance is used)"
    )
    region_px: tuple[int, ...] = _declare(
        (), _numbers(4, 0, 16384, whole=True), "region of interest x, y, width, height in source pixels; [] is all"
    )
    binning: int = _declare(1, _whole(1, 8), "average this many pixels each way into one")
    stall_s: float = _declare(2.0, _number(0.05, 600), "a live source silent for longer is stalled (s)")


@dataclass(frozen=True, slots=True, kw_only=True)
class CameraSettings:
    """What is asked of a V4L2 camera; read back and reported where it took something else."""

    fourcc: str = _declare(
        "GREY", _matching(re.compile(r"[ -~]{4}"), "a V4L2 pixel format of four characters"), "V4L2 pixel format"
    )
    gain: float = _declare(0.0, _number(-1, 1e6), "manual gain in the driver's own unit; -1 leaves it alone")
    exposure_unit_ms: float = _declare(
        0.1, _number(1e-6, 1000), "one step of the driver's absolute exposure control (ms); V4L2's is 0.1"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class OpticsSettings:
    """Scale, contact point, stream axis and camera timing, in pixels of the source."""

    mm_per_px: float = _declare(1.0, _number(1e-3, 100), "scale in the plane of the stream (mm per px)")
    contact_px: tuple[float, ...] = _declare((0.0, 0.0), _numbers(2, -65536, 65536), "contact point x, y (px)")
    direction_deg: float = _declare(0.0, _number(-360, 360), "stream axis: 0 along +x, positive towards +y (down)")
    exposure_ms: float = _declare(2.5, _number(1e-3, 1000), "exposure (ms)")
    fps: float = _declare(200.0, _number(0.1, 100_000), "frames a second")


@dataclass(frozen=True, slots=True, kw_only=True)
class WheelSettings:
    """The grinding wheel."""

    surface_speed_m_s: float = _declare(
        0.0, _number(0, 200), "surface speed of the wheel (m/s); 0: not known, sparks tell it"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class FigureSettings:
    """How figures are formed over time."""

    window_s: float = _declare(0.25, _number(0.02, 10), "shortest time for which figures are published (s)")
    begin_s: float = _declare(0.05, _number(0.001, 5), "sparks for this long begin a contact (s)")
    gap_s: float = _declare(0.15, _number(0.01, 10), "no sparks for this long end a contact (s)")
    least_streaks: float = _declare(
        2.0, _number(0.01, 1000), "streaks a frame, on average over begin_s or gap_s, that count as sparks"
    )
    longest_s: float = _declare(120.0, _number(1, 3600), "a contact longer than this is ended and said (s)")


@dataclass(frozen=True, slots=True, kw_only=True)
class JudgeSettings:
    """What is expected and at which risks."""

    bands: str = _declare("bands", _text(least=1), "folder of band files, relative to this file")
    expect: str = _declare(
        "", _matching(GRADE_NAME, "a grade name, or empty: judge nothing", empty=True), "grade on the line at start"
    )
    false_alarm: float = _declare(
        0.001, _number(1e-6, 0.2), "highest probability that a bar inside its band is called nonconforming"
    )
    miss: float = _declare(
        0.01, _number(1e-6, 0.2), "highest probability that a bar of another taught grade is called conforming"
    )
    least_streaks: int = _declare(
        50, _whole(1, 1_000_000), "a contact with fewer streaks than this is inconclusive: too few streaks"
    )
    clock_must_sync: bool = _declare(
        True, _flag(), "while the clock is not synchronised no bar of a live source is called conforming"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class JournalSettings:
    """The journal and outbox: one SQLite file."""

    file: str = _declare("edgewatch.sqlite", _text(least=1), "journal file, relative to this file")
    most_mb: float = _declare(1024.0, _number(1, 1e6), "size at which the oldest delivered records give way (MB)")
    thin_windows_mb: float = _declare(
        64.0,
        _number(0.2, 1e6),
        "unsent window messages above this size (MB) are thinned evenly, and counted; a quarter of most_mb at most",
    )
    keep_damaged: int = _declare(
        3, _whole(1, 1000), "damaged journals kept beside the journal; beyond that the oldest are deleted, and said"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class EvidenceSettings:
    """Pictures kept of nonconforming bars."""

    folder: str = _declare("evidence", _text(), "folder, relative to this file; empty keeps none")
    most_mb: float = _declare(200.0, _number(0.1, 1e6), "size at which the oldest pictures give way (MB)")
    pictures: int = _declare(3, _whole(1, 50), "pictures a nonconforming bar")


@dataclass(frozen=True, slots=True, kw_only=True)
class MqttSettings:
    """The broker."""

    enabled: bool = _declare(False, _flag(), "publish over MQTT")
    host: str = _declare("localhost", _text(255), "broker's host name or address")
    port: int = _declare(1883, _whole(1, 65535), "broker's port; 1883 is plain, 8883 is TLS")
    version: str = _declare("5", _choice("5", "3.1.1"), "MQTT version")
    client_id: str = _declare("", _text(128), "client identifier; empty makes one from the station's name")
    user: str = _declare("", _text(256), "user name; empty: none")
    password_file: str = _declare("", _text(), "file whose first line is the password; none but its owner may read it")
    tls: bool = _declare(False, _flag(), "TLS; the broker's certificate is verified")
    ca_file: str = _declare("", _text(), "certificate authority file (PEM); empty: the system's")
    cert_file: str = _declare("", _text(), "the station's own certificate (PEM); empty: none")
    key_file: str = _declare("", _text(), "its key (PEM); none but its owner may read it")
    keepalive_s: int = _declare(20, _whole(2, 65535), "keep alive (s)")


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderSettings:
    """Orders over MQTT."""

    enabled: bool = _declare(False, _flag(), "take orders over MQTT")
    most_bytes: int = _declare(4096, _whole(64, 1_000_000), "a larger order is refused (bytes)")
    most_per_minute: int = _declare(60, _whole(1, 100_000), "more orders a minute than this are refused")
    oldest_s: float = _declare(60.0, _number(1, 86400), "an order sent longer ago than this is refused (s)")


@dataclass(frozen=True, slots=True, kw_only=True)
class RelaySettings:
    """The process stop: never a safety function."""

    kind: str = _declare(
        "none",
        _choice("none", "line", "frames", "modbus"),
        "none, a serial control line, a byte-frame board, or a coil over Modbus RTU",
    )
    port: str = _declare("", _text(), "serial port or pyserial URL")
    baud: int = _declare(9600, _whole(50, 4_000_000), "bits a second, for byte frames and Modbus")
    parity: str = _declare("none", _choice("none", "even", "odd"), "parity, for byte frames and Modbus")
    control_line: str = _declare("rts", _choice("rts", "dtr"), "which control line drives the relay")
    sense_line: str = _declare(
        "none",
        _choice("none", "cts", "dsr", "dcd"),
        "input line that a spare contact of the relay closes while it is energised: read back; none: not wired",
    )
    energise_to: str = _declare(
        "run", _choice("run", "stop"), "run: a dead board or a cut wire stops the line (fail-safe); stop: the opposite"
    )
    on_frame: bytes = _declare(b"", _hex_bytes(), "bytes that energise a byte-frame board's relay")
    off_frame: bytes = _declare(b"", _hex_bytes(), "bytes that release it")
    on_answer: bytes = _declare(b"", _hex_bytes(), "answer expected to on_frame; empty: none")
    off_answer: bytes = _declare(b"", _hex_bytes(), "answer expected to off_frame; empty: none")
    answer_s: float = _declare(0.5, _number(0.01, 10), "longest wait for the answer (s)")
    unit: int = _declare(1, _whole(1, 247), "Modbus unit of the relay board")
    coil: int = _declare(0, _whole(0, 65535), "address of the coil, counted from 0 (the board's relay 1 is mostly 0)")
    latch: bool = _declare(True, _flag(), "stay stopped until released by an order or by hand")
    blind_stop_s: float = _declare(
        0.0, _number(0, 86400), "stop the line when the station has been unable to see for this long (s); 0: never"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class ContactSettings:
    """Contact input: a switch or an output of the line's control that is closed while a bar is at the wheel."""

    port: str = _declare("", _text(), "serial port of its own, or pyserial URL; empty: no such input")
    line: str = _declare(
        "cts", _choice("cts", "dsr", "dcd", "ri"), "input line; the switch lies between it and RTS or DTR"
    )
    late_s: float = _declare(
        1.0, _number(0.05, 60), "a bar at the wheel for this long without sparks: the station does not see (s)"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class RehearsalSettings:
    """The simulated line behind the source ``rehearsal:``."""

    seed: int = _declare(1, _whole(0, 2**32 - 1), "seed of everything random")
    bars: int = _declare(12, _whole(1, 1_000_000), "bars on the line")
    foreign: int = _declare(2, _whole(0, 1_000_000), "of these, bars of another grade")
    contact_s: float = _declare(1.2, _number(0.1, 600), "contact time (s)")
    pause_s: float = _declare(0.5, _number(0.05, 600), "pause between bars (s)")
    grade: str = _declare("C45", _matching(GRADE_NAME, "a grade name"), "grade that the line expects")
    foreign_grades: tuple[str, ...] = _declare(
        ("C15", "C80"), _names(GRADE_NAME, "a list of grade names"), "grades that the foreign bars are of, in turn"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """The whole configuration of one station."""

    station: StationSettings = StationSettings()
    source: SourceSettings = SourceSettings()
    camera: CameraSettings = CameraSettings()
    optics: OpticsSettings = OpticsSettings()
    wheel: WheelSettings = WheelSettings()
    figures: FigureSettings = FigureSettings()
    judge: JudgeSettings = JudgeSettings()
    journal: JournalSettings = JournalSettings()
    evidence: EvidenceSettings = EvidenceSettings()
    mqtt: MqttSettings = MqttSettings()
    orders: OrderSettings = OrderSettings()
    relay: RelaySettings = RelaySettings()
    contact: ContactSettings = ContactSettings()
    rehearsal: RehearsalSettings = RehearsalSettings()

    def source_optics(self) -> Optics:
        """Optics of the pictures as the source delivers them. Raises ``SettingsError``."""
        source, optics = self.source, self.optics
        try:
            return Optics(
                width_px=source.width_px,
                height_px=source.height_px,
                mm_per_px=optics.mm_per_px,
                contact_px=(optics.contact_px[0], optics.contact_px[1]) if optics.contact_px else (0.0, 0.0),
                direction_deg=optics.direction_deg,
                exposure_ms=optics.exposure_ms,
                fps=optics.fps,
            )
        except ValueError as error:
            raise SettingsError(f"optics.{error}") from error

    def sight_optics(self) -> Optics:
        """Optics of the pictures that the sight gets: after region of interest and binning.

        Raises ``SettingsError`` when the parts do not fit together.
        """
        source, whole = self.source, self.source_optics()
        x, y, width, height = source.region_px or (0, 0, source.width_px, source.height_px)
        if x + width > source.width_px or y + height > source.height_px:
            raise SettingsError(
                f"source.region_px = {list(source.region_px)}: reaches beyond the picture of "
                f"{source.width_px} x {source.height_px} px"
            )
        if min(width, height) // source.binning < MIN_SIDE_PX:
            raise SettingsError(
                f"source.region_px = {list(source.region_px)}, source.binning = {source.binning}: leave a picture of "
                f"{width // source.binning} x {height // source.binning} px; at least {MIN_SIDE_PX} px each way"
            )
        try:
            return whole.cropped(x, y, width, height).binned(source.binning)
        except ValueError as error:
            raise SettingsError(f"source.region_px = {list(source.region_px)}: {error}") from error


def sections() -> dict[str, type[Any]]:
    """Name -> settings class of every section, in the order of the sample file."""
    return {part.name: type(part.default) for part in dataclasses.fields(Settings)}


def allowed(section: str, key: str) -> str:
    """Return what the key may hold, in the words that the error about a wrong value has."""
    declared = {part.name: part for part in dataclasses.fields(sections()[section])}
    try:
        declared[key].metadata["check"](object())
    except _WrongValueError as error:
        return str(error)
    raise ValueError(f"{section}.{key} takes anything")


def _near(name: str, names: list[str]) -> str:
    close = difflib.get_close_matches(name, names, n=1)
    return f'; did you mean "{close[0]}"?' if close else f"; known are {', '.join(names)}"


def _read_section(name: str, kind: type[S], data: Mapping[str, Any], file: str, refused: dict[str, str]) -> S:
    """Return the section with what could be kept; add the rest to ``refused``: key -> problem."""
    declared = {part.name: part for part in dataclasses.fields(kind)}  # type: ignore[arg-type]
    kept: dict[str, Any] = {}
    for key, value in data.items():
        where = f"{name}.{_name(key)}"
        if key not in declared:
            shown = "(not repeated)" if _SECRET.search(where) else _show(value)
            refused[where] = f"{file}: {where} = {shown}: no such key{_near(_name(key), list(declared))}"
            continue
        try:
            kept[key] = declared[key].metadata["check"](value)
        except _WrongValueError as error:
            refused[where] = f"{file}: {where} = {_show(value)}: allowed is {error}"
    return kind(**kept)


def read_settings(data: Mapping[str, Any], *, file: str) -> Settings:
    """Check ``data`` (a parsed TOML document) and return frozen settings; ``file`` is only named in errors.

    Raises ``SettingsError`` with every problem found: unknown sections and keys, wrong types, values out of range,
    and settings that contradict each other.
    """
    refused: dict[str, str] = {}
    known = sections()
    parts: dict[str, Any] = {}
    for name, content in data.items():
        shown = _name(name)
        if name not in known:
            refused[shown] = f"{file}: [{shown}]: no such section{_near(shown, list(known))}"
        elif not isinstance(content, Mapping):
            refused[shown] = f"{file}: {name} = {_show(content)}: allowed is a section [{name}] with keys"
        else:
            parts[name] = _read_section(name, known[name], content, file, refused)
    settings = Settings(**parts)
    # A rule about a key whose value was refused would speak of the default instead: it has to wait for the next try.
    problems = [
        f"{file}: {text}"
        for keys, text in _contradictions(settings)
        if not any(key in refused or key.split(".")[0] in refused for key in keys.split())
    ]
    problems = [*refused.values(), *problems]
    if problems:
        raise SettingsError(*problems)
    return settings


_PICTURE_KEYS = (
    "source.width_px source.height_px source.region_px source.binning "
    "optics.mm_per_px optics.contact_px optics.direction_deg optics.exposure_ms optics.fps"
)


def _contradictions(settings: Settings) -> list[tuple[str, str]]:
    """Settings that are each allowed and do not fit together: the keys concerned, and what is wrong."""
    relay, mqtt, rehearsal = settings.relay, settings.mqtt, settings.rehearsal
    figures = settings.figures
    rules: tuple[tuple[str, object, str], ...] = (
        (
            "relay.kind relay.port",
            relay.kind == "none" or relay.port,
            f'relay.port = "": with relay.kind = "{relay.kind}" a serial port or pyserial URL is needed',
        ),
        (
            "relay.kind relay.on_frame relay.off_frame",
            relay.kind != "frames" or (relay.on_frame and relay.off_frame),
            'relay.on_frame, relay.off_frame: both are needed with relay.kind = "frames"',
        ),
        (
            "relay.kind relay.on_frame relay.off_frame",
            relay.kind != "frames" or relay.on_frame != relay.off_frame or not relay.on_frame,
            "relay.on_frame, relay.off_frame: the same bytes cannot do both",
        ),
        (
            "relay.kind relay.port contact.port",
            relay.kind == "none" or not relay.port or settings.contact.port != relay.port,
            f"contact.port = {settings.contact.port!r}: is the relay's; the contact input needs a port of its own",
        ),
        (
            "relay.kind relay.blind_stop_s",
            relay.blind_stop_s == 0 or relay.kind != "none",
            f'relay.blind_stop_s = {relay.blind_stop_s:g}: stops nothing with relay.kind = "none"',
        ),
        (
            "journal.most_mb journal.thin_windows_mb",
            settings.journal.thin_windows_mb <= settings.journal.most_mb / 4,
            f"journal.thin_windows_mb = {settings.journal.thin_windows_mb:g}: at most a quarter of journal.most_mb = "
            f"{settings.journal.most_mb:g}, so that bars and alerts have the rest",
        ),
        (
            "mqtt.enabled mqtt.host",
            not mqtt.enabled or mqtt.host,
            'mqtt.host = "": needed with mqtt.enabled = true',
        ),
        (
            "mqtt.cert_file mqtt.key_file",
            bool(mqtt.cert_file) == bool(mqtt.key_file),
            "mqtt.cert_file, mqtt.key_file: give both or neither",
        ),
        (
            "mqtt.tls mqtt.ca_file mqtt.cert_file",
            mqtt.tls or not (mqtt.ca_file or mqtt.cert_file),
            "mqtt.tls = false: certificates are given and the connection would be plain; set true or remove them",
        ),
        (
            "mqtt.user mqtt.password_file",
            mqtt.user or not mqtt.password_file,
            'mqtt.user = "": needed with mqtt.password_file',
        ),
        (
            "orders.enabled mqtt.enabled",
            mqtt.enabled or not settings.orders.enabled,
            "orders.enabled = true: only with mqtt.enabled = true",
        ),
        (
            "figures.longest_s figures.window_s",
            figures.longest_s >= figures.window_s,
            f"figures.longest_s = {figures.longest_s:g}: at least figures.window_s = {figures.window_s:g}",
        ),
        (
            "rehearsal.foreign rehearsal.bars",
            rehearsal.foreign <= rehearsal.bars,
            f"rehearsal.foreign = {rehearsal.foreign}: at most rehearsal.bars = {rehearsal.bars}",
        ),
        (
            "rehearsal.foreign rehearsal.foreign_grades",
            not rehearsal.foreign or rehearsal.foreign_grades,
            "rehearsal.foreign_grades = []: at least one grade while rehearsal.foreign is not 0",
        ),
        (
            "rehearsal.grade rehearsal.foreign rehearsal.foreign_grades",
            not rehearsal.foreign or rehearsal.grade not in rehearsal.foreign_grades,
            f"rehearsal.foreign_grades = {list(rehearsal.foreign_grades)}: holds the expected grade itself",
        ),
    )
    found = [(keys, text) for keys, holds, text in rules if not holds]
    try:
        settings.sight_optics()
    except SettingsError as error:
        found.append((_PICTURE_KEYS, str(error)))
    return found
