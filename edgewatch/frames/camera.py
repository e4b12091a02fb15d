"""A V4L2 camera: what is asked of it is set, read back, and reported where it took something else."""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.errors import DeviceError, SettingsError, StalledError
from edgewatch.frames.capture import Capture, GuardedCapture
from edgewatch.frames.luminance import one_line
from edgewatch.frames.mono import make_mono
from edgewatch.frames.quiet import hush
from edgewatch.frames.v4l2 import (
    ANALOGUE_GAIN,
    AUTOGAIN,
    EXPOSURE,
    EXPOSURE_ABSOLUTE,
    EXPOSURE_AUTO,
    EXPOSURE_AUTO_PRIORITY,
    GAIN,
    MANUAL,
    Controls,
)
from edgewatch.frames.values import Frame, Source, SourceInfo
from edgewatch.settings import Settings

_TOLERANCE = 0.01
"""A rate or exposure off by more than this share is reported."""
_STAMP_AGE_S = 5.0
"""A driver's time stamp further from now than this (s) is on another clock and not used."""

_LUMINANCE: dict[str, Callable[[NDArray[Any], int], NDArray[Any]]] = {
    "GREY": lambda raw, height: raw,
    "YUYV": lambda raw, height: raw[:, :, 0],
    "UYVY": lambda raw, height: raw[:, :, 1],
    **dict.fromkeys(("NV12", "NV21", "YU12", "YV12"), lambda raw, height: raw[:height]),
    "Y10 ": lambda raw, height: (raw >> 2).astype(np.uint8),
    "Y12 ": lambda raw, height: (raw >> 4).astype(np.uint8),
    "Y16 ": lambda raw, height: (raw >> 8).astype(np.uint8),
}
"""V4L2 pixel format -> how the luminance lies in the raw frame (V4L2 specification, "Image formats"). Others are
decoded by OpenCV."""


def open_camera(rest: str, settings: Settings, live: bool = True) -> Source:
    """Open the camera ``rest``, a device path or its number. Raises ``SettingsError``, ``DeviceError``."""
    if not rest:
        raise SettingsError('source.uri = "camera:": allowed is camera:/dev/video0')
    path = f"/dev/video{rest}" if rest.isdecimal() else rest
    if not Path(path).exists():
        raise DeviceError(f"camera {path}: there is no such device; is it plugged in? 'ls /dev/video*' lists them")
    if not os.access(path, os.R_OK | os.W_OK):
        raise DeviceError(f"camera {path}: no permission; the user must be in the group 'video'")
    hush()
    try:
        capture = cv2.VideoCapture(path, cv2.CAP_V4L2)
        if not capture.isOpened():
            raise DeviceError(f"camera {path}: cannot be opened: no V4L2 camera, or another program uses it")
        controls = Controls(path)
    except (OSError, cv2.error) as error:
        raise DeviceError(f"camera {path}: cannot be opened: {one_line(error)}") from error
    try:
        return Camera(path, capture, controls, settings)
    finally:
        controls.close()


class Camera:
    """An open camera. See ``Source``."""

    def __init__(
        self,
        path: str,
        capture: Capture,
        controls: Controls,
        settings: Settings,
        *,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        """Take over ``capture`` and set it up; ``controls`` stays with the caller. Raises ``DeviceError``."""
        self._path, self._clock = path, clock
        try:
            deviations = [
                *_set_format(capture, settings),
                *_set_exposure(controls, settings),
                *_set_gain(controls, settings),
            ]
            fourcc = _fourcc(capture)
            self._luminance = _LUMINANCE.get(fourcc)
            if self._luminance is not None and not capture.set(cv2.CAP_PROP_CONVERT_RGB, 0):
                self._luminance = None
            width, height = (int(capture.get(p)) for p in (cv2.CAP_PROP_FRAME_WIDTH, cv2.CAP_PROP_FRAME_HEIGHT))
            rate = float(capture.get(cv2.CAP_PROP_FPS))
        except cv2.error as error:
            capture.release()
            raise DeviceError(f"camera {path}: cannot be set up: {one_line(error)}") from error
        self._info = SourceInfo(
            uri=f"camera:{path}",
            width_px=width,
            height_px=height,
            fps=rate if rate > 0 else float("nan"),
            live=True,
            deviations=tuple(deviations),
        )
        self._capture = GuardedCapture(capture)
        self._index = 0

    @property
    def info(self) -> SourceInfo:
        """What was opened."""
        return self._info

    def read(self, timeout_s: float) -> Frame | None:
        """Return the next frame, ``None`` after ``close``.

        The driver waits up to ten seconds whatever ``timeout_s`` says: read through ``Newest``. Raises
        ``StalledError`` if it waited in vain, ``DeviceError`` if the camera is gone or fails.
        """
        begin_s = self._clock()
        try:
            raw = self._capture.read()
            if raw is None:
                self._explain_nothing(self._clock() - begin_s, timeout_s)
                return None
            picture = self._mono(raw)
        except (cv2.error, ValueError, IndexError) as error:
            raise DeviceError(f"camera {self._path}: cannot be read: {one_line(error)}") from error
        frame = Frame(picture=picture, index=self._index, t_s=self._stamp_s())
        self._index += 1
        return frame

    def close(self) -> None:
        """Let go of the camera, at the latest when a read under way returns."""
        self._capture.close()

    def _mono(self, raw: NDArray[Any]) -> NDArray[np.uint8]:
        if self._luminance is None:
            return make_mono(raw)
        height = self._info.height_px
        return make_mono(self._luminance(raw, height))

    def _explain_nothing(self, waited_s: float, timeout_s: float) -> None:
        if self._capture.closing:
            return
        if not Path(self._path).exists():
            raise DeviceError(f"camera {self._path}: unplugged")
        if waited_s >= timeout_s:
            raise StalledError(f"camera {self._path}: no picture for {waited_s:.1f} s")
        raise DeviceError(f"camera {self._path}: the driver fails to deliver pictures")

    def _stamp_s(self) -> float:
        """Time of the picture by the driver, which is nearer to the exposure than ours, if it is on our clock."""
        now_s = self._clock()
        stamp_s = self._capture.get(cv2.CAP_PROP_POS_MSEC) / 1000.0
        return stamp_s if 0.0 <= now_s - stamp_s < _STAMP_AGE_S else now_s


def _fourcc(capture: Capture) -> str:
    return int(capture.get(cv2.CAP_PROP_FOURCC)).to_bytes(4, "little", signed=False).decode("latin-1")


def _set_format(capture: Capture, settings: Settings) -> list[str]:
    """Pixel format first: sizes and rates depend on it."""
    source, fps = settings.source, settings.optics.fps
    capture.set(cv2.CAP_PROP_FOURCC, int.from_bytes(settings.camera.fourcc.encode("latin-1"), "little"))
    capture.set(cv2.CAP_PROP_FRAME_WIDTH, source.width_px)
    capture.set(cv2.CAP_PROP_FRAME_HEIGHT, source.height_px)
    capture.set(cv2.CAP_PROP_FPS, fps)
    found = []
    fourcc = _fourcc(capture)
    if fourcc != settings.camera.fourcc:
        found.append(f"pixel format {fourcc!r} instead of {settings.camera.fourcc!r}")
    width, height = (int(capture.get(p)) for p in (cv2.CAP_PROP_FRAME_WIDTH, cv2.CAP_PROP_FRAME_HEIGHT))
    if (width, height) != (source.width_px, source.height_px):
        found.append(f"size {width} x {height} px instead of {source.width_px} x {source.height_px} px")
    rate = float(capture.get(cv2.CAP_PROP_FPS))
    if rate <= 0:
        found.append(f"rate not told instead of {fps:g} frames/s")
    elif abs(rate - fps) > _TOLERANCE * fps:
        found.append(f"rate {rate:g} frames/s instead of {fps:g} frames/s")
    return found


def _set_exposure(controls: Controls, settings: Settings) -> list[str]:
    """Manual exposure; "auto priority" off, which else lowers the rate in the dark."""
    wanted_ms, unit_ms = settings.optics.exposure_ms, settings.camera.exposure_unit_ms
    mode = controls.set(EXPOSURE_AUTO, MANUAL)
    controls.set(EXPOSURE_AUTO_PRIORITY, 0)
    steps = max(1, round(wanted_ms / unit_ms))
    taken = controls.set(EXPOSURE_ABSOLUTE, steps)
    if taken is None:
        taken = controls.set(EXPOSURE, steps)
    if taken is None:
        return [f"exposure cannot be set here instead of {wanted_ms:g} ms; set it by the camera's own means"]
    found = []
    if mode not in (None, MANUAL):
        found.append("exposure mode stays automatic instead of manual")
    if abs(taken * unit_ms - wanted_ms) > _TOLERANCE * wanted_ms:
        found.append(f"exposure {taken * unit_ms:g} ms instead of {wanted_ms:g} ms")
    return found


def _set_gain(controls: Controls, settings: Settings) -> list[str]:
    wanted = settings.camera.gain
    if wanted < 0:
        return []
    automatic = controls.set(AUTOGAIN, 0)
    taken = controls.set(GAIN, round(wanted))
    if taken is None:
        taken = controls.set(ANALOGUE_GAIN, round(wanted))
    if taken is None:
        return [f"gain cannot be set here instead of {wanted:g}"] if wanted > 0 else []
    found = ["gain mode stays automatic instead of manual"] if automatic else []
    if taken != round(wanted):
        found.append(f"gain {taken} instead of {wanted:g}")
    return found
