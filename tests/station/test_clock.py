"""The running station's clock: whether it is synchronised reaches the verdicts of live bars, and of those alone."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pytest

from edgewatch.frames.values import SourceInfo
from edgewatch.judge.bands import band_toml
from edgewatch.sight.frame import Frame
from edgewatch.station import station as station_module
from edgewatch.station.clock import Clock
from edgewatch.station.station import Station
from tests.monitor.rehearsed import FPS, GRADE, segment, settings, taught


class Film:
    """Pictures of one bar, live or not; the last makes the source end."""

    def __init__(self, *, live: bool) -> None:
        self.info = SourceInfo(uri="test:", width_px=320, height_px=200, fps=math.nan, live=live)
        self._next = 0

    def read(self, timeout_s: float) -> Frame | None:
        """Next picture."""
        index, self._next = self._next, self._next + 1
        if index == len(segment(1)):
            return None
        return Frame(picture=segment(1)[index], index=index, t_s=index / FPS)

    def close(self) -> None:
        """Nothing to let go of."""


class LostClock(Clock):
    """A clock that no time server has ever set."""

    synced = False  # type: ignore[assignment]


class SetClock(Clock):
    """A synchronised clock, whatever the machine has."""

    synced = True  # type: ignore[assignment]


@pytest.mark.parametrize(
    ("clock", "live", "must", "held"),
    [
        (LostClock, True, True, True),
        (LostClock, True, False, False),
        (LostClock, False, True, False),
        (SetClock, True, True, False),
    ],
    ids=["live", "live where it need not", "clip", "live and synchronised"],
)
def test_an_unsynchronised_clock_holds_live_bars_back(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, clock: type[Clock], live: bool, must: bool, held: bool
) -> None:
    """Through the real station: its source says whether it is live, its clock whether it is synchronised.

    Pictures come here as fast as they are judged, which is the wrong rate for a live source; so a live bar is asked for
    this cause alone.
    """
    (tmp_path / "bands").mkdir()
    (tmp_path / "bands" / f"{GRADE}.toml").write_text(band_toml(taught()), encoding="utf-8")
    own = settings(bands="bands", clock_must_sync=must)
    own = dataclasses.replace(own, source=dataclasses.replace(own.source, uri="camera:test" if live else "clip:test"))
    monkeypatch.setattr(station_module, "open_lasting", lambda *_, **__: Film(live=live))
    monkeypatch.setattr(station_module, "Clock", clock)
    told: list[Mapping[str, Any]] = []
    station = Station(own, tmp_path, named=GRADE, on_told=told.append)
    station.run()
    (bar,) = told
    assert ("clock_not_synced" in bar["causes"]) is held
    assert ("clock_not_synced" in station.monitor.causes) is (clock is LostClock)
    if held:
        assert bar["verdict"] == "inconclusive"
    if not live:
        assert (bar["verdict"], bar["causes"]) == ("conforming", [])
