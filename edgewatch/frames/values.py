"""One frame, and what a source says of itself."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from edgewatch.sight.frame import Frame

__all__ = ["Frame", "Source", "SourceInfo"]


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceInfo:
    """What was opened. ``fps``: rate the source claims, NaN if it does not say; ``live``: newest frames win;
    ``deviations``: settings the device took differently, one sentence each.
    """

    uri: str
    width_px: int
    height_px: int
    fps: float
    live: bool
    deviations: tuple[str, ...] = ()


class Source(Protocol):
    """A place where pictures come from. One thread reads it; ``close`` may be called from any thread, twice too."""

    @property
    def info(self) -> SourceInfo:
        """What was opened."""

    def read(self, timeout_s: float) -> Frame | None:
        """Return the next frame, or ``None`` at the end of a clip.

        Raises ``StalledError`` if none came within ``timeout_s`` (the caller may go on reading), ``DeviceError`` if
        the source is lost and must be opened anew.
        """

    def close(self) -> None:
        """Let go of the device or file."""
