"""Clips: every pixel and every frame arrives; what is damaged is said in one line."""

from __future__ import annotations

import dataclasses
import os
import subprocess
import sys
from pathlib import Path

import cv2
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from edgewatch.errors import DeviceError
from edgewatch.frames.quiet import is_damage, overhear
from edgewatch.frames.registry import open_source
from edgewatch.frames.values import Frame
from edgewatch.settings import OpticsSettings, Settings
from tests.clips import FFV1_GREY, noise_pictures, write_clip, write_pictures

LIMITED = ("-vf", "scale=in_range=pc:out_range=tv")


def read_all(uri: str, station: Settings | None = None) -> list[Frame]:
    """Every frame of a source."""
    source = open_source(uri, station or Settings())
    frames = []
    while (frame := source.read(1.0)) is not None:
        frames.append(frame)
    source.close()
    return frames


def worst(frames: list[Frame], pictures: NDArray[np.uint8]) -> int:
    """Largest difference of any pixel (DN), after checking that no frame is missing."""
    assert len(frames) == len(pictures)
    return max(int(np.abs(f.picture.astype(int) - p).max()) for f, p in zip(frames, pictures, strict=True))


@pytest.mark.parametrize(
    ("name", "options", "allowed_dn"),
    [
        ("a.mkv", ("-c:v", "ffv1", "-pix_fmt", "gray"), 0),
        ("a.avi", ("-c:v", "rawvideo", "-pix_fmt", "gray"), 0),
        ("a.mov", ("-c:v", "png", "-pix_fmt", "gray"), 0),
        ("b.mkv", ("-c:v", "ffv1", "-pix_fmt", "bgr0"), 0),
        ("a.mp4", ("-c:v", "libx264", "-qp", "0", "-pix_fmt", "gray"), 0),  # full range, without saying so
        ("b.mp4", ("-c:v", "libx264rgb", "-qp", "0"), 0),
        ("c.mkv", ("-c:v", "ffv1", "-pix_fmt", "yuvj420p"), 1),  # rounding by the encoder's own range conversion
        ("d.mkv", (*LIMITED, "-c:v", "ffv1", "-pix_fmt", "yuv420p"), 1),  # 219 steps cannot hold 256 values
        ("e.mkv", (*LIMITED, "-c:v", "libx264", "-qp", "0", "-pix_fmt", "yuv444p"), 1),
    ],
)
def test_lossless_clip_arrives_unchanged(tmp_path: Path, name: str, options: tuple[str, ...], allowed_dn: int) -> None:
    """All 256 grey values survive a lossless codec, whatever the layout, as far as the layout can hold them."""
    pictures = noise_pictures(7)
    path = write_clip(tmp_path / name, pictures, options=options)
    frames = read_all(f"clip:{path}")
    assert worst(frames, pictures) <= allowed_dn
    assert all(frame.picture.dtype == np.uint8 and frame.picture.flags.c_contiguous for frame in frames)


def test_dark_monochrome_h264_keeps_its_background(tmp_path: Path) -> None:
    """A spark picture's dark background (8 DN) is not clipped to 0 by a range conversion that the file never meant."""
    rng = np.random.default_rng(3)
    pictures = np.clip(rng.normal(8, 1.5, (5, 64, 96)), 0, 255).astype(np.uint8)
    path = write_clip(tmp_path / "dark.mkv", pictures, options=("-c:v", "libx264", "-qp", "0", "-pix_fmt", "gray"))
    assert worst(read_all(str(path)), pictures) == 0


def test_time_is_index_over_the_configured_rate(tmp_path: Path) -> None:
    """A high-speed clip stored at 25 frames/s is timed by optics.fps; the size comes from the clip; none is skipped."""
    path = write_clip(tmp_path / "slow.mkv", noise_pictures(5), fps=25)
    station = dataclasses.replace(Settings(), optics=OpticsSettings(fps=250.0))
    source = open_source(str(path), station)
    assert (source.info.width_px, source.info.height_px, source.info.fps, source.info.live) == (96, 64, 25.0, False)
    source.close()
    frames = read_all(str(path), station)
    assert [frame.t_s for frame in frames] == pytest.approx([0, 0.004, 0.008, 0.012, 0.016])
    assert [frame.index for frame in frames] == [0, 1, 2, 3, 4]
    assert not any(frame.skipped for frame in frames)


def test_folder_of_pictures_in_name_order(tmp_path: Path) -> None:
    """Pictures come in the order of their names; other files are passed over; 16 bits and colour become 8-bit mono."""
    pictures = noise_pictures(4)
    folder = write_pictures(tmp_path / "clip", pictures[:2])
    (folder / "notes.txt").write_text("not a picture")
    cv2.imwrite(str(folder / "a.png"), cv2.cvtColor(pictures[2], cv2.COLOR_GRAY2BGR))
    cv2.imwrite(str(folder / "b.tif"), pictures[3].astype(np.uint16) * 256 + 77)
    assert worst(read_all(f"clip:{folder}"), pictures) == 0


@pytest.mark.parametrize("damage", ["cut", "empty", "size", "flipped", "huge", "cut jpeg"])
def test_damaged_picture_is_named(tmp_path: Path, damage: str) -> None:
    """A picture cut short, empty, altered, or of another size gives an error of one line with the file's name."""
    folder = write_pictures(tmp_path / "clip", noise_pictures(3))
    victim = folder / "000001.png"
    content = bytearray(victim.read_bytes())
    if damage == "size":
        cv2.imwrite(str(victim), noise_pictures(1, height=32)[0])
    elif damage == "cut jpeg":
        victim = victim.rename(folder / "000001.jpg")
        whole = cv2.imencode(".jpg", noise_pictures(1)[0])[1].tobytes()
        victim.write_bytes(whole[: len(whole) // 2])
    else:
        content[18 if damage == "huge" else 3000] ^= 0x40  # in the width, in the pixels
        victim.write_bytes({"cut": content[:40], "empty": b""}.get(damage, content))
    with pytest.raises(DeviceError, match=r"00000[01]\.(png|jpg)") as caught:
        read_all(str(folder))
    assert victim.name in str(caught.value)
    assert "\n" not in str(caught.value)


def test_stderr_of_others_is_passed_on(capfd: pytest.CaptureFixture[str]) -> None:
    """What is overheard from libraries is kept back, what others write at the same time is not lost."""
    with overhear() as heard:
        os.write(2, b"libpng error: IDAT: CRC error\nbroker is away\n")
        os.write(2, b"libpng warning: iCCP: known incorrect sRGB profile\n")
    assert [is_damage(line) for line in heard] == [True, False]
    assert capfd.readouterr().err == "broker is away\n"


@pytest.mark.parametrize(
    ("name", "options"),
    [
        ("cut.mkv", FFV1_GREY),
        ("cut.avi", FFV1_GREY),
        ("cut.mov", ("-c:v", "png", "-movflags", "faststart")),
        ("cut.mp4", ("-c:v", "libx264", "-qp", "0", "-movflags", "faststart")),
    ],
)
def test_truncated_clip_is_said_after_its_last_frame(tmp_path: Path, name: str, options: tuple[str, ...]) -> None:
    """A file that lost its second half delivers what is there, then says that bytes are missing."""
    path = write_clip(tmp_path / name, noise_pictures(40), options=options)
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    source = open_source(str(path), Settings())
    frames = 0
    with pytest.raises(DeviceError, match=r"truncated or damaged: \d+ bytes are missing after picture \d+"):
        while source.read(1.0) is not None:
            frames += 1
    source.close()
    assert 5 < frames < 30


def test_sound_track_that_outlasts_the_pictures_is_no_damage(tmp_path: Path) -> None:
    """Matroska states one duration, that of the longest track: that the pictures end before it is in order."""
    path = write_clip(tmp_path / "plain.mkv", noise_pictures(20))
    command = ["ffmpeg", "-y", "-loglevel", "error", "-i", str(path), "-f", "lavfi", "-i", "sine=duration=3"]
    subprocess.run([*command, "-c:v", "copy", "-c:a", "pcm_s16le", str(tmp_path / "sound.mkv")], check=True)
    assert worst(read_all(str(tmp_path / "sound.mkv")), noise_pictures(20)) == 0


@pytest.mark.parametrize(("height", "width"), [(65, 97), (17, 16), (400, 641), (480, 638)], ids=lambda side: str(side))
def test_odd_sizes_arrive_unchanged(tmp_path: Path, height: int, width: int) -> None:
    """Rows whose length is no multiple of the decoder's alignment are not sheared."""
    pictures = noise_pictures(3, height=height, width=width)
    for name in ("odd.mkv", "odd.avi"):
        assert worst(read_all(str(write_clip(tmp_path / name, pictures))), pictures) == 0


def test_truncated_mp4_does_not_open(tmp_path: Path) -> None:
    """An mp4 whose index was never written cannot be read at all."""
    path = write_clip(tmp_path / "cut.mp4", noise_pictures(20), options=("-c:v", "libx264", "-qp", "0"))
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    with pytest.raises(DeviceError, match="not a video"):
        open_source(str(path), Settings())


@pytest.mark.parametrize(
    ("content", "says"),
    [(b"", "empty"), (b"just text\n" * 50, "not a video"), (bytes(range(256)) * 64, "not a video")],
)
def test_what_is_no_clip_is_refused(tmp_path: Path, content: bytes, says: str) -> None:
    """Empty files, text and rubbish are no clips."""
    path = tmp_path / "clip.mkv"
    path.write_bytes(content)
    with pytest.raises(DeviceError, match=says):
        open_source(str(path), Settings())


def test_missing_and_empty_folder(tmp_path: Path) -> None:
    """A path that is not there and a folder without pictures are said as such."""
    with pytest.raises(DeviceError, match="no such file"):
        open_source(f"clip:{tmp_path / 'none.mkv'}", Settings())
    with pytest.raises(DeviceError, match="holds no pictures"):
        open_source(str(tmp_path), Settings())


def test_sound_without_pictures_is_refused(tmp_path: Path) -> None:
    """A file with sound only is no clip."""
    path = tmp_path / "sound.mkv"
    command = ["ffmpeg", "-y", "-loglevel", "error", "-f", "lavfi", "-i", "sine=duration=0.2", "-c:a", "pcm_s16le"]
    subprocess.run([*command, str(path)], check=True)
    with pytest.raises(DeviceError, match="not a video"):
        open_source(str(path), Settings())


def test_libraries_write_nothing_to_stderr(tmp_path: Path) -> None:
    """Neither FFmpeg nor OpenCV nor a picture library writes to stderr about a damaged clip or picture."""
    clip = write_clip(tmp_path / "cut.mkv", noise_pictures(20), options=("-c:v", "libx264", "-qp", "0"))
    clip.write_bytes(clip.read_bytes()[: clip.stat().st_size // 2])
    folder = write_pictures(tmp_path / "pictures", noise_pictures(2))
    for name, suffix in (("0.png", ".png"), ("1.jpg", ".jpg"), ("2.tif", ".tif")):
        whole = cv2.imencode(suffix, noise_pictures(1)[0])[1].tobytes()
        (tmp_path / name).mkdir()
        (tmp_path / name / name).write_bytes(whole[: len(whole) * 2 // 3])
    program = (
        "import sys\nfrom edgewatch.errors import DeviceError\nfrom edgewatch.settings import Settings\n"
        "from edgewatch.frames.registry import open_source\n"
        "for path in sys.argv[1:]:\n"
        "    try:\n        source = open_source(path, Settings())\n"
        "        while source.read(1) is not None: pass\n"
        "    except DeviceError as error: print(error)\n"
    )
    paths = [clip, folder, tmp_path / "0.png", tmp_path / "1.jpg", tmp_path / "2.tif"]
    done = subprocess.run([sys.executable, "-c", program, *map(str, paths)], capture_output=True, text=True, check=True)
    assert done.stderr == ""
    assert "truncated or damaged" in done.stdout


@given(data=st.data())
@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_mangled_clip_bytes_raise_nothing_else(tmp_path: Path, data: st.DataObject) -> None:
    """Bytes of real clips and pictures, cut, flipped and padded, give frames or a ``DeviceError``, never another."""
    suffix = data.draw(st.sampled_from([".mkv", ".avi", ".png"]))
    whole = tmp_path / f"whole{suffix}"
    if not whole.exists():
        if suffix == ".png":
            cv2.imwrite(str(whole), noise_pictures(1, height=24, width=32)[0])
        else:
            write_clip(whole, noise_pictures(3, height=24, width=32))
    content = bytearray(whole.read_bytes()[: data.draw(st.integers(0, whole.stat().st_size))])
    for _ in range(data.draw(st.integers(0, 8))):
        if content:
            content[data.draw(st.integers(0, len(content) - 1))] = data.draw(st.integers(0, 255))
    folder = tmp_path / "mangled"
    folder.mkdir(exist_ok=True)
    victim = folder / f"victim{suffix}"
    victim.write_bytes(bytes(content) + data.draw(st.binary(max_size=20)))
    try:
        frames = read_all(str(folder if suffix == ".png" else victim))
    except DeviceError as error:
        assert "\n" not in str(error)
    else:
        assert all(frame.picture.dtype == np.uint8 and frame.picture.ndim == 2 for frame in frames)
    finally:
        victim.unlink()
