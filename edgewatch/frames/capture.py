"""An OpenCV capture that may be closed while another thread reads it."""

from __future__ import annotations

import threading
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray


class Capture(Protocol):
    """The part of ``cv2.VideoCapture`` that we use."""

    def isOpened(self) -> bool:  # noqa: N802 - OpenCV's name
        """Whether there is anything to read."""

    def read(self) -> tuple[bool, Any]:
        """Whether there was a picture, and the picture."""

    def get(self, prop: int) -> float:
        """A property; 0 or less where the backend does not know it."""

    def set(self, prop: int, value: float) -> bool:
        """Ask for a property; whether the backend says it obeyed."""

    def release(self) -> None:
        """Let go."""


class GuardedCapture:
    """Releasing a capture under a reader crashes the process; here whoever comes last releases it."""

    def __init__(self, capture: Capture) -> None:
        """Take over ``capture``."""
        self._capture = capture
        self._using = threading.Lock()
        self._closing = threading.Event()
        self._released = False

    @property
    def closing(self) -> bool:
        """Whether ``close`` was called."""
        return self._closing.is_set()

    def read(self) -> NDArray[Any] | None:
        """Return the next picture, ``None`` if there is none or it was closed. Raises ``cv2.error``."""
        try:
            with self._using:
                found, picture = (False, None) if self.closing else self._capture.read()
        finally:
            self._release_if_closing()
        return np.asarray(picture) if found and picture is not None else None

    def get(self, prop: int) -> float:
        """A property, 0 after ``close``."""
        with self._using:
            return 0.0 if self.closing else float(self._capture.get(prop))

    def close(self) -> None:
        """Release the capture, now or as soon as the read under way returns."""
        self._closing.set()
        if self._using.acquire(blocking=False):
            self._using.release()
            self._release_if_closing()

    def _release_if_closing(self) -> None:
        if self.closing:
            with self._using:
                if not self._released:
                    self._released = True
                    self._capture.release()
