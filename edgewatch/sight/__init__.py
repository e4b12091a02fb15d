"""Seeing: one picture -> streaks and bursts. Core: arrays in, values out.

The seam: ``Sight(optics).look(picture) -> Detections``.
"""

from edgewatch.sight.sight import Sight, SightTuning

__all__ = ["Sight", "SightTuning"]
