"""The simulated line as a source: pictures rendered when asked for, and the truth about every bar."""

from __future__ import annotations

import threading
import time

import numpy as np

from edgewatch.errors import SettingsError
from edgewatch.frames.values import Frame, SourceInfo
from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.line import Bar, Line
from edgewatch.rehearsal.scene import Scene
from edgewatch.rehearsal.steel import STEELS
from edgewatch.settings import Settings

USUAL_SPEED_M_S = 28.0
"""Surface speed where the configuration does not know it."""
MOST_BEHIND_S = 0.1
"""A live rehearsal further behind its clock than this passes frames over, as a camera would whose queue is full."""


def open_rehearsal(rest: str, settings: Settings, live: bool = False) -> RehearsalSource:
    """Open the simulated line of ``settings.rehearsal`` before the camera of ``settings.optics`` and ``.source``.

    ``live``: frames come at the camera's rate and the newest wins; otherwise as fast as they are read, none skipped.
    Raises ``SettingsError`` for grades that the rehearsal does not know and for anything after ``rehearsal:``.
    """
    if rest:
        raise SettingsError(f'source.uri = "rehearsal:{rest}": allowed is "rehearsal:" alone; see section [rehearsal]')
    own = settings.rehearsal
    known = ", ".join(f'"{name}"' for name in STEELS)
    problems = [
        f'rehearsal.{key} = "{name}": the rehearsal knows {known}'
        for key, names in (("grade", (own.grade,)), ("foreign_grades", own.foreign_grades))
        for name in names
        if name not in STEELS
    ]
    if problems:
        raise SettingsError(*problems)
    return RehearsalSource(settings, live=live)


class RehearsalSource:
    """The simulated line. See ``Source``; ``bars`` tells what is true.

    Same settings, same pictures. ``t_s`` is ``index / fps``, the beginning of the exposure, live or not.
    """

    def __init__(self, settings: Settings, *, live: bool = False) -> None:
        """Plan the line; the first picture is made when read. Raises ``SettingsError`` for optics that do not fit."""
        own, whole = settings.rehearsal, settings.source_optics()
        plan_rng, scene_rng = (np.random.default_rng(part) for part in np.random.SeedSequence(own.seed).spawn(2))
        self.line = Line(
            bars=own.bars,
            foreign=own.foreign,
            grade=own.grade,
            foreign_grades=own.foreign_grades,
            contact_s=own.contact_s,
            pause_s=own.pause_s,
            wheel_speed_m_s=max(1.0, settings.wheel.surface_speed_m_s or USUAL_SPEED_M_S),
            rng=plan_rng,
        )
        self._scene = Scene(whole, self.line.conditions(), camera=CameraModel(hot_pixels=5), rng=scene_rng)
        self._fps = whole.fps
        self._index = 0
        self._live = live
        self._begun_at: float | None = None
        self._closed = threading.Event()
        self.info = SourceInfo(
            uri="rehearsal:", width_px=whole.width_px, height_px=whole.height_px, fps=whole.fps, live=live
        )

    @property
    def bars(self) -> list[Bar]:
        """The bars that have touched the wheel by the last frame read."""
        return [self.line[index] for index in range(self.line.begun(self._index / self._fps))]

    def read(self, timeout_s: float) -> Frame | None:
        """Return the next frame; ``None`` at the end of the line or after ``close``. Never stalls."""
        skipped = self._keep_pace() if self._live else 0
        if self._closed.is_set() or self._index / self._fps >= self.line.end_s:
            return None
        picture, _ = self._scene.frame()
        frame = Frame(picture=picture, index=self._index, t_s=self._index / self._fps, skipped=skipped)
        self._index += 1
        return frame

    def _keep_pace(self) -> int:
        """Wait for the next exposure's end, or pass over what is too late; returns how many frames were passed over."""
        now = time.monotonic()
        if self._begun_at is None:
            self._begun_at = now
        behind = (now - self._begun_at) * self._fps - (self._index + 1)
        if behind < 0.0:
            self._closed.wait(-behind / self._fps)
            return 0
        if behind < max(1.0, MOST_BEHIND_S * self._fps):
            return 0
        passed = int(behind)
        self._scene.skip(passed)
        self._index += passed
        return passed

    def close(self) -> None:
        """End the line; the next ``read`` returns ``None``."""
        self._closed.set()
