"""Frames in, contacts out."""

import numpy as np
import pytest

from edgewatch.figures.contact import Begin
from edgewatch.figures.meter import BarDone, BarMeter, WindowDone
from edgewatch.figures.tally import Tally
from edgewatch.settings import FigureSettings
from tests.figures.seen import OPTICS, busy, seen


def events_of(frames: list, *, close: bool = True, **settings: float) -> list:
    """Everything that the meter says."""
    meter = BarMeter(FigureSettings(**settings), OPTICS)
    found = []
    for number, one in enumerate(frames):
        found += meter.update(one, t_s=number / 200.0)
    return found + (meter.close(len(frames) / 200.0) if close else [])


def contact(seed: int = 1, *, before: int = 40, during: int = 230, after: int = 60) -> list:
    """Frames of one contact."""
    rng = np.random.default_rng(seed)
    return [seen()] * before + [busy(rng) for _ in range(during)] + [seen()] * after


def test_a_contact_is_measured_from_its_first_spark_to_its_last() -> None:
    """The bar's figures are those of the frames with sparks, also of those before it was known to have begun."""
    frames = contact()
    (bar,) = [event for event in events_of(frames) if isinstance(event, BarDone)]
    tally = Tally(OPTICS)
    for number in range(40, 270):
        tally.add(frames[number], t_s=number / 200.0)
    assert bar.bar.frames_seen == 230
    assert bar.bar.bursts == tally.figures().bursts
    assert bar.bar.track_m == pytest.approx(tally.figures().track_m)
    assert (bar.begin_s, bar.end_s, bar.reason) == (0.2, 269 / 200.0, "gap")


def test_windows_come_while_the_bar_touches_and_add_up() -> None:
    """A window every 0.25 s, the last one shorter; together they are the bar."""
    events = events_of(contact())
    windows = [event.window for event in events if isinstance(event, WindowDone)]
    assert isinstance(events[0], Begin)
    assert [round(one.begin_s, 3) for one in windows] == [0.2, 0.45, 0.7, 0.95, 1.2]
    assert [one.frames_seen for one in windows] == [50, 50, 50, 50, 30]
    bar = events[-1]
    assert bar.windows == tuple(windows)
    for name in ("bursts", "streaks", "frames_seen"):
        assert sum(getattr(one, name) for one in windows) == getattr(bar.bar, name)
    assert sum(one.track_m for one in windows) == pytest.approx(bar.bar.track_m)


def test_a_window_comes_with_its_last_frame() -> None:
    """Not with the first of the next, which would put off every decision by a frame; a gap in it does."""
    rng = np.random.default_rng(6)

    def ends(missing: set[int]) -> list[int]:
        meter = BarMeter(FigureSettings(), OPTICS)
        found = []
        for number in range(200):
            if number not in missing:
                events = meter.update(busy(rng), t_s=number / 200.0)
                found += [number for event in events if isinstance(event, WindowDone)]
        return found

    assert ends(set()) == [49, 99, 149, 199]
    assert ends({99}) == [49, 100, 149, 199]
    assert ends(set(range(98, 102))) == [49, 102, 149, 199]


def test_bar_so_far() -> None:
    """With each window the bar's figures up to it can be asked for; when the bar is done, they are of the next."""
    meter, sums = BarMeter(FigureSettings(), OPTICS), []
    for number, detections in enumerate(contact()):
        events = meter.update(detections, t_s=number / 200.0)
        sums += [meter.bar_so_far().frames_seen for event in events if isinstance(event, WindowDone)]
    assert sums == [50, 100, 150, 200, 0]


def test_frames_without_sparks_count_only_inside() -> None:
    """Dark frames between sparks belong to the contact, those after it do not."""
    rng = np.random.default_rng(2)
    frames = (
        [seen()] * 20 + [busy(rng) for _ in range(50)] + [seen()] * 5 + [busy(rng) for _ in range(50)] + [seen()] * 60
    )
    (bar,) = [event for event in events_of(frames) if isinstance(event, BarDone)]
    assert bar.bar.frames_seen == 105


def test_skipped_frames_are_passed_on() -> None:
    """What was not looked at is counted with the window in which it was missed."""
    rng = np.random.default_rng(3)
    meter = BarMeter(FigureSettings(), OPTICS)
    found = []
    for number in range(0, 240, 2):
        one = busy(rng) if number >= 40 else seen()
        found += meter.update(one, t_s=number / 200.0, skipped=1)
    found += meter.close(1.2)
    (bar,) = [event for event in found if isinstance(event, BarDone)]
    assert bar.bar.frames_skipped == bar.bar.frames_seen == 100


def test_a_picture_shown_again_is_not_counted() -> None:
    """The bar goes on over 0.6 s of one picture, through two ends of windows, and is measured by the rest alone."""
    rng = np.random.default_rng(9)
    frames = [busy(rng) for _ in range(200)]
    meter, without = BarMeter(FigureSettings(), OPTICS), Tally(OPTICS)
    events = []
    for number in range(320):
        again = 80 <= number < 200
        frame = frames[79] if again else frames[number - 120 if number >= 200 else number]
        events += meter.update(frame, t_s=number / 200.0, again=again, skipped=int(number == 120))
        if not again:
            without.add(frame, t_s=number / 200.0, skipped=int(number == 200))
    events += meter.close(1.6)
    (bar,) = [event for event in events if isinstance(event, BarDone)]
    alone = without.figures()
    for name in ("begin_s", "end_s", "frames_seen", "streaks", "bursts"):
        assert getattr(bar.bar, name) == getattr(alone, name), name
    for name in ("track_m", "exposure_m", "reach_mm"):
        assert getattr(bar.bar, name) == pytest.approx(getattr(alone, name)), name
    assert bar.bar.frames_skipped == 1  # before one of those that were not counted
    assert [round(one.begin_s, 3) for one in bar.windows] == [0.0, 0.25, 1.0, 1.25, 1.5]
    assert [one.frames_seen for one in bar.windows] == [50, 30, 50, 50, 20]


def test_an_empty_recording_has_no_contacts() -> None:
    """Nothing seen, nothing said."""
    assert events_of([seen()] * 300) == []
    assert events_of([]) == []


def test_two_bars_do_not_mix() -> None:
    """The second bar starts from nothing."""
    frames = contact(4) + contact(5)
    bars = [event for event in events_of(frames) if isinstance(event, BarDone)]
    assert [bar.bar.frames_seen for bar in bars] == [230, 230]
    alone = next(event for event in events_of(contact(5)) if isinstance(event, BarDone))
    assert (bars[1].bar.bursts, bars[1].bar.streaks) == (alone.bar.bursts, alone.bar.streaks)
