"""Flights from linked streaks: the size and launch speed that were put in."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from edgewatch.figures.flightfit import FlightFit, FlightLinker
from edgewatch.rehearsal.scene import Stream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.rehearsal.swarm import Spray
from edgewatch.sight.detections import StreakFlag
from edgewatch.sight.optics import Optics

OPTICS = Optics(
    width_px=640, height_px=400, mm_per_px=1.0, contact_px=(30.0, 200.0), direction_deg=0.0, exposure_ms=0.9, fps=1000.0
)


def fit(
    *,
    radius_um: float,
    wheel_m_s: float,
    optics: Optics = OPTICS,
    frames: int = 150,
    noise_px: float = 0.3,
    seed: int = 1,
) -> FlightFit:
    """Fit of true streaks with noise on their ends."""
    steel = replace(find_steel("C45"), radius_um=radius_um)
    rng = np.random.default_rng(seed)
    source = Stream(
        optics, steel, sparks_per_s=1500.0, wheel_speed_m_s=wheel_m_s, spray=Spray(draught_m_s=0.0), rng=rng
    )
    linker = FlightLinker(optics)
    for _ in range(frames):
        _, truth = source.frame()
        streaks = truth.streaks[truth.streak_snr >= 5.0]
        streaks = streaks + noise_px * rng.normal(size=streaks.shape).astype(np.float32)
        linker.add(streaks, np.zeros(len(streaks), np.uint8), truth.t_s)
    return linker.fit()


@pytest.mark.parametrize(("radius_um", "wheel_m_s"), [(35.0, 28.0), (45.0, 20.0), (60.0, 28.0)])
def test_radius_and_launch_speed_come_back(radius_um: float, wheel_m_s: float) -> None:
    """In still air: launch speed within two percent, radius within twelve (large particles glow longer, so more of them
    are seen long enough, and drag is taken at one film temperature).
    """
    found = fit(radius_um=radius_um, wheel_m_s=wheel_m_s)
    assert found.usable
    assert found.particles > 80
    assert found.launch_speed_m_s == pytest.approx(0.94 * wheel_m_s, rel=0.02)
    assert found.radius_um == pytest.approx(radius_um, rel=0.12)
    assert found.radius_low_um < found.radius_um < found.radius_high_um
    assert found.residual_px < 0.6


def test_slow_frames_are_said_to_be_unusable() -> None:
    """At 200 frames a second few particles show six streaks, at 500 and a fine scale they move too far to be linked."""
    for slow in (
        replace(OPTICS, fps=200.0, exposure_ms=2.5),
        replace(OPTICS, fps=500.0, exposure_ms=1.8, mm_per_px=0.4, contact_px=(-300.0, 200.0)),
    ):
        found = fit(radius_um=45.0, wheel_m_s=28.0, optics=slow, frames=30)
        assert not found.usable
        assert found.particles == 0
        assert math.isnan(found.radius_um)
        assert math.isnan(found.launch_speed_m_s)


def test_nothing_seen_nothing_fitted() -> None:
    """No frames, empty frames, frames with values that are not finite: no particles, no warning."""
    linker = FlightLinker(OPTICS)
    assert linker.fit().particles == 0
    for k in range(10):
        linker.add(np.zeros((0, 4), np.float32), np.zeros(0, np.uint8), 0.001 * k)
    linker.add(np.full((3, 4), np.nan, np.float32), np.zeros(3, np.uint8), 0.011)
    found = linker.fit()
    assert found.chains == 0
    assert found.usable


def test_cut_and_crowded_streaks_are_left_out() -> None:
    """A particle whose every streak is flagged makes no chain; unflagged it makes one."""

    def chains(flag: int) -> int:
        linker = FlightLinker(OPTICS)
        for k in range(12):
            x = 100.0 + 20.0 * k
            linker.add(np.array([[x, 200.0, x + 18.0, 200.0]], np.float32), np.array([flag], np.uint8), 0.001 * k)
        return linker.fit().chains

    assert chains(0) == 1
    for flag in (StreakFlag.CUT_BEGIN, StreakFlag.CUT_END, StreakFlag.CROWDED):
        assert chains(int(flag)) == 0


def test_crossing_particles_keep_their_own_chains() -> None:
    """Two particles whose ways cross are not exchanged."""
    linker = FlightLinker(OPTICS)
    for k in range(20):
        x, up, down = 100.0 + 20.0 * k, 150.0 + 5.0 * k, 250.0 - 5.0 * k
        streaks = np.array([[x, up, x + 18.0, up + 4.5], [x, down, x + 18.0, down - 4.5]], np.float32)
        linker.add(streaks, np.zeros(2, np.uint8), 0.001 * k)
    chains = linker._open
    assert len(chains) == 2
    for chain in chains:
        rise = np.diff(chain.y_px)
        assert (np.sign(rise) == np.sign(rise[0])).all()
        assert len(chain.t_s) == 20
