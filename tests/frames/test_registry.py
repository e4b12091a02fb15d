"""Which kind of source a URI names."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import pytest

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.frames.registry import SOURCES, open_source
from edgewatch.settings import Settings
from tests.clips import noise_pictures, write_pictures


def test_every_entry_names_a_module_and_a_function() -> None:
    """Each scheme's module is there; it is not imported for that."""
    for name, target in SOURCES.items():
        module, _, function = target.partition(":")
        assert importlib.util.find_spec(module) is not None, name
        assert function == f"open_{name}"


def test_bare_path_is_a_clip(tmp_path: Path) -> None:
    """A path without a scheme is a clip, also where its name holds a colon."""
    folder = write_pictures(tmp_path / "12:30", noise_pictures(1))
    assert open_source(str(folder), Settings()).info.width_px == 96


@pytest.mark.parametrize("uri", ["", "webcam:0", "clp:/tmp/a.mkv"])
def test_unknown_source_says_what_is_allowed(uri: str) -> None:
    """An empty or unknown URI is the operator's mistake; the error names key, value and what is allowed."""
    with pytest.raises(SettingsError, match=r"source\.uri = .*camera:/dev/video0"):
        open_source(uri, Settings())


def test_bare_path_that_is_not_there() -> None:
    """A path that is not there is a missing thing, not a bad setting."""
    with pytest.raises(DeviceError, match="no such file"):
        open_source("nowhere.mkv", Settings())
