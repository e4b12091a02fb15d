"""Figures without pictures agree with those of pictures."""

from __future__ import annotations

import numpy as np
import pytest

from edgewatch.rehearsal.outline import outline
from edgewatch.rehearsal.scene import Stream
from edgewatch.rehearsal.steel import WORKSHOP, find_steel
from edgewatch.sight.optics import Optics


def test_outline_and_pictures_agree() -> None:
    """Reach and burst-rate from the truth of 150 pictures and from the outline of as many particles."""
    optics = Optics(
        width_px=1600,
        height_px=600,
        mm_per_px=1.0,
        contact_px=(30.0, 300.0),
        direction_deg=0.0,
        exposure_ms=2.5,
        fps=200.0,
    )
    source = Stream(optics, find_steel("C45"), rng=np.random.default_rng(1))
    seen, exposed, places, lengths = 0.0, 0.0, [], []
    for _ in range(150):
        _, truth = source.frame()
        seen += truth.track_seen_m
        exposed += truth.track_exposed_m
        high = truth.streak_snr >= 5.0
        middle = 0.5 * (truth.streaks[high, 0] + truth.streaks[high, 2]) - 30.0
        places.append(middle)
        lengths.append(np.hypot(*(truth.streaks[high, 2:] - truth.streaks[high, :2]).T))
    place, length = np.concatenate(places), np.concatenate(lengths)
    order = np.argsort(place)
    total = np.cumsum(length[order])
    reach = float(np.interp(0.9 * total[-1], total, place[order]))
    drawn = outline(find_steel("C45"), sparks=8000, wheel_speed_m_s=28.0, rng=np.random.default_rng(2))
    assert drawn.reach_mm == pytest.approx(reach, rel=0.03)
    assert drawn.exposed_m / drawn.track_m == pytest.approx(exposed / seen, rel=0.03)
    assert drawn.bursts / drawn.exposed_m == pytest.approx(0.9, rel=0.06)


def test_no_light_no_figures() -> None:
    """Copper throws nothing that is seen: no track, NaN, no warning."""
    drawn = outline(WORKSHOP["copper"], sparks=500, wheel_speed_m_s=28.0, rng=np.random.default_rng(1))
    assert drawn.track_m == 0.0
    assert drawn.bursts == 0
    assert np.isnan(drawn.reach_mm)
    assert np.isnan(drawn.burst_rate_per_m)
    assert np.isnan(drawn.spark_speed_m_s)


def test_sparks_out_of_range_are_refused() -> None:
    """None and too many."""
    for sparks in (0, 10**8):
        with pytest.raises(ValueError, match="sparks"):
            outline(find_steel("C45"), sparks=sparks, wheel_speed_m_s=28.0, rng=np.random.default_rng(1))
