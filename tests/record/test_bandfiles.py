"""Band files are whole or not there, and nothing is left beside them."""

from __future__ import annotations

import resource
import signal
from pathlib import Path

import pytest

from edgewatch.errors import DeviceError
from edgewatch.record.bandfiles import load_bands, save_band
from tests.monitor.streams import band


def test_a_full_disk_leaves_the_old_band_and_nothing_else(tmp_path: Path) -> None:
    """The write fails midway, again and again: the old file stays as it was, and no temporary file is left."""
    path = tmp_path / "C45.toml"
    save_band(path, band("C45", 1.0, 2.0))
    before = path.read_bytes()
    handler = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (len(before) // 2, hard))
    try:
        for _ in range(3):
            with pytest.raises(DeviceError, match=r"C45\.toml: cannot be written"):
                save_band(path, band("C45", 3.0, 4.0))
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        signal.signal(signal.SIGXFSZ, handler)
    assert list(tmp_path.iterdir()) == [path]
    assert path.read_bytes() == before


def test_what_a_power_cut_left_is_no_band_and_is_used_up(tmp_path: Path) -> None:
    """At most one temporary file a grade: it is not read, and the next write takes its place."""
    (tmp_path / ".C45.toml.new").write_text("half a ba")
    assert load_bands(tmp_path) == {}
    save_band(tmp_path / "C45.toml", band("C45", 1.0, 2.0))
    assert [path.name for path in tmp_path.iterdir()] == ["C45.toml"]
    assert list(load_bands(tmp_path)) == ["C45"]
