"""Draws and stores evidence, draws and sends views: work that takes milliseconds, kept away from the judging."""

from __future__ import annotations

import threading
from collections.abc import Callable
from pathlib import Path
from typing import Protocol

from edgewatch.errors import DeviceError
from edgewatch.monitor.annotate import annotate, encode_jpeg
from edgewatch.monitor.effects import KeepPicture, SendView
from edgewatch.sight.optics import Optics
from edgewatch.station.backlog import Backlog
from edgewatch.wire import messages

MOST_WAITING = 64
"""Pictures that wait in memory at most; beyond it the oldest gives way and is counted."""


class Store(Protocol):
    """Where evidence goes."""

    def keep(self, bar: int, name: str, data: bytes) -> Path:
        """Store one picture."""


class PictureDesk:
    """A queue of pictures and the work on it. ``on_state(detail)`` is told of trouble, and with ``""`` of its end."""

    def __init__(
        self,
        optics: Optics,
        *,
        store: Store | None,
        publish: Callable[[str, messages.Body], None] | None,
        on_state: Callable[[str], None],
    ) -> None:
        self._optics = optics
        self._store = store
        self._publish = publish
        self._on_state = on_state
        self._backlog: Backlog[KeepPicture | SendView] = Backlog()
        self._trouble = ""
        self.kept = 0
        """Pictures stored since the start."""
        self.given_up = 0
        """Pictures that gave way unstored."""

    def put(self, effect: KeepPicture | SendView) -> None:
        """Take one; never blocks."""
        with self._backlog.change:
            if len(self._backlog.items) >= MOST_WAITING:
                self._backlog.items.popleft()
                self.given_up += 1
            self._backlog.items.append(effect)
            self._backlog.change.notify_all()

    def flush(self, timeout_s: float) -> bool:
        """Wait until all is done; say whether it is."""
        return self._backlog.flush(timeout_s)

    def work(self, stop: threading.Event) -> None:
        """Draw until ``stop`` is set and nothing waits; for a supervised thread.

        A picture is taken out first: one that cannot be drawn must not be tried for ever.
        """
        while (effect := self._backlog.next(stop, take=True)) is not None:
            try:
                self._do(effect)
            finally:
                self._backlog.done()

    def _do(self, effect: KeepPicture | SendView) -> None:
        drawn = annotate(effect.picture, effect.detections, self._optics, effect.captions)
        data = encode_jpeg(drawn)
        if isinstance(effect, SendView):
            if self._publish is not None:
                height, width = drawn.shape[:2]
                self._publish(
                    "view",
                    messages.view(
                        jpeg=data, width_px=width, height_px=height, frame=effect.frame, request=effect.request
                    ),
                )
            return
        if self._store is None:
            return
        try:
            self._store.keep(effect.bar, effect.name, data)
        except DeviceError as error:
            self._say(str(error))
        else:
            self.kept += 1
            self._say("")

    def _say(self, trouble: str) -> None:
        if bool(trouble) != bool(self._trouble):
            self._on_state(trouble)
        self._trouble = trouble
