"""Altered and random bytes into clips, pictures, raw pipes and relay answers.

``python -m tests.bench.bench_fuzz_ports [THOUSANDS]`` (default 20: twenty thousand inputs a fast target, fewer for the
slow ones). Seeded; prints a table and ends with status 1 if anything but the documented errors was raised.
"""

from __future__ import annotations

import os
import platform
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import cv2
import numpy as np

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.clip import open_clip, read_picture
from edgewatch.frames.container import missing_bytes
from edgewatch.frames.pipe import RawPipe, frame_bytes
from edgewatch.frames.quiet import hush
from edgewatch.frames.values import SourceInfo
from edgewatch.settings import Settings
from edgewatch.wire.relayframes import FrameError, crc16, find_coil, find_written, read_coil, write_coil
from tests.clips import noise_pictures, write_clip

Target = Callable[[np.random.Generator], str]


def altered(whole: bytes, rng: np.random.Generator) -> bytes:
    """``whole`` with up to eight bytes changed, and now and then cut, doubled in part, or padded."""
    content = bytearray(whole)
    for _ in range(int(rng.integers(0, 9))):
        content[int(rng.integers(len(content)))] = int(rng.integers(256))
    fate = int(rng.integers(5))
    if fate == 0:
        del content[int(rng.integers(len(content) + 1)) :]
    elif fate == 1:
        begin, end = sorted(int(part) for part in rng.integers(len(content) + 1, size=2))
        content[end:end] = content[begin:end]
    elif fate == 2:
        content += rng.bytes(int(rng.integers(64)))
    return bytes(content)


def clip_target(folder: Path, suffix: str, options: tuple[str, ...]) -> Target:
    """Altered video files of one container."""
    whole = write_clip(folder / f"whole{suffix}", noise_pictures(3, height=24, width=32), options=options).read_bytes()
    victim = folder / f"victim{suffix}"

    def run(rng: np.random.Generator) -> str:
        victim.write_bytes(altered(whole, rng))
        missing_bytes(victim)
        try:
            source = open_clip(str(victim), Settings())
            while source.read(0.0) is not None:
                pass
            source.close()
        except DeviceError:
            return "refused"
        return "read"

    return run


def picture_target(folder: Path, suffix: str) -> Target:
    """Altered pictures of one kind."""
    whole = cv2.imencode(suffix, noise_pictures(1, height=24, width=32)[0])[1].tobytes()
    victim = folder / f"picture{suffix}"

    def run(rng: np.random.Generator) -> str:
        victim.write_bytes(altered(whole, rng))
        try:
            read_picture(victim)
        except DeviceError:
            return "refused"
        return "read"

    return run


def pipe_target(rng: np.random.Generator) -> str:
    """Random cuts and lengths of raw frames."""
    width, height = (int(side) for side in rng.integers(1, 12, size=2))
    layout = ("gray8", "yuv420p")[int(rng.integers(2))]
    reading, writing = os.pipe()
    info = SourceInfo(uri="pipe:fuzz", width_px=width, height_px=height, fps=100.0, live=False)
    source = RawPipe(reading, info, pixel_format=layout)
    content = rng.bytes(int(rng.integers(0, 5 * frame_bytes(width, height, layout))))
    outcome, written, frames = "read", 0, 0
    while written < len(content):
        written += os.write(writing, content[written : written + int(rng.integers(1, 200))])
        try:
            while source.read(0.0) is not None:
                frames += 1
        except StalledError:
            pass
    os.close(writing)
    try:
        if source.read(1.0) is not None:
            raise AssertionError("a frame from nowhere")
    except DeviceError:
        outcome = "refused"
    source.close()
    if frames != len(content) // frame_bytes(width, height, layout):
        raise AssertionError("a frame is missing")
    return outcome


def relay_target(rng: np.random.Generator) -> str:
    """Altered, random and sealed answers to Modbus requests."""
    unit, coil, on = int(rng.integers(1, 248)), int(rng.integers(65536)), bool(rng.integers(2))
    write, read = write_coil(unit, coil, on), read_coil(unit, coil)
    body = bytes((unit, int(rng.choice((1, 5, 0x81, 0x85, 3))), int(rng.integers(256)), int(rng.integers(256))))
    answer = (write, body + crc16(body).to_bytes(2, "little"), body[:3] + crc16(body[:3]).to_bytes(2, "little"))
    received = rng.bytes(int(rng.integers(6))) + altered(answer[int(rng.integers(3))], rng)
    try:
        obeyed, level = find_written(write, received), find_coil(read, received)
    except FrameError:
        return "refused"
    if obeyed and write not in received:
        raise AssertionError("an echo from nowhere")
    return "read" if obeyed or level is not None else "more needed"


def main() -> int:
    """Run every target and print what came of it."""
    hush()
    thousands = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    print(f"{platform.machine()}, Python {platform.python_version()}, OpenCV {cv2.__version__}, numpy {np.__version__}")
    failures = total = 0
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        grey = ("-c:v", "ffv1", "-pix_fmt", "gray")
        targets: dict[str, tuple[Target, int]] = {
            "relay answers": (relay_target, 1000),
            "raw pipes": (pipe_target, 200),
            **{f"pictures {kind}": (picture_target(folder, kind), 200) for kind in (".png", ".jpg", ".tif", ".pgm")},
            "clips .mkv ffv1": (clip_target(folder, ".mkv", grey), 10),
            "clips .avi ffv1": (clip_target(folder, ".avi", grey), 10),
            "clips .mp4 h264": (clip_target(folder, ".mp4", ("-c:v", "libx264", "-qp", "0")), 10),
        }
        for title, (target, per_thousand) in targets.items():
            rng = np.random.default_rng(11)
            outcomes: Counter[str] = Counter()
            begin_s = time.perf_counter()
            for _ in range(thousands * per_thousand):
                try:
                    outcomes[target(rng)] += 1
                except Exception as error:  # noqa: BLE001 - finding these is the purpose
                    outcomes["other"] += 1
                    print(f"  {title}: {type(error).__name__}: {error}")
            count = sum(outcomes.values())
            total, failures = total + count, failures + outcomes["other"]
            kinds = ", ".join(f"{kind} {number}" for kind, number in sorted(outcomes.items()))
            print(f"{title:<18} {count:>8} inputs in {time.perf_counter() - begin_s:6.1f} s: {kinds}", flush=True)
    print(f"{total} inputs, {failures} undocumented exceptions")
    return int(failures > 0)


if __name__ == "__main__":
    sys.exit(main())
