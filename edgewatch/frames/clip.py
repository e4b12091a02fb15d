"""Clips: a video file that FFmpeg reads, or a folder of pictures in name order. No frame is ever skipped.

Time is ``index / optics.fps``, not the file's own rate: high-speed recordings are stored at any playback rate.
"""

from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.errors import DeviceError
from edgewatch.frames.container import find_jpeg_damage, find_png_damage, missing_bytes
from edgewatch.frames.luminance import one_line, open_luminance
from edgewatch.frames.mono import make_mono
from edgewatch.frames.quiet import hush, is_damage, overhear
from edgewatch.frames.values import Frame, Source, SourceInfo
from edgewatch.settings import Settings
from edgewatch.sight.optics import MAX_SIDE_PX

PICTURE_SUFFIXES = frozenset({".png", ".pgm", ".ppm", ".pnm", ".bmp", ".jpg", ".jpeg", ".tif", ".tiff", ".webp"})
"""Files of a folder that count as pictures; others (notes, thumbnails' databases) are passed over."""

MOST_PICTURE_BYTES = 512 * 1024 * 1024
"""A single picture file larger than this is not read into memory: 16384 x 16384 px of 16 bits."""


def open_clip(rest: str, settings: Settings, live: bool = False) -> Source:
    """Open the file or folder ``rest``; ``live`` is of no account: a clip waits for its reader.

    Raises ``DeviceError`` if there is no such clip, or it is empty, damaged, or not a video.
    """
    path = Path(rest)
    fps = settings.optics.fps
    try:
        if path.is_dir():
            return PictureFolder(path, fps=fps)
        if not path.exists():
            raise DeviceError(f"clip {path}: no such file or folder")
        if path.stat().st_size == 0 and path.is_file():
            raise DeviceError(f"clip {path}: the file is empty")
        with path.open("rb"):  # says "permission denied" where FFmpeg would only say that it is not a video
            pass
    except (OSError, ValueError) as error:
        raise DeviceError(f"clip {rest}: cannot be read: {getattr(error, 'strerror', None) or error}") from error
    return VideoFile(path, fps=fps)


class VideoFile:
    """A video file read by FFmpeg through OpenCV. See ``Source``."""

    def __init__(self, path: Path, *, fps: float) -> None:
        """Open ``path`` and decode its first frame. Raises ``DeviceError``."""
        hush()
        self._path, self._fps = path, fps
        self._index = 0
        try:
            self._decoder = open_luminance(str(path))
            first = self._decoder.read()
        except (cv2.error, ValueError) as error:
            raise DeviceError(f"clip {path}: cannot be decoded: {one_line(error)}") from error
        if first is None:
            self._decoder.close()
            raise DeviceError(f"clip {path}: not a video that FFmpeg can read, or empty or damaged")
        self._first: NDArray[np.uint8] | None = first
        height, width = first.shape
        rate = self._decoder.rate
        self.info = SourceInfo(uri=f"clip:{path}", width_px=width, height_px=height, fps=rate, live=False)

    def read(self, timeout_s: float = 0.0) -> Frame | None:
        """Return the next frame, ``None`` after the last; ``timeout_s`` is of no account.

        Raises ``DeviceError`` after the last frame of a file that lost its end, or where the picture size changes.
        """
        picture, self._first = self._first, None
        if picture is None:
            picture = self._decode()
        if picture is None:
            if not self._decoder.closed:
                self._check_complete()
            return None
        check_size(f"clip {self._path}: picture {self._index}", picture, self.info)
        frame = Frame(picture=picture, index=self._index, t_s=self._index / self._fps)
        self._index += 1
        return frame

    def close(self) -> None:
        """Let go of the file."""
        self._decoder.close()

    def _decode(self) -> NDArray[np.uint8] | None:
        try:
            return self._decoder.read()
        except (cv2.error, ValueError) as error:
            raise DeviceError(f"clip {self._path}: picture {self._index}: {one_line(error)}") from error

    def _check_complete(self) -> None:
        try:
            missing = missing_bytes(self._path)
        except OSError as error:
            raise DeviceError(f"clip {self._path}: cannot be read: {error.strerror or error}") from error
        if missing:
            raise DeviceError(
                f"clip {self._path}: truncated or damaged: {missing} bytes are missing after picture {self._index - 1}"
            )


class PictureFolder:
    """Pictures of a folder in the order of their names. See ``Source``."""

    def __init__(self, path: Path, *, fps: float) -> None:
        """List the folder and read its first picture. Raises ``DeviceError``."""
        hush()
        self._fps = fps
        self._files = sorted(
            (file for file in path.iterdir() if file.suffix.lower() in PICTURE_SUFFIXES and file.is_file()),
            key=lambda file: file.name,
        )
        if not self._files:
            raise DeviceError(f"clip {path}: the folder holds no pictures ({', '.join(sorted(PICTURE_SUFFIXES))})")
        self._index = 0
        height, width = read_picture(self._files[0]).shape
        self.info = SourceInfo(uri=f"clip:{path}", width_px=width, height_px=height, fps=float("nan"), live=False)

    def read(self, timeout_s: float = 0.0) -> Frame | None:
        """Return the next picture, ``None`` after the last; ``timeout_s`` is of no account.

        Raises ``DeviceError`` naming the file that cannot be decoded or has another size.
        """
        if self._index >= len(self._files):
            return None
        file = self._files[self._index]
        picture = read_picture(file)
        check_size(f"clip: picture {file}", picture, self.info)
        frame = Frame(picture=picture, index=self._index, t_s=self._index / self._fps)
        self._index += 1
        return frame

    def close(self) -> None:
        """Nothing is held open between pictures."""
        self._index = len(self._files)


def read_picture(file: Path) -> NDArray[np.uint8]:
    """Read one picture file as 8-bit mono. Raises ``DeviceError`` naming it."""
    hush()
    try:
        if file.stat().st_size > MOST_PICTURE_BYTES:
            raise DeviceError(f"picture {file}: larger than {MOST_PICTURE_BYTES} bytes")
        content = np.frombuffer(file.read_bytes(), dtype=np.uint8)
        whole = content.tobytes()
        damage = [problem for problem in (find_png_damage(whole), find_jpeg_damage(whole)) if problem]
        if damage:
            raise DeviceError(f"picture {file}: {damage[0]}")
        with overhear() as heard:
            decoded = cv2.imdecode(content, cv2.IMREAD_UNCHANGED) if content.size else None
        damage = [line for line in heard if is_damage(line)]
        if decoded is None or damage:
            why = f" ({damage[0]})" if damage else ""
            raise DeviceError(f"picture {file}: empty, damaged, or not a picture{why}")
        if max(decoded.shape[:2]) > MAX_SIDE_PX:
            raise DeviceError(f"picture {file}: larger than {MAX_SIDE_PX} px a side")
        return make_mono(decoded)
    except OSError as error:
        raise DeviceError(f"picture {file}: cannot be read: {error.strerror or error}") from error
    except (cv2.error, ValueError) as error:
        raise DeviceError(f"picture {file}: cannot be decoded: {one_line(error)}") from error


def check_size(what: str, picture: NDArray[np.uint8], info: SourceInfo) -> None:
    """Raise ``DeviceError`` if ``picture`` is not of the size that the source began with."""
    height, width = picture.shape
    if (width, height) != (info.width_px, info.height_px):
        raise DeviceError(
            f"{what} is {width} x {height} px, the first was {info.width_px} x {info.height_px}: one size is needed"
        )
