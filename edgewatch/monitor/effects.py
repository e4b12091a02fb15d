"""Effects: what the monitor wants done. Each states a wanted level, never a toggle, so a repeat does no harm.

The rim carries them out; one that failed is told back with ``Monitor.fail``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.judge.bands import Band
from edgewatch.sight.detections import Detections


@dataclass(frozen=True, slots=True, kw_only=True)
class Record:
    """Write this to the journal together with the message that carries it, in one transaction with its neighbours.

    ``kind`` names the record and its message (``window``, ``bar``, ``alert``, ``condition``, ``expected``, ``order``);
    ``payload`` is the message's body; the journal adds ``seq`` and time. ``reply_topic`` and ``correlation``: where
    else the answer to an order goes.
    """

    kind: str
    payload: Mapping[str, Any]
    reply_topic: str = ""
    correlation: bytes = b""


@dataclass(frozen=True, slots=True, kw_only=True)
class Remember:
    """Keep these values over a restart, in the same transaction as the records beside them."""

    values: Mapping[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Publish:
    """Send now if the broker is there; not journalled. The newest of a kind replaces older ones."""

    kind: str
    payload: Mapping[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class SetRelay:
    """Wanted level of the process stop: ``stop`` true stops the line."""

    stop: bool
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class KeepPicture:
    """Draw and keep a picture of a nonconforming bar as evidence; ``name`` tells the pictures of one bar apart."""

    bar: int
    name: str
    picture: NDArray[np.uint8]
    detections: Detections
    captions: tuple[str, ...]

    @property
    def file(self) -> str:
        """Name of the file that it is kept in, as the bar's message gives it."""
        return f"bar-{self.bar:06d}-{self.name}.jpg"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SendView:
    """Draw and send the present picture, asked for by an order."""

    picture: NDArray[np.uint8]
    detections: Detections
    captions: tuple[str, ...]
    frame: int
    request: str


@dataclass(frozen=True, slots=True, kw_only=True)
class SaveBand:
    """Write a band that was taught by order; the older file of the same grade is kept beside it."""

    band: Band


@dataclass(frozen=True, slots=True, kw_only=True)
class Told:
    """One bar has been judged; for whoever runs the monitor (a line on stdout, a score)."""

    line: Mapping[str, Any] = field(default_factory=dict)


Effect = Record | Remember | Publish | SetRelay | KeepPicture | SendView | SaveBand | Told
