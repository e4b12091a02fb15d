"""Reading clips and measuring them: the loop that ``measure`` and ``teach`` share."""

from __future__ import annotations

import dataclasses
import math
import sys
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.commands.options import with_picture_size
from edgewatch.errors import SettingsError
from edgewatch.figures.meter import BarDone, BarMeter
from edgewatch.figures.tally import Tally
from edgewatch.figures.values import Figures
from edgewatch.frames.registry import open_source
from edgewatch.frames.values import Source
from edgewatch.settings import Settings
from edgewatch.sight.detections import Detections
from edgewatch.sight.frame import Frame
from edgewatch.sight.optics import Optics
from edgewatch.sight.sight import Sight

PROGRESS_S = 5.0
"""Where stderr is no terminal, a line of progress this often (s)."""
BLINK_S = 0.2
"""The same on a terminal (s)."""

Watcher = Callable[[Frame, Detections], None]
"""Called with every frame, its picture reduced as configured, and what was seen in it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Measurement:
    """One clip. ``seconds``: frames over frame rate; ``processing_s``: of each frame, decoding left out."""

    clip: str
    optics: Optics
    frames: int
    seconds: float
    whole: Figures
    contacts: tuple[BarDone, ...]
    processing_s: NDArray[np.float64]


@dataclass(slots=True)
class Progress:
    """Progress on stderr: one line that is overwritten on a terminal, a line now and then elsewhere."""

    what: str
    quiet: bool = False
    _told_at: float = field(default_factory=time.monotonic)
    _shown: bool = False

    def step(self, frames: int, seconds: float) -> None:
        """Tell how far the clip has been read, if it is time to."""
        terminal = sys.stderr.isatty()
        now = time.monotonic()
        if self.quiet or now - self._told_at < (BLINK_S if terminal else PROGRESS_S):
            return
        self._told_at = now
        self._shown = terminal
        text = f"{self.what}: {frames} frames, {seconds:.1f} s of recording"
        print(f"\r{text}" if terminal else text, end="" if terminal else "\n", file=sys.stderr, flush=True)

    def end(self) -> None:
        """Leave the line clean."""
        if self._shown:
            print("\r\x1b[K", end="", file=sys.stderr, flush=True)


def measure_clip(uri: str, settings: Settings, *, watcher: Watcher | None = None, quiet: bool = False) -> Measurement:
    """Open and measure one clip (a path, or any source URI). Raises ``SettingsError`` and ``DeviceError``."""
    source = open_source(uri, settings, live=False)
    try:
        return measure_source(source, settings, clip=uri, watcher=watcher, quiet=quiet)
    finally:
        source.close()


def measure_source(
    source: Source, settings: Settings, *, clip: str, watcher: Watcher | None = None, quiet: bool = False
) -> Measurement:
    """Measure everything that ``source`` delivers, until it ends."""
    info = source.info
    settings = with_picture_size(settings, info.width_px, info.height_px)
    optics = settings.sight_optics()
    region, binning = settings.source.region_px or None, settings.source.binning
    sight, meter, whole = Sight(optics), BarMeter(settings.figures, optics), Tally(optics)
    contacts: list[BarDone] = []
    times: list[float] = []
    progress = Progress(clip, quiet=quiet)
    last_s, frames = 0.0, 0
    while (frame := source.read(settings.source.stall_s)) is not None:
        begun = time.perf_counter()
        picture = frame.picture
        if region or binning > 1:
            from edgewatch.sight.picture import reduce_picture

            picture = reduce_picture(frame.picture, region, binning)
        detections = sight.look(picture)
        whole.add(detections, t_s=frame.t_s, skipped=frame.skipped)
        found = meter.update(detections, t_s=frame.t_s, skipped=frame.skipped)
        times.append(time.perf_counter() - begun)
        contacts += [event for event in found if isinstance(event, BarDone)]
        if watcher is not None:
            watcher(dataclasses.replace(frame, picture=picture), detections)
        frames, last_s = frames + 1, frame.t_s
        progress.step(frames, last_s)
    progress.end()
    contacts += [event for event in meter.close(last_s) if isinstance(event, BarDone)]
    return Measurement(
        clip=clip,
        optics=optics,
        frames=frames,
        seconds=frames / optics.fps,
        whole=whole.figures(),
        contacts=tuple(contacts),
        processing_s=np.array(times),
    )


def check_number_options(given: Mapping[str, float | None], least: float, most: float) -> None:
    """Raise ``SettingsError`` for an option that is not between ``least`` and ``most``."""
    wrong = [
        f"{name} {value:g}: allowed is a number from {least:g} to {most:g}"
        for name, value in given.items()
        if value is not None and not (math.isfinite(value) and least <= value <= most)
    ]
    if wrong:
        raise SettingsError(*wrong)


def figures_body(figures: Figures) -> dict[str, Any]:
    """The figures under their contract names, NaN as ``None``."""
    return {
        name: None if isinstance(value, float) and not math.isfinite(value) else value
        for name, value in dataclasses.asdict(figures).items()
    }
