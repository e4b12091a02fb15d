"""Evidence pictures in a folder with a size limit."""

from __future__ import annotations

import os
import threading
from pathlib import Path

import cv2
import numpy as np
import pytest

from edgewatch.errors import DeviceError
from edgewatch.monitor.effects import KeepPicture
from edgewatch.record.evidence import EvidenceStore
from edgewatch.sight.optics import Optics
from edgewatch.sight.sight import Sight


def picture(size: int = 1000, ending: str = ".jpg") -> bytes:
    """A real JPEG or PNG, filled up to ``size`` bytes."""
    data = cv2.imencode(ending, np.zeros((8, 8), np.uint8))[1].tobytes()
    return data + b"\x00" * (size - len(data))


def test_a_picture_is_kept_whole_under_its_name(tmp_path: Path):
    """Bar number and name make the file name, the content its ending."""
    store = EvidenceStore(tmp_path / "evidence", most_mb=1)
    path = store.keep(117, "peak", picture())
    assert path == tmp_path / "evidence" / "bar-000117-peak.jpg"
    assert path.read_bytes() == picture()
    assert store.keep(117, "band", picture(ending=".png")).suffix == ".png"
    assert store.total_bytes == 2000
    assert not list(tmp_path.glob("**/*.part"))


def test_the_oldest_give_way(tmp_path: Path):
    """The folder never exceeds its limit, over a restart too; the newest are there."""
    store = EvidenceStore(tmp_path, most_mb=0.01)
    for number in range(25):
        path = store.keep(number, "a", picture())
        os.utime(path, (number, number))
        assert sum(file.stat().st_size for file in tmp_path.iterdir()) <= 10_000
    assert sorted(file.name for file in tmp_path.iterdir()) == [f"bar-{number:06d}-a.jpg" for number in range(15, 25)]
    store = EvidenceStore(tmp_path, most_mb=0.01)
    assert store.total_bytes == 10_000
    store.keep(25, "a", picture(2500))
    assert sorted(file.name for file in tmp_path.iterdir())[0] == "bar-000018-a.jpg"


def test_the_same_name_is_replaced_and_counted_once(tmp_path: Path):
    """A repeat does no harm."""
    store = EvidenceStore(tmp_path, most_mb=0.01)
    store.keep(1, "a", picture(3000))
    store.keep(1, "a", picture(9000))
    assert store.total_bytes == 9000
    assert [file.stat().st_size for file in tmp_path.iterdir()] == [9000]


def test_only_our_own_files_are_counted_and_removed(tmp_path: Path):
    """Somebody's notes beside the pictures stay; what a power cut left half written goes."""
    (tmp_path / "notes.txt").write_text("x" * 50_000)
    (tmp_path / "bar-000001-a.jpg.part").write_bytes(b"half")
    store = EvidenceStore(tmp_path, most_mb=0.002)
    assert store.total_bytes == 0
    for number in range(5):
        store.keep(number, "a", picture())
    assert (tmp_path / "notes.txt").exists()
    assert not list(tmp_path.glob("*.part"))
    assert len(list(tmp_path.glob("bar-*"))) == 2


def test_one_picture_larger_than_the_limit_is_kept_alone(tmp_path: Path):
    """Evidence of the newest bar is worth more than the limit."""
    store = EvidenceStore(tmp_path, most_mb=0.001)
    store.keep(1, "a", picture(500))
    store.keep(2, "a", picture(5000))
    assert [file.name for file in tmp_path.iterdir()] == ["bar-000002-a.jpg"]


@pytest.mark.parametrize(
    ("bar", "name", "data"),
    [(1, "../a", picture()), (1, "", picture()), (1, "a.b", picture()), (-1, "a", picture()), (1, "a", b"GIF89a")],
)
def test_what_is_no_picture_or_name_is_refused(tmp_path: Path, bar: int, name: str, data: bytes):
    """No name leads out of the folder, no file without a picture in it."""
    with pytest.raises(ValueError, match=r"needed"):
        EvidenceStore(tmp_path, most_mb=1).keep(bar, name, data)
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be_used_is_a_device_error(tmp_path: Path):
    """At the start, and when it vanishes later; it works again when the folder is back."""
    (tmp_path / "x").write_text("")
    with pytest.raises(DeviceError, match="evidence"):
        EvidenceStore(tmp_path / "x", most_mb=1)
    store = EvidenceStore(tmp_path / "y", most_mb=1)
    (tmp_path / "y").rmdir()
    with pytest.raises(DeviceError, match="evidence"):
        store.keep(1, "a", picture())
    (tmp_path / "y").mkdir()
    assert store.keep(1, "a", picture()).exists()


def test_threads_keep_the_total_right(tmp_path: Path):
    """Two threads at once."""
    store = EvidenceStore(tmp_path, most_mb=0.02)
    threads = [
        threading.Thread(target=lambda start=start: [store.keep(start + n, "a", picture()) for n in range(40)])
        for start in (0, 100)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert store.total_bytes == sum(file.stat().st_size for file in tmp_path.iterdir()) == 20_000


def test_a_picture_lies_where_the_bars_message_says(tmp_path: Path):
    """The monitor names the file in the message before it is written; the folder gives it that very name."""
    optics = Optics(
        width_px=32, height_px=16, mm_per_px=1.0, contact_px=(0.0, 8.0), direction_deg=0.0, exposure_ms=2.5, fps=200.0
    )
    seen = np.zeros((16, 32), np.uint8)
    effect = KeepPicture(bar=7, name="1", picture=seen, detections=Sight(optics).look(seen), captions=())
    assert EvidenceStore(tmp_path, most_mb=1).keep(effect.bar, effect.name, picture()).name == effect.file
