"""How far the picture stands from where it should: the streaks' common origin against the contact point.

Sparks leave the wheel at the contact, so near it their lines, drawn back, pass the contact at a distance that scatters
from spark to spark but whose median stays. When the camera moves, the median moves along. Only what goes across the
stream's axis can be seen so; a shift along it moves streaks along themselves and does not harm the figures. Shaking
faster than an exposure widens streaks instead, and is seen as width.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.native import records
from edgewatch.sight.optics import Optics
from edgewatch.sight.ranks import middle

NEAREST_LINES = 24
"""The origin is told from so many lines nearest to the contact: direction errors grow with the distance."""

LEAST_LINES = 6
"""Fewer give no spread to tell the error from."""

LEAST_COSINE = 0.9
"""Lines further than 26 degrees from the axis are strays, arms and reflections."""

MAD_TO_SIGMA = 1.4826
MEDIAN_ERROR = math.sqrt(0.5 * math.pi)
"""Gaussian deviation per median absolute deviation, and error of a median per error of a mean (Huber, Robust
Statistics, 1981)."""


def read_origin(lines: NDArray[np.float64], optics: Optics) -> tuple[float, float]:
    """Where lines (N, 4; px, the contact's end first) come from: offset from the contact point across the axis (px,
    positive to the right of it as seen in the picture with y down) and its standard error; NaN with too few lines.

    Cost: a dozen numpy calls on as many numbers as there are lines.
    """
    ax, ay = optics.axis
    begin = lines[:, :2] - optics.contact_px
    run = lines[:, 2:] - lines[:, :2]
    length = np.hypot(run[:, 0], run[:, 1])
    cosine = (run[:, 0] * ax + run[:, 1] * ay) / np.maximum(length, 1e-9)
    place = begin[:, 0] * ax + begin[:, 1] * ay
    straight = np.flatnonzero((cosine > LEAST_COSINE) & (place > -length))
    if straight.size < LEAST_LINES:
        return math.nan, math.nan
    if straight.size > NEAREST_LINES:
        straight = straight[np.argpartition(place[straight], NEAREST_LINES)[:NEAREST_LINES]]
    begin, run = begin[straight], run[straight]
    offset = (run[:, 0] * begin[:, 1] - run[:, 1] * begin[:, 0]) / (length * cosine)[straight]
    centre = middle(offset)
    spread = MAD_TO_SIGMA * middle(np.abs(offset - centre))
    return centre, MEDIAN_ERROR * spread / math.sqrt(offset.size)


def origin_rules(optics: Optics) -> records.OriginRules:
    """The same for the compiled step."""
    (x, y), (ax, ay) = optics.contact_px, optics.axis
    return records.OriginRules(
        contact_x=x,
        contact_y=y,
        axis_x=ax,
        axis_y=ay,
        least_cosine=LEAST_COSINE,
        mad_to_sigma=MAD_TO_SIGMA,
        median_error=MEDIAN_ERROR,
        nearest_lines=NEAREST_LINES,
        least_lines=LEAST_LINES,
    )
