"""What is really in a simulated picture."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Truth:
    """What is really in one picture.

    ``streaks``: float32 (N, 4), lines drawn by glowing main particles inside the picture in this exposure, x0 y0 x1 y1
    in px, contact end first along the axis, as far as the line stands one noise deviation above the ground.
    ``streak_snr``: float32 (N,), height of the line's typical (median) part above the ground in noise deviations of the
    ground, as the finished picture has it (gamma, quantisation), before compression. ``flight``: int64 (N,), the same
    number for one particle in every picture and after a burst that it survives. ``speed_m_s``: float32 (N,) as seen in
    the picture's plane. Arms of bursts are not streaks.

    ``track_m``: way of all particles above 1000 K inside the picture; ``track_exposed_m``: the part on which the burst
    hazard acts; ``track_seen_m``: the part five noise deviations above the ground.

    ``bursts``: float32 (M, 2), every burst inside the picture some of whose arms were drawn in this exposure;
    ``burst_light``: float32 (M, 2) px, middle of the light that its arms gave in this exposure; ``arms``: int16,
    thrown; ``drew_ms``: float32, time for which at least three of its arms were drawn (above one noise deviation)
    in this exposure; ``burst_snr``: float32, greatest height reached by at least three arms; ``late``: went off
    before this exposure began; ``first``: first exposure that shows it; ``burst_id``: int64, one for each physical
    burst; ``burst_t_s``: time it went off; ``fork``; ``burst_flight``: the particle that burst.
    """

    t_s: float
    streaks: NDArray[np.float32]
    streak_snr: NDArray[np.float32]
    flight: NDArray[np.int64]
    speed_m_s: NDArray[np.float32]
    track_m: float
    track_exposed_m: float
    track_seen_m: float
    bursts: NDArray[np.float32]
    burst_light: NDArray[np.float32]
    arms: NDArray[np.int16]
    drew_ms: NDArray[np.float32]
    burst_snr: NDArray[np.float32]
    late: NDArray[np.bool_]
    first: NDArray[np.bool_]
    burst_id: NDArray[np.int64]
    burst_t_s: NDArray[np.float64]
    fork: NDArray[np.bool_]
    burst_flight: NDArray[np.int64]


def no_streaks() -> dict[str, Any]:
    """Fields of ``Truth`` for a picture without streaks."""
    return {
        "streaks": np.zeros((0, 4), np.float32),
        "streak_snr": np.zeros(0, np.float32),
        "flight": np.zeros(0, np.int64),
        "speed_m_s": np.zeros(0, np.float32),
        "track_m": 0.0,
        "track_seen_m": 0.0,
        "track_exposed_m": 0.0,
    }


def no_bursts() -> dict[str, Any]:
    """Fields of ``Truth`` for a picture without bursts."""
    return {
        "bursts": np.zeros((0, 2), np.float32),
        "burst_light": np.zeros((0, 2), np.float32),
        "arms": np.zeros(0, np.int16),
        "drew_ms": np.zeros(0, np.float32),
        "burst_snr": np.zeros(0, np.float32),
        "late": np.zeros(0, bool),
        "first": np.zeros(0, bool),
        "burst_id": np.zeros(0, np.int64),
        "burst_t_s": np.zeros(0, np.float64),
        "fork": np.zeros(0, bool),
        "burst_flight": np.zeros(0, np.int64),
    }
