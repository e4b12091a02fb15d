"""The tally: track, reach, cut-off, speed, and that windows add up."""

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from edgewatch.figures import tally as tally_module
from edgewatch.figures.tally import LENGTH_BINS, LENGTH_LOW_MM, LENGTH_STEP, MOST_BLOCKS, Tally, _modes
from edgewatch.sight.detections import StreakFlag
from tests.bench.bench_judge import reach_coverage
from tests.figures.seen import OPTICS, busy, seen


def test_nothing_seen_is_nothing_known() -> None:
    """An empty tally, and one of dark frames: counts are 0, figures NaN, nothing is raised."""
    tally = Tally(OPTICS)
    assert tally.figures().frames_seen == 0
    tally.add(seen(), t_s=1.0)
    found = tally.figures()
    assert (found.frames_seen, found.streaks, found.bursts, found.track_m) == (1, 0, 0, 0.0)
    assert all(math.isnan(v) for v in (found.burst_rate_per_m, found.reach_mm, found.reach_low_mm, found.cut_share))
    assert not found.reach_truncated
    assert (found.begin_s, found.end_s) == (1.0, 1.005)


def test_counts_track_and_rate() -> None:
    """Two streaks of 30 and 50 mm and three bursts: 3 / 0.08 m."""
    tally = Tally(OPTICS)
    tally.add(seen([[20, 200, 50, 200], [60, 220, 100, 250]], bursts=3), t_s=0.0, skipped=2)
    found = tally.figures()
    assert found.track_m == pytest.approx(0.08)
    assert found.burst_rate_per_m == pytest.approx(37.5)
    assert found.burst_rate_low_per_m < 37.5 < found.burst_rate_high_per_m
    assert (found.streaks_per_frame, found.frames_skipped) == (2.0, 2)


@given(st.floats(-60.0, 60.0), st.floats(0.0, 300.0), st.floats(5.0, 200.0))
@settings(max_examples=60)
def test_reach_of_one_streak(angle_deg: float, begin_mm: float, length_mm: float) -> None:
    """Track spread evenly over one streak: 90 % lies within nine tenths of it along the axis, to a bin (2 mm)."""
    c, s = math.cos(math.radians(angle_deg)), math.sin(math.radians(angle_deg))
    x, y = 20.0 + begin_mm, 200.0
    tally = Tally(dataclasses.replace(OPTICS, width_px=1000, height_px=1000))
    tally.add(seen([[x, y, x + length_mm * c, y + length_mm * s]]), t_s=0.0)
    assert tally.figures().reach_mm == pytest.approx(begin_mm + 0.9 * length_mm * c, abs=2.0)


def test_reach_follows_the_axis() -> None:
    """A stream turned by 90 degrees with the axis has the same reach."""
    turned = dataclasses.replace(OPTICS, direction_deg=90.0, contact_px=(200.0, 20.0), width_px=400, height_px=640)
    straight, down = Tally(OPTICS), Tally(turned)
    rng = np.random.default_rng(1)
    for frame in range(40):
        one = busy(rng)
        straight.add(one, t_s=frame / 200.0)
        lines = one.streaks[:, [1, 0, 3, 2]]  # mirrored across the diagonal
        down.add(seen(lines, bursts=len(one.bursts)), t_s=frame / 200.0)
    assert down.figures().reach_mm == pytest.approx(straight.figures().reach_mm, rel=1e-3)


def test_windows_add_up_to_the_bar() -> None:
    """Tallies of parts merged are the tally of the whole, field by field, wherever the cuts lie."""
    rng = np.random.default_rng(2)
    frames = [busy(rng) for _ in range(150)]
    whole, merged, part = Tally(OPTICS), Tally(OPTICS), Tally(OPTICS)
    for number, one in enumerate(frames):
        whole.add(one, t_s=3.0 + number / 200.0)
        part.add(one, t_s=3.0 + number / 200.0)
        if number in (17, 18, 90):
            merged.merge(part)
            part.reset()
    merged.merge(part)
    one, other = whole.figures(), merged.figures()
    for field in dataclasses.fields(one):
        assert getattr(other, field.name) == pytest.approx(getattr(one, field.name), rel=1e-9), field.name


def test_figures_may_be_asked_for_at_any_time() -> None:
    """Asking changes nothing."""
    rng = np.random.default_rng(3)
    asked, silent = Tally(OPTICS), Tally(OPTICS)
    for number in range(30):
        one = busy(rng)
        for tally in (asked, silent):
            tally.add(one, t_s=number / 200.0)
        asked.figures()
    for field in dataclasses.fields(asked.figures()):
        one, other = (getattr(tally.figures(), field.name) for tally in (asked, silent))
        assert one == pytest.approx(other, rel=1e-12), field.name


def test_long_contacts_keep_bounded_memory_and_the_same_reach() -> None:
    """Blocks are joined beyond a number; reach stays as it was."""
    rng = np.random.default_rng(4)
    tally, total = Tally(OPTICS), Tally(dataclasses.replace(OPTICS))
    for number in range(3 * MOST_BLOCKS):
        one = busy(rng, mean=4.0)
        tally.add(one, t_s=number * 0.03)
        total.add(one, t_s=0.0)
    assert len(tally._blocks) <= MOST_BLOCKS
    assert tally.figures().reach_mm == pytest.approx(total.figures().reach_mm, rel=1e-9)
    assert tally.figures().reach_low_mm < tally.figures().reach_mm < tally.figures().reach_high_mm


def test_merging_long_and_short_contacts() -> None:
    """A tally with joined blocks takes one without, and the other way round."""
    rng = np.random.default_rng(5)
    long, short = Tally(OPTICS), Tally(OPTICS)
    for number in range(MOST_BLOCKS + 50):
        long.add(busy(rng, mean=2.0), t_s=number * 0.03)
    short.add(busy(rng), t_s=100.0)
    track = long.figures().track_m + short.figures().track_m
    one, other = Tally(OPTICS), Tally(OPTICS)
    one.merge(long)
    one.merge(short)
    other.merge(short)
    other.merge(long)
    assert one.figures().track_m == pytest.approx(track)
    assert other.figures().reach_mm == pytest.approx(one.figures().reach_mm, rel=1e-9)


def test_cut_stream_is_marked() -> None:
    """Particles that fly on beyond the far edge: the share that is not seen is estimated, and reach is marked."""
    rng = np.random.default_rng(6)
    tally = Tally(OPTICS)
    unseen = shown = 0.0
    for number in range(200):
        near = rng.uniform(-50.0, 900.0, 12)  # constant density up to 900 mm; the picture ends 619.5 mm away
        near = near[near > 0.0]
        far = near + 50.0
        shown += float(np.clip(np.minimum(far, 619.5) - near, 0.0, None).sum())
        unseen += float((far - np.maximum(near, 619.5)).clip(0.0).sum())
        inside = near < 619.0
        ends = np.minimum(far[inside], 619.0)
        y = np.full(inside.sum(), 200.0)
        flags = np.where(ends >= 619.0, int(StreakFlag.CUT_END), 0)
        tally.add(seen(np.stack([20 + near[inside], y, 20 + ends, y], axis=1), flags=flags.tolist()), t_s=number / 200)
    found = tally.figures()
    assert found.reach_truncated
    assert found.cut_share == pytest.approx(unseen / (unseen + shown), rel=0.5)  # an extrapolation: right in size


def test_a_stream_that_ends_in_the_picture_is_not_marked() -> None:
    """One cut streak among thousands is less than 2 % of the track."""
    rng = np.random.default_rng(7)
    tally = Tally(OPTICS)
    for number in range(200):
        tally.add(busy(rng), t_s=number / 200.0)
    tally.add(seen([[600, 200, 639, 200]], flags=[int(StreakFlag.CUT_END)]), t_s=1.0)
    found = tally.figures()
    assert 0.0 < found.cut_share < 0.02
    assert not found.reach_truncated


def test_speed_near_the_wheel() -> None:
    """Streaks of 50 mm in 2.5 ms: 20 m/s; those born during the exposure, cut or crowded do not count."""
    rng = np.random.default_rng(8)
    tally = Tally(OPTICS)
    for number in range(100):
        tally.add(busy(rng), t_s=number / 200.0)
        short = [[20.0, 200.0, 20.0 + x, 200.0] for x in rng.uniform(1.0, 50.0, 10)]  # born: they begin at the contact
        tally.add(seen(short), t_s=number / 200.0)
        tally.add(seen([[300, 0, 305, 0]] * 20, flags=[int(StreakFlag.CROWDED)] * 20), t_s=number / 200.0)
    assert tally.figures().spark_speed_m_s == pytest.approx(20.0, rel=0.02)


def test_speed_is_extrapolated_to_the_contact() -> None:
    """Particles that lose speed on their way: the speed stated is that at the wheel."""
    rng = np.random.default_rng(9)
    tally = Tally(OPTICS)
    for number in range(300):
        near = rng.uniform(0.0, 500.0, 20)
        length = 60.0 * np.exp(-near / 500.0)
        y = np.full(20, 200.0)
        tally.add(seen(np.stack([20 + near, y, 20 + near + length, y], axis=1)), t_s=number / 200.0)
    assert tally.figures().spark_speed_m_s == pytest.approx(24.0, rel=0.08)


def test_refuses_what_is_not_finite() -> None:
    """NaN streaks are left out and counted; they poison nothing."""
    tally = Tally(OPTICS)
    tally.add(seen([[20, 200, 50, 200], [math.nan, 0, 1, 1], [0, 0, math.inf, 0]], bursts=1), t_s=0.0)
    found = tally.figures()
    assert tally.refused == 2
    assert (found.streaks, found.track_m) == (1, pytest.approx(0.03))
    assert found.exposure_m == pytest.approx(0.03)
    with pytest.raises(ValueError, match="finite time"):
        tally.add(seen(), t_s=math.nan)
    with pytest.raises(ValueError, match="count"):
        tally.add(seen(), t_s=0.0, skipped=-1)


def test_other_optics_do_not_add_up() -> None:
    """Pixels of another scale are refused."""
    with pytest.raises(ValueError, match="different optics"):
        Tally(OPTICS).merge(Tally(dataclasses.replace(OPTICS, mm_per_px=2.0)))


@pytest.mark.slow
def test_limits_of_reach_hold_although_frames_share_particles() -> None:
    """95 % limits of contacts of one second, on particles that glow for a dozen frames (quick version of the bench)."""
    inside, width = reach_coverage(1.0, bars=120)
    assert inside >= 0.88  # 0.95 less 3.5 standard errors of 120 bars
    assert 0.8 < width < 1.5


def test_looks_of_streaks_are_means_by_their_number() -> None:
    """Geometric, over pictures and over tallies alike; pictures that do not know are left out, and none gives NaN."""
    line = [60.0, 200.0, 100.0, 200.0]
    parts = [(10, 80.0, 2.0), (30, 20.0, 4.0), (50, math.nan, math.nan)]
    whole, halves = Tally(OPTICS), [Tally(OPTICS), Tally(OPTICS)]
    for index, (count, peak, width) in enumerate(parts):
        one = seen([line] * count)
        one = dataclasses.replace(one, light=dataclasses.replace(one.light, streak_peak_dn=peak, streak_width_px=width))
        for tally in (whole, halves[index % 2]):
            tally.add(one, t_s=index / OPTICS.fps)
    halves[0].merge(halves[1])
    for tally in (whole, halves[0]):
        found = tally.figures()
        assert found.streak_peak_dn == pytest.approx(80.0**0.25 * 20.0**0.75)
        assert found.streak_width_px == pytest.approx(2.0**0.25 * 4.0**0.75)
    assert math.isnan(Tally(OPTICS).figures().streak_peak_dn)


@pytest.mark.parametrize("most_blocks", [6, MOST_BLOCKS])
@pytest.mark.parametrize("fps", [60.0, 1000.0])
def test_figures_do_not_depend_on_when_frames_are_worked_up(
    fps: float, most_blocks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """One at a time or many, with a gap, a streak that is none, and blocks that are joined on the way."""
    monkeypatch.setattr(tally_module, "MOST_BLOCKS", most_blocks)
    optics = dataclasses.replace(OPTICS, fps=fps, exposure_ms=0.9)
    found = []
    for most in (1, 7, 32, 10_000):
        monkeypatch.setattr(tally_module, "MOST_WAITING", most)
        rng, tally = np.random.default_rng(4), Tally(optics)
        for frame in range(150):
            one = busy(rng)
            if frame == 77:
                one.streaks[0] = math.nan
            tally.add(one, t_s=(frame + (30 if frame > 50 else 0)) / fps)
        found.append(dataclasses.astuple(tally.figures()))
        assert len(tally._blocks) <= most_blocks
    assert math.isfinite(sum(found[0][7:17]))
    for other in found[1:]:
        assert other == pytest.approx(found[0], rel=1e-9)


def test_modes_are_the_centres_of_the_heaviest_stretch() -> None:
    """Against a convolution of each row, at the ends of the histogram too."""
    rng = np.random.default_rng(5)
    weights = rng.poisson(0.3, (40, LENGTH_BINS)) * np.exp(rng.normal(0.0, 0.3, (40, LENGTH_BINS)))
    weights[:4, 0] = weights[4:8, -1] = 50.0
    for row, mode in zip(weights, _modes(weights), strict=True):
        at = int(np.convolve(row, np.array([1.0, 2.0, 3.0, 4.0, 3.0, 2.0, 1.0]), "same").argmax())
        near = np.arange(max(0, at - 4), min(LENGTH_BINS, at + 5))
        centre = float(near @ row[near]) / float(row[near].sum()) + 0.5
        assert mode == pytest.approx(LENGTH_LOW_MM * math.exp(centre * LENGTH_STEP))
