"""The simulated line as a source: pictures rendered when asked for, and the truth about every bar."""

from __future__ import annotations

import os
import threading
import time

from edgewatch.errors import SettingsError, StalledError
from edgewatch.frames.apart import RendererApart
from edgewatch.frames.renderer import Renderer, plan_line
from edgewatch.frames.values import Frame, SourceInfo
from edgewatch.rehearsal.line import Bar
from edgewatch.rehearsal.steel import STEELS
from edgewatch.settings import Settings

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
    return RehearsalSource(settings, live=live, apart=len(os.sched_getaffinity(0)) > 1)


class RehearsalSource:
    """The simulated line. See ``Source``; ``bars`` tells what is true.

    Same settings, same pictures; after frames passed over (live only) the pictures depend on which they were. ``t_s``
    is ``index / fps``, the beginning of the exposure, live or not.
    """

    def __init__(self, settings: Settings, *, live: bool = False, apart: bool = False) -> None:
        """Plan the line. ``apart``: draw the pictures ahead in a process of its own, else here, when they are read.

        Raises ``SettingsError`` for optics that do not fit, ``DeviceError`` when the process cannot be started.
        """
        whole = settings.source_optics()
        self.line, _ = plan_line(settings)
        self._renderer = RendererApart(settings) if apart else Renderer(settings)
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
        """Return the next frame; ``None`` at the end of the line or after ``close``.

        Raises ``StalledError`` if none comes within ``timeout_s``, ``DeviceError`` when the process that draws them
        has died.
        """
        give_up_s = time.monotonic() + timeout_s
        if self._live:
            self._keep_pace(timeout_s)
        if self._closed.is_set():
            return None
        taken = self._renderer.take(max(0.0, give_up_s - time.monotonic()))
        if taken is None:
            return None
        index, picture = taken
        frame = Frame(picture=picture, index=index, t_s=index / self._fps, skipped=index - self._index)
        self._index = index + 1
        return frame

    def _keep_pace(self, timeout_s: float) -> None:
        """Wait for the next exposure's end, or pass over what is too late. Raises ``StalledError``."""
        now = time.monotonic()
        if self._begun_at is None:
            self._begun_at = now
        behind = (now - self._begun_at) * self._fps - (self._index + 1)
        if behind < 0.0:
            wait_s = -behind / self._fps
            if not self._closed.wait(min(wait_s, timeout_s)) and wait_s > timeout_s:
                raise StalledError(f"{self.info.uri}: no picture for {timeout_s:g} s")
        elif behind >= max(1.0, MOST_BEHIND_S * self._fps):
            self._renderer.go_on_from(self._index + int(behind))

    def close(self) -> None:
        """End the line; the next ``read`` returns ``None``."""
        self._closed.set()
        self._renderer.close()
