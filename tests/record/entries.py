"""Entries and stamps for tests of the journal and the session."""

from __future__ import annotations

import dataclasses
import time
from typing import Any

from edgewatch.figures.values import Figures
from edgewatch.record.journal import Entry
from edgewatch.wire import messages
from edgewatch.wire.messages import Stamp


def stamp(utc_s: float | None = None, *, boot: str = "boot-1") -> Stamp:
    """A stamp of now, or of ``utc_s``."""
    now = time.time() if utc_s is None else utc_s
    return Stamp(boot=boot, monotonic_s=1.0, utc_s=now, synced=True)


def figures(number: int = 1) -> Figures:
    """Figures as a bar of some hundred streaks gives them."""
    values: dict[str, Any] = {part.name: 1.23456789 + number for part in dataclasses.fields(Figures)}
    counts = {"frames_seen": 50, "frames_skipped": 0, "streaks": 200 + number, "bursts": 40, "bursts_listed": 44}
    return Figures(**{**values, **counts, "reach_truncated": False})


def window(number: int = 1) -> Entry:
    """A window."""
    return Entry(kind="window", body=messages.window(values=figures(number), bar=number))


def bar(number: int = 1, verdict: str = "conforming") -> Entry:
    """A bar."""
    body = messages.bar(
        bar=number, expected="C45", verdict=verdict, values=figures(number), nearest=[("C45", 0.9), ("C15", 0.1)]
    )
    return Entry(kind="bar", body=body)


def alert(text: str = "a bar is nonconforming") -> Entry:
    """An alert."""
    return Entry(kind="alert", body=messages.alert(alert="nonconforming_bar", state="raised", text=text))


def condition(name: str = "good") -> Entry:
    """A condition."""
    return Entry(kind="condition", body=messages.condition(condition=name))
