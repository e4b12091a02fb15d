"""Blind is not good: whatever keeps the station from seeing is named, no bar conforms meanwhile, and it ends.

Each fault is put into the pictures or into their delivery while a good bar touches the wheel; good bars follow.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable

import numpy as np
import pytest

from edgewatch.judge.causes import CAUSES
from edgewatch.monitor.lens import lens_limits
from edgewatch.monitor.monitor import Monitor
from edgewatch.rehearsal.steel import WORKSHOP
from edgewatch.settings import Settings
from tests.monitor.rehearsed import CONTACT_S, FPS, GRADE, Fault, Line, Picture, segment, settings, taught

pytestmark = pytest.mark.slow

FAULT_FROM = round((CONTACT_S[0] + 0.3) * FPS)
"""Picture of the segment from which delivery fails: the bar has touched the wheel for 0.3 s."""


def camera(**fields: float) -> Fault:
    """Another camera, lens or stream."""
    return lambda line: line.show(segment(1, **fields))


def each(change: Callable[[Picture], Picture | None], first: int = 0) -> Fault:
    """Every picture from number ``first`` on changed."""
    return lambda line: line.show(
        change(picture) if index >= first else picture for index, picture in enumerate(segment(1))
    )


def patch(picture: Picture) -> Picture:
    """The sun on the shield: a twenty-fifth of the picture at full scale."""
    changed = picture.copy()
    changed[150:, 100:152] = 255
    return changed


def freeze(line: Line) -> None:
    """The grabber hands out its last picture, with sparks in it, again and again."""
    pictures = segment(1)
    line.show(pictures[min(index, FAULT_FROM)] for index in range(round(CONTACT_S[1] * FPS)))


def stall(line: Line) -> None:
    """No picture for three seconds in the middle of a contact, then the rest of it."""
    pictures = segment(1)
    line.show(pictures[:FAULT_FROM])
    line.show(None for _ in range(round(3.0 * FPS)))
    line.show(pictures[FAULT_FROM:])


def drop(line: Line) -> None:
    """Two of three pictures are not looked at, in the middle of a contact."""
    pictures = segment(1)
    line.show(pictures[:FAULT_FROM])
    for index in range(FAULT_FROM, len(pictures) - 2, 3):
        line.show([None, None])
        line.show([pictures[index + 2]], skipped=2)


def shift(picture: Picture) -> Picture:
    """The camera was knocked aside: the stream's end is out of the picture."""
    changed = np.full_like(picture, 8)
    changed[:, 140:] = picture[:, :-140]
    return changed


def miss(line: Line) -> None:
    """The line says that a bar is at the wheel, and the camera sees none."""
    line.take(line.monitor.bar_at_wheel(True, line.stamp()))
    line.show(picture for _ in range(8) for picture in segment(1)[:20])
    line.take(line.monitor.bar_at_wheel(False, line.stamp()))


FAULTS: dict[str, tuple[str, Fault]] = {
    "lens cap": ("no_light", each(np.zeros_like)),
    "lens full of dirt": ("soiled", camera(dirt_spots=400)),
    "window gone dull": ("soiled", camera(light=0.25)),
    "film of grease": ("soiled", camera(defocus_px=2.3)),
    "sun on the shield": ("saturated", each(patch)),
    "out of focus": ("out_of_focus", camera(defocus_px=5.0)),
    "shaking": ("vibration", camera(vibration_px=4.0)),
    "lamp": ("stray_light", each(lambda picture: np.maximum(picture, 8) // 2 + 160)),
    "no picture": ("stalled", stall),
    "same picture": ("frozen", freeze),
    "pictures left out": ("dropping", drop),
    "other size": ("wrong_size", each(lambda picture: picture[:, :300], FAULT_FROM)),
    "frame edge": ("reach_truncated", each(shift)),
    "thin stream": ("too_few_streaks", camera(sparks_per_s=55.0)),
    "bar not seen": ("no_contact", miss),
}
"""Every cause that can be put into pictures or delivery. ``wrong_exposure`` comes from the camera's driver:
tests/station/test_wrong_exposure.py."""


NOT_SEEN = {"no_light", "no_contact"}
"""Faults in which no bar is seen at all."""


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_is_named_and_no_bar_conforms_until_it_has_gone(name: str) -> None:
    """(a) The condition names the cause, or, where it is the bar's alone, the bar does; (b) no bar conforms meanwhile;
    (c) it ends with good bars, which conform again.
    """
    cause, fault = FAULTS[name]
    line = Line()
    line.take(line.monitor.begin(line.stamp()))
    fault(line)
    line.show(segment(2))
    line.show(segment(3))
    if line.bars[-1][1]["causes"]:  # the width of streaks is followed over many pictures
        line.show(segment(4))
    judged = [(bar["verdict"], bar["causes"]) for _, bar in line.bars]
    if CAUSES[cause].condition:
        assert line.named(cause), line.conditions
    if cause not in NOT_SEEN:
        assert len(judged) >= 3, judged
        assert cause in judged[0][1], judged
    for verdict, causes in judged:
        assert verdict != "conforming" or not causes, judged
    for told_s, bar in line.bars:
        assert not (line.stood(cause, told_s) and bar["verdict"] == "conforming"), judged
    assert not line.stood(cause, line.now_s)
    assert judged[-1] == ("conforming", []), judged


def own_line(own: Settings, *, live: bool = True, synced: bool = False) -> Line:
    """A line with settings of its own, whose clock is not synchronised."""
    line = Line(monitor=Monitor(own, bands={GRADE: taught()}, live=live, named=GRADE), synced=synced)
    line.take(line.monitor.begin(line.stamp()))
    return line


def test_a_live_bar_of_unknown_time_does_not_conform() -> None:
    """Its record cannot be assigned to heat and bundle. The cause is named from the start, with an alert, and ends when
    the clock is synchronised; a bar in the middle of which that happens has begun at a time that is not known.
    """
    line = own_line(settings())
    assert line.stood("clock_not_synced", line.now_s)
    assert line.word == "out_of_specification"
    line.show(segment(1))
    line.show(segment(2)[:FAULT_FROM])
    line.synced = True
    line.show(segment(2)[FAULT_FROM:])
    assert not line.stood("clock_not_synced", line.now_s)
    assert line.word == "good"
    line.show(segment(3))
    judged = [(bar["verdict"], bar["causes"]) for _, bar in line.bars]
    assert judged == [("inconclusive", ["clock_not_synced"])] * 2 + [("conforming", [])]
    assert line.alerts == [("clock_not_synced-1", "raised"), ("clock_not_synced-1", "cleared")]


def test_a_clock_lost_between_two_ticks_is_seen_with_the_bar() -> None:
    """The verdict goes by the stamp that the bar's record will have."""
    line = own_line(settings(), synced=True)
    for picture in segment(2):
        line.synced = not line.monitor._meter.in_contact or line.now_s < CONTACT_S[1]
        line.show([picture])
    ((_, bar),) = line.bars
    assert (bar["verdict"], bar["causes"]) == ("inconclusive", ["clock_not_synced"])


def test_a_foreign_bar_is_condemned_by_any_clock() -> None:
    """The station sees: the evidence counts, and the line is stopped."""
    line = own_line(settings())
    line.show(segment(8, steel="C100"))
    ((_, bar),) = line.bars
    assert (bar["verdict"], bar["causes"]) == ("nonconforming", ["clock_not_synced"])
    assert ("nonconforming_bar-2", "raised") in line.alerts


@pytest.mark.parametrize("why", ["clip", "rehearsal", "no time server"])
def test_where_the_time_of_day_is_not_claimed_bars_are_judged_without_it(why: str) -> None:
    """A clip and a rehearsed line have a time of their own; a plant without a time server has said so. The condition
    names the cause all the same, without an alert.
    """
    own = settings(clock_must_sync=why != "no time server")
    if why == "rehearsal":
        own = dataclasses.replace(own, source=dataclasses.replace(own.source, uri="rehearsal:"))
    line = own_line(own, live=why != "clip")
    line.show(segment(2))
    assert line.stood("clock_not_synced", line.now_s)
    assert line.word == "maintenance_required"
    assert [(bar["verdict"], bar["causes"]) for _, bar in line.bars] == [("conforming", [])]
    assert line.alerts == []
    line.synced = True
    line.show(segment(3))
    assert not line.stood("clock_not_synced", line.now_s)


def test_halts_too_short_to_be_named_count_for_nothing() -> None:
    """A good bar whose picture stands still for 0.4 s three times, which is not yet ``frozen``: it is measured by the
    pictures that differ, and conforms.
    """
    line = Line()
    pictures = segment(1)
    line.show(pictures[:FAULT_FROM])
    for first in range(FAULT_FROM, FAULT_FROM + 75, 25):
        line.show([pictures[first]] * 40)
        line.show(pictures[first : first + 25])
    line.show(pictures[FAULT_FROM + 75 :])
    line.show(segment(2)[:40])
    assert not line.named("frozen")
    whole = Line()
    whole.show(pictures)
    (_, bar), (_, alone) = line.bars[0], whole.bars[0]
    assert bar["frames_seen"] == alone["frames_seen"]
    assert bar["end_s"] - bar["begin_s"] == pytest.approx(alone["end_s"] - alone["begin_s"] + 1.2)
    assert (bar["verdict"], bar["causes"]) == ("conforming", [])


@pytest.mark.parametrize("steel", ["C15", "C100", "42CrMo4"])
def test_another_steel_on_a_clean_lens_is_not_a_soiled_lens(steel: str) -> None:
    """Narrowest, widest and dimmest streaks, on a new wheel and on a worn one; nor does the camera shake."""
    line = Line()
    for speed_m_s in (30.0, 20.0):
        line.show(segment(8, steel=steel, speed_m_s=speed_m_s))
    assert len(line.bars) == 2
    assert not line.named("soiled"), line.conditions
    assert not line.named("vibration")


def test_a_steel_much_dimmer_than_any_taught_does_not_hide_behind_a_soiled_lens() -> None:
    """White cast iron glows at a third of the height: it is condemned before a second of contact makes it dirt."""
    line = Line()
    line.show(segment(1, steel=WORKSHOP["white cast iron"]))
    (_, bar), *_ = line.bars
    assert (bar["verdict"], "soiled" in bar["causes"]) == ("nonconforming", True)


def test_a_band_that_does_not_know_its_streaks_judges_no_lens() -> None:
    """Files of former teachings are read and used; dirt alone is then not named."""
    known = {"streak_peak_dn", "streak_peak_scatter", "streak_width_px", "streak_width_scatter"}
    former = dataclasses.replace(taught(), **dict.fromkeys(known))
    line = Line(monitor=Monitor(settings(), bands={GRADE: former}, live=True, named=GRADE))
    line.show(segment(1, light=0.25))
    assert not line.named("soiled")
    limits = lens_limits([former], settings().sight_optics())
    assert math.isnan(limits.least_peak_dn)
    assert math.isnan(limits.most_width_px)
