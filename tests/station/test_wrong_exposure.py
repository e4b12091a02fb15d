"""A camera that takes another exposure than asked for: what its driver says reaches every bar's verdict."""

from __future__ import annotations

import dataclasses
import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pytest

from edgewatch.errors import StalledError
from edgewatch.frames.values import SourceInfo
from edgewatch.judge.bands import band_toml
from edgewatch.sight.frame import Frame
from edgewatch.station import station as station_module
from edgewatch.station.station import Station
from tests.monitor.rehearsed import FPS, GRADE, segment, settings, taught


class StubbornCamera:
    """Its driver reports another exposure during the first bar and the right one from the second on, whose pictures it
    hands out only when somebody has asked what it reports.
    """

    def __init__(self) -> None:
        first, second = segment(1), segment(2)
        self._pictures = [*first, *second]
        self._mended_at = len(first)
        self._next, self._asked = 0, False

    @property
    def info(self) -> SourceInfo:
        """What the driver says now."""
        mended = self._next >= self._mended_at
        self._asked = mended
        said = () if mended else ("exposure is 10 ms instead of 2.5 ms",)
        return SourceInfo(uri="test:", width_px=320, height_px=200, fps=FPS, live=False, deviations=said)

    def read(self, timeout_s: float) -> Frame | None:
        """Next picture; none while the change has not been noticed."""
        if self._next >= self._mended_at and not self._asked:
            time.sleep(min(timeout_s, 0.01))  # as a camera without a picture: the caller's ticks get their turn
            raise StalledError("not yet")
        if self._next == len(self._pictures):
            return None
        index, self._next = self._next, self._next + 1
        return Frame(picture=self._pictures[index], index=index, t_s=index / FPS)

    def close(self) -> None:
        """Nothing to let go of."""


def test_another_exposure_is_named_and_no_bar_conforms_until_it_is_right(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The first bar is inconclusive for that cause; the second conforms."""
    (tmp_path / "bands").mkdir()
    (tmp_path / "bands" / f"{GRADE}.toml").write_text(band_toml(taught()), encoding="utf-8")
    own = settings()
    own = dataclasses.replace(own, judge=dataclasses.replace(own.judge, bands="bands"))
    monkeypatch.setattr(station_module, "open_lasting", lambda *_, **__: StubbornCamera())
    told: list[Mapping[str, Any]] = []
    noticed: list[str] = []
    Station(own, tmp_path, named=GRADE, on_told=told.append, on_notice=noticed.append).run()
    assert [(line["verdict"], line["causes"]) for line in told] == [
        ("inconclusive", ["wrong_exposure"]),
        ("conforming", []),
    ]
    assert "exposure is 10 ms instead of 2.5 ms" in noticed
