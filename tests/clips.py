"""Make lossless clips for tests, with the real ffmpeg."""

from __future__ import annotations

import subprocess
from collections.abc import Iterable, Sequence
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

FFV1_GREY = ("-c:v", "ffv1", "-pix_fmt", "gray")
"""Lossless, one byte a pixel."""


def write_clip(
    path: Path, pictures: Iterable[NDArray[np.uint8]], *, fps: float = 200.0, options: Sequence[str] = FFV1_GREY
) -> Path:
    """Encode uint8 (height, width) ``pictures`` into ``path`` (.mkv, .avi, .mp4); they need not fit into memory."""
    rest = iter(pictures)
    first = next(rest)
    height, width = first.shape
    command = ["ffmpeg", "-y", "-loglevel", "error", "-f", "rawvideo", "-pix_fmt", "gray", "-s", f"{width}x{height}"]
    command += ["-r", f"{fps:g}", "-i", "-", *options, str(path)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stderr=subprocess.PIPE) as encoder:
        assert encoder.stdin is not None and encoder.stderr is not None
        encoder.stdin.write(first.tobytes())
        for picture in rest:
            assert picture.shape == first.shape and picture.dtype == np.uint8
            encoder.stdin.write(picture.tobytes())
        encoder.stdin.close()
        errors = encoder.stderr.read().decode()
    assert encoder.returncode == 0, errors
    return path


def write_pictures(folder: Path, pictures: Iterable[NDArray[np.uint8]]) -> Path:
    """Write ``pictures`` as 000000.png, 000001.png, … into ``folder``."""
    folder.mkdir(parents=True, exist_ok=True)
    for index, picture in enumerate(pictures):
        assert cv2.imwrite(str(folder / f"{index:06d}.png"), picture)
    return folder


def noise_pictures(count: int, *, height: int = 64, width: int = 96, seed: int = 1) -> NDArray[np.uint8]:
    """``count`` pictures (count, height, width) that use all 256 values and never repeat."""
    return np.random.default_rng(seed).integers(0, 256, (count, height, width), dtype=np.uint8)
