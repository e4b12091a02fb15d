"""Every kind of source by name; a module is imported only when its kind is chosen."""

from __future__ import annotations

import importlib
from collections.abc import Callable
from pathlib import Path

from edgewatch.errors import SettingsError
from edgewatch.frames.values import Source
from edgewatch.settings import Settings

Opener = Callable[[str, Settings, bool], Source]
"""What a source module offers: ``open_NAME(rest of the URI, settings, live) -> Source``."""

SOURCES = {
    "camera": "edgewatch.frames.camera:open_camera",
    "clip": "edgewatch.frames.clip:open_clip",
    "pipe": "edgewatch.frames.pipe:open_pipe",
    "stream": "edgewatch.frames.stream:open_stream",
    "rehearsal": "edgewatch.frames.rehearsal:open_rehearsal",
}
"""Scheme -> ``module:function``. A new kind of source is a line here, a module, and its tests."""

ALLOWED = "camera:/dev/video0, clip:PATH, pipe:- or pipe:FIFO, stream:URL, rehearsal:"


def open_source(uri: str, settings: Settings, *, live: bool = True) -> Source:
    """Open where pictures come from; a bare path is a clip.

    ``live`` matters to sources that can be either: with ``True`` a pipe and a rehearsal run at their own pace and the
    newest frame wins (``info.live`` says so, and the caller wraps them in ``Newest``); with ``False`` they wait for
    the reader and nothing is skipped. Cameras and streams are always live, clips never.

    Raises ``SettingsError`` when the URI names no source, ``DeviceError`` when the source cannot be opened.
    """
    scheme, _, rest = uri.partition(":")
    if scheme not in SOURCES or ":" not in uri:
        if not uri:
            raise SettingsError(f'source.uri = "": no source is chosen; allowed are {ALLOWED}')
        if ":" in uri and not Path(uri).exists():
            raise SettingsError(f'source.uri = "{uri}": no such kind of source; allowed are {ALLOWED}')
        scheme, rest = "clip", uri
    module, _, function = SOURCES[scheme].partition(":")
    opener: Opener = getattr(importlib.import_module(module), function)
    return opener(rest, settings, live)
