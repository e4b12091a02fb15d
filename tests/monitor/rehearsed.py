"""A rehearsed line before the monitor, with what can go wrong between wheel and monitor put into it."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.figures.meter import BarDone, BarMeter
from edgewatch.judge.bands import Band
from edgewatch.judge.teaching import reference_bar, teach
from edgewatch.monitor.effects import Effect, Record
from edgewatch.monitor.monitor import Monitor
from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.scene import Scene
from edgewatch.rehearsal.steel import Steel, find_steel
from edgewatch.rehearsal.swarm import Conditions
from edgewatch.settings import Settings, read_settings
from edgewatch.sight.frame import Frame
from edgewatch.sight.sight import Sight
from edgewatch.wire.messages import Stamp
from tests.monitor.streams import stamp

Picture = NDArray[np.uint8]

FPS = 100.0
CONTACT_S = (0.25, 1.35)
SEGMENT_S = 1.6
"""One bar with the pauses around it."""
GRADE = "C45"


def settings(**judge: Any) -> Settings:
    """A small picture of the whole stream, from a camera; ``judge``: more keys of that section."""
    return read_settings(
        {
            "source": {"uri": "camera:/dev/video0", "width_px": 320, "height_px": 200},
            "optics": {"mm_per_px": 2.5, "contact_px": [15, 100], "fps": FPS, "exposure_ms": 2.5},
            "judge": {"expect": GRADE, "least_streaks": 80, **judge},
        },
        file="test",
    )


@cache
def segment(
    seed: int, *, steel: str | Steel = GRADE, sparks_per_s: float = 3000.0, speed_m_s: float = 28.0, **camera: float
) -> tuple[Picture, ...]:
    """Pictures of one bar and the pauses around it, through a camera of these fields of ``CameraModel``."""
    begin_s, end_s = CONTACT_S
    stretch = Conditions(
        begin_s=begin_s,
        end_s=end_s,
        steel=find_steel(steel) if isinstance(steel, str) else steel,
        sparks_per_s=sparks_per_s,
        wheel_speed_m_s=speed_m_s,
    )
    model = CameraModel(hot_pixels=5, **camera)  # type: ignore[arg-type]
    scene = Scene(settings().sight_optics(), [stretch], camera=model, rng=np.random.default_rng(seed))
    return tuple(scene.frame()[0] for _ in range(round(SEGMENT_S * FPS)))


@cache
def taught() -> Band:
    """The band of the grade, from five reference bars on a clean lens."""
    own = settings()
    optics = own.sight_optics()
    sight, meter = Sight(optics), BarMeter(own.figures, optics)
    bars = []
    pictures = [picture for seed in range(5) for picture in segment(100 + seed)]
    for index, picture in enumerate(pictures):
        for event in meter.update(sight.look(picture), t_s=index / FPS):
            if isinstance(event, BarDone):
                bars.append(reference_bar(len(bars) + 1, "test", event.bar, event.windows))
    return teach(GRADE, bars, optics=optics)


@dataclass
class Line:
    """A monitor, live, and the clock of the test. ``conditions``: causes named after each change; ``bars``: payloads
    with the moment at which they were told; ``alerts``: names and states; ``word``: the condition in force.
    """

    monitor: Monitor = field(
        default_factory=lambda: Monitor(settings(), bands={GRADE: taught()}, live=True, named=GRADE)
    )
    now_s: float = 0.0
    synced: bool = True
    conditions: list[tuple[float, frozenset[str]]] = field(default_factory=list)
    alerts: list[tuple[str, str]] = field(default_factory=list)
    bars: list[tuple[float, Mapping[str, Any]]] = field(default_factory=list)
    word: str = ""
    _index: int = 0

    def take(self, effects: list[Effect]) -> None:
        """Keep what is told."""
        for effect in effects:
            if isinstance(effect, Record) and effect.kind == "condition":
                self.conditions.append((self.now_s, frozenset(one["cause"] for one in effect.payload["causes"])))
                self.word = effect.payload["condition"]
            if isinstance(effect, Record) and effect.kind == "alert":
                self.alerts.append((effect.payload["alert"], effect.payload["state"]))
            if isinstance(effect, Record) and effect.kind == "bar":
                self.bars.append((self.now_s, effect.payload))

    def show(self, pictures: Iterable[Picture | None], *, skipped: int = 0) -> None:
        """One picture after the other at the camera's rate; ``None``: none comes. A tick every tenth of a second."""
        for picture in pictures:
            self.now_s = self._index / FPS
            now = self.stamp()
            if picture is not None:
                frame = Frame(picture=picture, index=self._index, t_s=self.now_s, skipped=skipped)
                self.take(self.monitor.see(frame, now))
            if self._index % 10 == 0:
                self.take(self.monitor.tick(now))
            self._index += 1

    def named(self, cause: str) -> bool:
        """Whether the condition has ever named it."""
        return any(cause in causes for _, causes in self.conditions)

    def stood(self, cause: str, at_s: float) -> bool:
        """Whether it was named at that moment."""
        causes = [causes for told_s, causes in self.conditions if told_s <= at_s]
        return bool(causes) and cause in causes[-1]

    def stamp(self) -> Stamp:
        """This moment."""
        return stamp(self.now_s, synced=self.synced)


Fault = Callable[[Line], None]
"""Shows one segment in which something is wrong."""
