"""What a camera is asked for, what it made of that, and how its loss shows.

No camera is at hand where these tests run: capture and ioctl are replaced at the border to OpenCV and the kernel by
small models of what they do. The test marked ``hardware`` runs against the real thing.
"""

from __future__ import annotations

import dataclasses
import errno
import os
import struct
import threading
from collections.abc import Iterator
from pathlib import Path

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray

from edgewatch.errors import DeviceError, SettingsError, StalledError
from edgewatch.frames import v4l2
from edgewatch.frames.camera import Camera, open_camera
from edgewatch.frames.capture import GuardedCapture
from edgewatch.frames.newest import Newest
from edgewatch.settings import CameraSettings, OpticsSettings, Settings, SourceSettings
from tests.clips import noise_pictures

STATION = dataclasses.replace(
    Settings(),
    source=SourceSettings(width_px=96, height_px=64),
    optics=OpticsSettings(exposure_ms=2.5, fps=200.0),
    camera=CameraSettings(gain=8.0),
)
CODES = {name: int.from_bytes(name.encode(), "little") for name in ("GREY", "YUYV", "NV12", "Y10 ", "MJPG")}


class Device:
    """A V4L2 device as seen through OpenCV and through ioctl. ``controls``: id -> [low, high, value]."""

    def __init__(self, pictures: NDArray[np.uint8], *, fourccs: tuple[str, ...] = ("GREY",)) -> None:
        self.props: dict[int, float] = {
            cv2.CAP_PROP_FOURCC: CODES[fourccs[0]],
            cv2.CAP_PROP_FRAME_WIDTH: 640,
            cv2.CAP_PROP_FRAME_HEIGHT: 480,
            cv2.CAP_PROP_FPS: 30,
            cv2.CAP_PROP_CONVERT_RGB: 1,
        }
        self.fourccs = fourccs
        self.refuses: set[int] = set()
        self.controls = {
            v4l2.EXPOSURE_AUTO: [0, 3, 3],
            v4l2.EXPOSURE_AUTO_PRIORITY: [0, 1, 1],
            v4l2.EXPOSURE_ABSOLUTE: [1, 5000, 156],
            v4l2.GAIN: [0, 16, 4],
        }
        self.released = 0
        self.stamp_ms = 0.0
        self._pictures = iter(pictures)

    def isOpened(self) -> bool:  # noqa: N802
        """It is."""
        return True

    def set(self, prop: int, value: float) -> bool:
        """Take what it can; a size goes to the nearest it has, a rate to what the size allows."""
        if prop in self.refuses or (prop == cv2.CAP_PROP_FOURCC and value not in [CODES[f] for f in self.fourccs]):
            return False
        self.props[prop] = value
        return True

    def get(self, prop: int) -> float:
        """What is in force."""
        return self.stamp_ms if prop == cv2.CAP_PROP_POS_MSEC else self.props.get(prop, 0.0)

    def read(self) -> tuple[bool, NDArray[np.uint8] | NDArray[np.uint16] | None]:
        """The next picture in the layout of the pixel format, or as BGR."""
        grey = next(self._pictures, None)
        if grey is None:
            return False, None
        code = self.props[cv2.CAP_PROP_FOURCC]
        if self.props[cv2.CAP_PROP_CONVERT_RGB]:
            return True, cv2.cvtColor(grey, cv2.COLOR_GRAY2BGR)
        if code == CODES["YUYV"]:
            return True, np.stack([grey, np.full_like(grey, 128)], axis=2)
        if code == CODES["NV12"]:
            return True, np.vstack([grey, np.full((grey.shape[0] // 2, grey.shape[1]), 128, np.uint8)])
        if code == CODES["Y10 "]:
            return True, grey.astype(np.uint16) * 4 + 3
        return True, grey

    def release(self) -> None:
        """Count."""
        self.released += 1

    def ioctl(self, fd: int, request: int, words: bytearray) -> int:
        """The kernel's side of VIDIOC_QUERYCTRL, VIDIOC_G_CTRL and VIDIOC_S_CTRL."""
        (control,) = struct.unpack_from("=I", words)
        if control not in self.controls:
            raise OSError(errno.EINVAL, "no such control")
        low, high, value = self.controls[control]
        if request == 0xC0445624:
            struct.pack_into("=II32siiiiI8x", words, 0, control, 1, b"name", low, high, 1, low, 0)
        elif request == 0xC008561C:
            (wanted,) = struct.unpack_from("=4xi", words)
            if control in self.refuses:
                raise OSError(errno.EBUSY, "busy")
            self.controls[control][2] = min(max(wanted, low), high)
        elif request == 0xC008561B:
            struct.pack_into("=4xi", words, 0, value)
        else:
            raise OSError(errno.ENOTTY, "unknown request")
        return 0


def set_up(device: Device, station: Settings = STATION) -> Camera:
    """A camera on ``device``."""
    controls = v4l2.Controls(os.devnull, ioctl=device.ioctl)
    try:
        return Camera(os.devnull, device, controls, station, clock=lambda: 100.0)
    finally:
        controls.close()


def test_all_that_is_asked_for_is_taken() -> None:
    """Size, rate, format, manual exposure in the driver's unit, and gain are set; nothing is left to report."""
    device = Device(noise_pictures(2))
    camera = set_up(device)
    assert (camera.info.width_px, camera.info.height_px, camera.info.fps, camera.info.live) == (96, 64, 200.0, True)
    assert camera.info.deviations == ()
    taken = {control: value for control, (_, _, value) in device.controls.items()}
    assert taken == {
        v4l2.EXPOSURE_AUTO: 1,
        v4l2.EXPOSURE_AUTO_PRIORITY: 0,
        v4l2.EXPOSURE_ABSOLUTE: 25,
        v4l2.GAIN: 8,
    }


def test_each_deviation_is_a_sentence() -> None:
    """What the device took otherwise is named, with what was asked for."""
    device = Device(noise_pictures(1), fourccs=("YUYV",))
    device.refuses = {cv2.CAP_PROP_FRAME_WIDTH, cv2.CAP_PROP_FRAME_HEIGHT, cv2.CAP_PROP_FPS, v4l2.EXPOSURE_AUTO}
    device.controls[v4l2.EXPOSURE_ABSOLUTE] = [50, 5000, 156]
    device.controls[v4l2.GAIN] = [0, 6, 4]
    device.controls[v4l2.AUTOGAIN] = [1, 1, 1]
    assert set_up(device).info.deviations == (
        "pixel format 'YUYV' instead of 'GREY'",
        "size 640 x 480 px instead of 96 x 64 px",
        "rate 30 frames/s instead of 200 frames/s",
        "exposure mode stays automatic instead of manual",
        "exposure 5 ms instead of 2.5 ms",
        "gain mode stays automatic instead of manual",
        "gain 6 instead of 8",
    )


def test_device_without_controls_or_rate() -> None:
    """Where the driver offers no such control, or does not tell its rate, that is reported rather than assumed."""
    device = Device(noise_pictures(1))
    device.controls.clear()
    device.refuses = {cv2.CAP_PROP_FPS}
    device.props[cv2.CAP_PROP_FPS] = 0
    info = set_up(device).info
    assert info.deviations == (
        "rate not told instead of 200 frames/s",
        "exposure cannot be set here instead of 2.5 ms; set it by the camera's own means",
        "gain cannot be set here instead of 8",
    )
    assert np.isnan(info.fps)


def test_sensor_with_its_own_controls() -> None:
    """Bare sensors count exposure in lines and have analogue gain; the configured unit serves them. -1 leaves gain."""
    device = Device(noise_pictures(1))
    device.controls = {v4l2.EXPOSURE: [4, 1000, 500], v4l2.ANALOGUE_GAIN: [0, 240, 10]}
    lines = dataclasses.replace(STATION, camera=CameraSettings(exposure_unit_ms=0.02, gain=30))
    assert set_up(device, lines).info.deviations == ()
    assert device.controls == {v4l2.EXPOSURE: [4, 1000, 125], v4l2.ANALOGUE_GAIN: [0, 240, 30]}
    alone = dataclasses.replace(lines, camera=dataclasses.replace(lines.camera, gain=-1.0))
    device.controls[v4l2.ANALOGUE_GAIN][2] = 10
    assert set_up(device, alone).info.deviations == ()
    assert device.controls[v4l2.ANALOGUE_GAIN][2] == 10


@pytest.mark.parametrize("fourcc", ["GREY", "YUYV", "NV12", "Y10 ", "MJPG"])
def test_luminance_of_each_pixel_format(fourcc: str) -> None:
    """Luminance is taken from where the format keeps it, without a detour over colour; others OpenCV decodes."""
    pictures = noise_pictures(3)
    device = Device(pictures, fourccs=(fourcc,))
    camera = set_up(device, dataclasses.replace(STATION, camera=CameraSettings(fourcc=fourcc)))
    assert camera.info.deviations == ()
    for index, picture in enumerate(pictures):
        frame = camera.read(1.0)
        assert frame is not None and frame.index == index
        assert np.array_equal(frame.picture, picture)
    assert device.props[cv2.CAP_PROP_CONVERT_RGB] == (fourcc == "MJPG")


def test_driver_that_insists_on_colour_is_decoded() -> None:
    """Where the raw layout is not to be had, the converted picture is used."""
    device = Device(noise_pictures(1))
    device.refuses = {cv2.CAP_PROP_CONVERT_RGB}
    frame = set_up(device).read(1.0)
    assert frame is not None and np.array_equal(frame.picture, noise_pictures(1)[0])


def test_time_is_the_drivers_where_it_is_on_our_clock() -> None:
    """A stamp of a moment ago is used; one of another clock, or of the future, is not."""
    device = Device(noise_pictures(3))
    camera = set_up(device)
    for stamp_ms, t_s in ((99_990.0, 99.99), (1_700_000_000_000.0, 100.0), (0.0, 100.0)):
        device.stamp_ms = stamp_ms
        frame = camera.read(1.0)
        assert frame is not None and frame.t_s == pytest.approx(t_s)


def test_loss_and_silence_are_told_apart(tmp_path: Path) -> None:
    """A device that is gone is lost, and one that fails at once; one that waited in vain has stalled."""
    node = tmp_path / "video0"
    node.touch()
    now = iter([0.0, 10.0, 20.0, 20.01, 30.0, 40.0])
    device = Device(noise_pictures(0))
    controls = v4l2.Controls(os.devnull, ioctl=device.ioctl)
    camera = Camera(str(node), device, controls, STATION, clock=lambda: next(now))
    controls.close()
    with pytest.raises(StalledError, match=r"no picture for 10\.0 s"):
        camera.read(2.0)
    with pytest.raises(DeviceError, match="the driver fails") as caught:
        camera.read(2.0)
    assert not isinstance(caught.value, StalledError)
    node.unlink()
    with pytest.raises(DeviceError, match="unplugged"):
        camera.read(2.0)
    camera.close()
    camera.close()
    assert device.released == 1


def test_picture_of_an_unknown_layout_is_a_device_error() -> None:
    """A driver that delivers something else than it says is an error, not a crash."""
    device = Device(noise_pictures(1), fourccs=("YUYV",))
    camera = set_up(device, dataclasses.replace(STATION, camera=CameraSettings(fourcc="YUYV")))
    device.props[cv2.CAP_PROP_FOURCC] = CODES["GREY"]
    with pytest.raises(DeviceError, match="cannot be read"):
        camera.read(1.0)


@pytest.fixture
def gate() -> Iterator[threading.Event]:
    """Opened at the end, so that no thread hangs."""
    made = threading.Event()
    yield made
    made.set()


def test_close_under_a_reader_releases_after_the_read(gate: threading.Event) -> None:
    """The capture is not pulled away under a read; it is released once, when that returns."""
    device = Device(noise_pictures(1))
    inside = threading.Event()
    plain = device.read

    def slow() -> tuple[bool, NDArray[np.uint8] | NDArray[np.uint16] | None]:
        inside.set()
        gate.wait(10.0)
        return plain()

    device.read = slow  # type: ignore[method-assign]
    capture = GuardedCapture(device)
    reader = threading.Thread(target=capture.read)
    reader.start()
    assert inside.wait(10.0)
    capture.close()
    assert device.released == 0
    gate.set()
    reader.join(10.0)
    assert device.released == 1
    assert capture.read() is None and capture.get(cv2.CAP_PROP_FPS) == 0.0
    capture.close()
    assert device.released == 1


def test_camera_that_is_not_there(tmp_path: Path) -> None:
    """A missing device, one that is no camera, and an empty name are each said; a number stands for /dev/videoN."""
    with pytest.raises(DeviceError, match="there is no such device"):
        open_camera(str(tmp_path / "video9"), STATION)
    with pytest.raises(DeviceError, match="/dev/video98765"):
        open_camera("98765", STATION)
    with pytest.raises(SettingsError, match="camera:/dev/video0"):
        open_camera("", STATION)
    (tmp_path / "file").write_bytes(b"no camera")
    with pytest.raises(DeviceError, match="cannot be opened"):
        open_camera(str(tmp_path / "file"), STATION)


def test_ioctl_numbers_are_those_of_the_kernel() -> None:
    """VIDIOC_G_CTRL, VIDIOC_S_CTRL, VIDIOC_QUERYCTRL as a C compiler gives them from linux/videodev2.h."""
    assert (v4l2.GET, v4l2.SET, v4l2.QUERY) == (0xC008561B, 0xC008561C, 0xC0445624)


@pytest.mark.hardware
def test_real_camera() -> None:
    """The camera in EDGEWATCH_CAMERA delivers pictures of the size it says, which are never the same."""
    source = Newest(open_camera(os.environ["EDGEWATCH_CAMERA"], Settings()))
    first, second = source.read(10.0), source.read(10.0)
    source.close()
    assert first is not None and second is not None
    assert first.picture.shape == (source.info.height_px, source.info.width_px)
    assert not np.array_equal(first.picture, second.picture)
