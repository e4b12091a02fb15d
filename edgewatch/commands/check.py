"""``edgewatch check``: is this station fit to run?"""

from __future__ import annotations

import argparse
import dataclasses
import json
import os
import shutil
import sys
import tempfile
import time
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path

from edgewatch.commands.options import add_bands, add_optics, add_station, load_settings, with_picture_size
from edgewatch.commands.watch import LIVE
from edgewatch.errors import DeviceError, SettingsError, StalledError
from edgewatch.frames.newest import Newest
from edgewatch.frames.registry import open_source
from edgewatch.frames.values import Frame, Source
from edgewatch.judge.causes import CAUSES
from edgewatch.link.connection import Connection, ConnectionLostError
from edgewatch.link.secrets import make_tls, read_password
from edgewatch.link.state import REASONS, LinkState, from_error
from edgewatch.monitor.blindness import FLAG_CAUSES
from edgewatch.record.bandfiles import load_bands
from edgewatch.record.reading import open_journal
from edgewatch.record.rows import DamagedError, check_whole
from edgewatch.relay.port import open_relay
from edgewatch.relay.serialport import SerialPort
from edgewatch.settings import Settings
from edgewatch.sight import native
from edgewatch.sight.detections import PictureFlag
from edgewatch.sight.picture import reduce_picture
from edgewatch.sight.sight import Sight
from edgewatch.station.clock import Clock
from edgewatch.wire.topics import Topics

EXAMPLE = "edgewatch check --station station.toml"

GOOD, NOTE, UNFIT, MISSING, WRONG = "good", "note", "unfit", "missing", "wrong"
"""Results, from best to worst: as it should be; worth knowing; the station should not run so; a device or server is
not there; the configuration cannot be used."""
RESULTS = (GOOD, NOTE, UNFIT, MISSING, WRONG)

LOOK_S = 3.0
"""How long a live source is watched (s): enough for its rate to 1 % at 100 frames a second."""
OPEN_S = 10.0
"""Longest wait for the first picture (s): a camera takes its time to start."""
LOOK_FRAMES = 64
"""How many frames of a clip are looked at."""
RATE_SHARE = 0.15
"""Deviation of the rate that makes a source unfit."""
FLAGGED_SHARE = 0.5
"""A flag on more than this share of the pictures is a cause."""
NOT_THERE = frozenset({"unreachable", "unknown_host", "no_answer", "closed"})
"""Reasons of the link that mean that there is no broker."""


@dataclasses.dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One line of the result."""

    check: str
    result: str
    detail: str


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``check``."""
    add_station(parser)
    parser.add_argument("--source", metavar="URI", help="camera:DEV, clip:PATH, pipe:- or FIFO, stream:URL, rehearsal:")
    parser.add_argument("--expect", metavar="GRADE", help="grade on the line")
    parser.add_argument("--journal", metavar="FILE", help="journal file (overrides journal.file)")
    add_bands(parser)
    add_optics(parser)
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(args: argparse.Namespace) -> int:
    """Print what was found; 0 fit, 1 not fit, 2 configuration that cannot be used, 3 something is not there."""
    settings, folder = load_settings(args)
    checks: tuple[tuple[str, Callable[[Settings, Path], Iterator[Finding]]], ...] = (
        ("source", _source),
        ("bands", _bands),
        ("broker", _broker),
        ("relay", _relay),
        ("contact input", _contact),
        ("journal", _journal),
        ("evidence", _evidence),
        ("disk", _disk),
        ("clock", _clock),
    )
    findings = [Finding(check="configuration", result=GOOD, detail="all keys are understood"), _sight()]
    for name, check in checks:
        print(f"edgewatch: checking {name} …", file=sys.stderr)
        findings += _tried(name, check, settings, folder)
    worst = max((finding.result for finding in findings), key=RESULTS.index)
    if args.json:
        fit = RESULTS.index(worst) <= RESULTS.index(NOTE)
        print(json.dumps({"fit": fit, "findings": [dataclasses.asdict(one) for one in findings]}, ensure_ascii=False))
    else:
        for one in findings:
            print(f"{one.check:<14} {one.result:<8} {one.detail}")
    problems = tuple(f"{one.check}: {one.detail}" for one in findings if one.result == worst)
    if worst == WRONG:
        raise SettingsError(*problems)
    if worst == MISSING:
        raise DeviceError("; ".join(problems))
    return int(worst == UNFIT)


def _tried(
    name: str, check: Callable[[Settings, Path], Iterator[Finding]], settings: Settings, folder: Path
) -> list[Finding]:
    found: list[Finding] = []
    try:
        found.extend(check(settings, folder))
    except SettingsError as error:
        found += [Finding(check=name, result=WRONG, detail=problem) for problem in error.problems]
    except DeviceError as error:
        found.append(Finding(check=name, result=MISSING, detail=str(error)))
    return found


def _sight() -> Finding:
    """Whether the steps that cost most are compiled."""
    if native.LIBRARY is None:
        detail = f"runs its Python forms, at half the speed: {native.WHY_NOT}"
        return Finding(check="sight", result=NOTE, detail=detail)
    return Finding(check="sight", result=GOOD, detail="its costly steps are compiled")


def _source(settings: Settings, folder: Path) -> Iterator[Finding]:
    """It opens, delivers pictures of the right size at the right rate, and they can be seen on."""
    source = open_source(settings.source.uri, settings)
    info = source.info
    if info.live:
        source = Newest(source)
    try:
        frames, rate = _look(source, live=info.live)
    finally:
        source.close()
    name = settings.source.uri
    if not frames:
        yield Finding(check="source", result=MISSING, detail=f"{name}: opens and delivers no picture")
        return
    for deviation in info.deviations:
        result = NOTE if deviation.startswith(("pixel format", "rate not told")) else UNFIT
        yield Finding(check="source", result=result, detail=f"{name}: {deviation}")
    height, width = frames[0].picture.shape
    wanted = (settings.source.width_px, settings.source.height_px)
    size = f"{len(frames)} pictures of {width} x {height} px"
    if not info.live:
        settings = with_picture_size(settings, width, height)
    elif (width, height) != wanted:
        detail = f"{name}: {size}; source.width_px x source.height_px is {wanted[0]} x {wanted[1]}"
        yield Finding(check="source", result=UNFIT, detail=detail)
        return
    if info.live:
        yield _rate(name, rate, settings.optics.fps, size)
    else:
        yield Finding(check="source", result=GOOD, detail=f"{name}: {size}")
    yield from _pictures(frames, settings)


def _look(source: Source, *, live: bool) -> tuple[list[Frame], float]:
    """The last frames of a few seconds, or the first of a clip, and the rate at which they came (frames/s, or NaN)."""
    frames: list[Frame] = []
    first: tuple[int, float] | None = None
    rate = float("nan")
    end_s = time.monotonic() + OPEN_S
    while time.monotonic() < end_s and (live or len(frames) < LOOK_FRAMES):
        try:
            frame = source.read(end_s - time.monotonic())
        except StalledError:
            break
        if frame is None:
            break
        now_s = time.monotonic()
        if first is None:
            first = (frame.index, now_s)
            end_s = now_s + LOOK_S if live else end_s
        elif now_s > first[1]:
            rate = (frame.index - first[0]) / (now_s - first[1])
        frames = [*frames[-LOOK_FRAMES + 1 :], frame]
    return frames, rate


def _rate(name: str, rate: float, wanted: float, size: str) -> Finding:
    detail = f"{name}: {size}, {rate:.1f} frames/s (optics.fps is {wanted:g})"
    right = abs(rate - wanted) <= RATE_SHARE * wanted
    return Finding(check="source", result=GOOD if right else UNFIT, detail=detail)


def _pictures(frames: list[Frame], settings: Settings) -> Iterator[Finding]:
    """Whether the pictures can be seen on, by the sight's own flags."""
    sight = Sight(settings.sight_optics())
    region, binning = settings.source.region_px, settings.source.binning
    lights = [sight.look(reduce_picture(frame.picture, region, binning)).light for frame in frames]
    causes = [
        cause
        for flag, cause in FLAG_CAUSES.items()
        if flag in (PictureFlag.NO_LIGHT, PictureFlag.SATURATED, PictureFlag.STRAY_LIGHT)
        and sum(bool(light.flags & flag) for light in lights) > FLAGGED_SHARE * len(lights)
    ]
    for cause in causes:
        yield Finding(check="pictures", result=UNFIT, detail=f"{cause}: {CAUSES[cause].sentence}")
    if len(frames) > 1 and settings.source.uri.startswith("camera:"):
        first = frames[0].picture
        if all((frame.picture == first).all() for frame in frames[1:]):
            yield Finding(check="pictures", result=UNFIT, detail=f"frozen: {CAUSES['frozen'].sentence}")
    middle = lights[len(lights) // 2]
    detail = f"background {middle.background_dn:.1f} DN, noise {middle.noise_dn:.1f} DN"
    yield Finding(check="pictures", result=GOOD, detail=detail)


def _bands(settings: Settings, folder: Path) -> Iterator[Finding]:
    """Band files can be used, and the expected grade is taught."""
    place = folder / settings.judge.bands
    bands = load_bands(place)
    names = ", ".join(sorted(bands)) or "none"
    yield Finding(check="bands", result=GOOD if bands else NOTE, detail=f"{place}: {names}")
    expected = settings.judge.expect
    if expected and expected not in bands:
        yield Finding(check="bands", result=UNFIT, detail=f"judge.expect = {expected}: no band of it is taught")
    elif expected:
        for misfit in bands[expected].misfit(settings.sight_optics()):
            yield Finding(check="bands", result=UNFIT, detail=f"{expected}: {misfit}")


def _broker(settings: Settings, folder: Path) -> Iterator[Finding]:
    """It is there, its certificate is trusted, and it lets this station in. Nothing is published."""
    mqtt = settings.mqtt
    where = f"{mqtt.host}:{mqtt.port}"
    if not mqtt.enabled:
        yield Finding(check="broker", result=NOTE, detail="mqtt.enabled = false: not used")
        return
    base = mqtt.client_id or Topics.of(settings.station).base.replace("/", "-")
    connection = Connection(
        mqtt,
        client_id=f"{base}-check-{uuid.uuid4().hex[:8]}",  # the station's own would throw a running station out
        password=read_password(mqtt, folder),
        tls=make_tls(mqtt, folder),
        will=None,
        on_message=lambda *message: None,
        on_answer=lambda answered: None,
    )
    state: LinkState | None = None
    try:
        connection.open()
        connection.leave()
    except ConnectionLostError as error:
        state = error.state
    except (OSError, ValueError) as error:
        state = from_error(error)
    finally:
        connection.close()
    if state is None:
        secured = "TLS" if mqtt.tls else "not encrypted"
        yield Finding(check="broker", result=GOOD, detail=f"{where}: lets us in, {secured}")
        return
    result = MISSING if state.reason in NOT_THERE else UNFIT
    yield Finding(check="broker", result=result, detail=f"{where}: {REASONS[state.reason]} ({state.detail})")


def _relay(settings: Settings, folder: Path) -> Iterator[Finding]:
    """The port opens and, where the board can be read, it answers. Nothing is switched."""
    relay = settings.relay
    if relay.kind == "none":
        yield Finding(check="relay", result=NOTE, detail='relay.kind = "none": no process stop')
        return
    opened = open_relay(relay)
    try:
        read_back = opened.read_back()
    finally:
        opened.close(leave=True)
    says = {True: "the line is to stop", False: "the line is to run", None: "it cannot be read without switching it"}
    yield Finding(check="relay", result=GOOD, detail=f"{relay.kind} at {relay.port}: {says[read_back]}")
    if relay.energise_to == "stop":
        detail = 'relay.energise_to = "stop": a dead board or a cut wire lets the line run'
        yield Finding(check="relay", result=NOTE, detail=detail)


def _contact(settings: Settings, folder: Path) -> Iterator[Finding]:
    """Its port opens and the line can be read."""
    contact = settings.contact
    if not contact.port:
        yield Finding(check="contact input", result=NOTE, detail='contact.port = "": the line does not report its bars')
        return
    port = SerialPort(contact.port, part="contact", raised=True)
    try:
        closed = port.sensed(contact.line)
    finally:
        port.close()
    says = "a bar is at the wheel" if closed else "no bar is at the wheel"
    yield Finding(check="contact input", result=GOOD, detail=f"{contact.line} at {contact.port}: {says}")


def _journal(settings: Settings, folder: Path) -> Iterator[Finding]:
    """Its folder can be written, and the file, if there is one, is whole."""
    path = folder / settings.journal.file
    yield _writable("journal", path.parent)
    if not path.exists():
        yield Finding(check="journal", result=GOOD, detail=f"{path}: will be begun")
        return
    try:
        with open_journal(path) as db:
            check_whole(db)
            (unsent,) = db.execute("SELECT count(*) FROM outbox").fetchone()
    except (DeviceError, DamagedError) as error:
        yield Finding(check="journal", result=UNFIT, detail=str(error))
        return
    if not os.access(path, os.W_OK):
        yield Finding(check="journal", result=UNFIT, detail=f"{path}: cannot be written")
        return
    yield Finding(check="journal", result=GOOD, detail=f"{path}: whole, {unsent} messages unsent")


def _evidence(settings: Settings, folder: Path) -> Iterator[Finding]:
    if not settings.evidence.folder:
        yield Finding(check="evidence", result=NOTE, detail='evidence.folder = "": no pictures are kept')
    else:
        yield _writable("evidence", folder / settings.evidence.folder)


def _writable(check: str, place: Path) -> Finding:
    """Whether files can be made in ``place``, or in what it will be made in."""
    there = next(path for path in (place.absolute(), *place.absolute().parents) if path.exists())
    try:
        with tempfile.TemporaryFile(dir=there) as file:
            file.write(b"edgewatch")
            file.flush()
            os.fsync(file.fileno())
    except OSError as error:
        return Finding(check=check, result=UNFIT, detail=f"{there}: cannot be written: {error.strerror or error}")
    return Finding(check=check, result=GOOD, detail=f"{there}: can be written")


def _disk(settings: Settings, folder: Path) -> Iterator[Finding]:
    """Journal and evidence may grow to their limits."""
    journal, evidence = folder / settings.journal.file, folder / settings.evidence.folder
    wanted_mb = settings.journal.most_mb - _used_mb(journal)
    if settings.evidence.folder:
        wanted_mb += settings.evidence.most_mb - _used_mb(evidence)
    there = next(path for path in journal.absolute().parents if path.exists())
    free_mb = shutil.disk_usage(there).free / 1e6
    detail = f"{free_mb:.0f} MB free, {max(0.0, wanted_mb):.0f} MB may still be needed"
    yield Finding(check="disk", result=GOOD if free_mb > wanted_mb else UNFIT, detail=detail)


def _used_mb(path: Path) -> float:
    files = path.rglob("*") if path.is_dir() else [path]
    return sum(file.stat().st_size for file in files if file.is_file()) / 1e6


def _clock(settings: Settings, folder: Path) -> Iterator[Finding]:
    if Clock().synced:
        yield Finding(check="clock", result=GOOD, detail="synchronised")
        return
    if settings.judge.clock_must_sync and settings.source.uri.partition(":")[0] in LIVE:
        detail = "not synchronised: no bar is called conforming until it is, unless judge.clock_must_sync = false"
        yield Finding(check="clock", result=UNFIT, detail=detail)
    else:
        detail = f"not synchronised: {CAUSES['clock_not_synced'].sentence}"
        yield Finding(check="clock", result=NOTE, detail=detail)
