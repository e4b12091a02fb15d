"""Lasting flags become causes; single odd pictures do not."""

import math

from hypothesis import given
from hypothesis import strategies as st

from edgewatch.monitor.blindness import LEAST_PICTURES, SPAN_S, Blindness, _Recent
from edgewatch.sight.detections import Light, PictureFlag


def light(flags: PictureFlag) -> Light:
    """A picture with these flags."""
    return Light(
        background_dn=5,
        noise_dn=2,
        saturated_share=0,
        streak_width_px=math.nan,
        streak_peak_dn=math.nan,
        flags=flags,
    )


def feed(blindness: Blindness, flags: list[PictureFlag], *, streaks: int = 30, begin_s: float = 0.0) -> frozenset[str]:
    """Pictures at 100 a second; the causes after the last."""
    causes: frozenset[str] = frozenset()
    for index, flag in enumerate(flags):
        causes = blindness.update(light(flag), streaks, begin_s + index / 100)
    return causes


def test_a_lasting_flag_is_a_cause_until_it_has_gone_for_long() -> None:
    """A second of saturated pictures; it ends only after most of a second of good ones."""
    blindness = Blindness()
    assert feed(blindness, [PictureFlag.SATURATED] * 100) == {"saturated"}
    assert feed(blindness, [PictureFlag.NONE] * 60, begin_s=1.0) == {"saturated"}
    assert feed(blindness, [PictureFlag.NONE] * 25, begin_s=1.6) == frozenset()


def test_single_odd_pictures_are_none() -> None:
    """One picture in five flagged: a lamp reflected now and then."""
    flags = [PictureFlag.STRAY_LIGHT if i % 5 == 0 else PictureFlag.NONE for i in range(200)]
    assert feed(Blindness(), flags) == frozenset()


def test_focus_is_judged_on_pictures_with_streaks_only() -> None:
    """Between bars nothing is known of focus: the cause neither comes nor goes."""
    blindness = Blindness()
    assert feed(blindness, [PictureFlag.DEFOCUSED] * 50) == {"out_of_focus"}
    assert feed(blindness, [PictureFlag.NONE] * 500, streaks=0, begin_s=0.5) == {"out_of_focus"}


def test_two_flags_are_two_causes() -> None:
    """Flags do not hide each other."""
    both = PictureFlag.NO_LIGHT | PictureFlag.STRAY_LIGHT
    assert feed(Blindness(), [both] * 20) == {"no_light", "stray_light"}


def test_a_clock_that_steps_back_is_survived() -> None:
    """A source that was opened anew counts from 0 again: older pictures are forgotten, not kept for ever."""
    blindness = Blindness()
    feed(blindness, [PictureFlag.SATURATED] * 100, begin_s=1000.0)
    assert feed(blindness, [PictureFlag.NONE] * 100) == frozenset()


@given(st.lists(st.tuples(st.booleans(), st.floats(-2.0, 0.4)), max_size=120))
def test_every_prefix_equals_the_share_counted_anew(pictures: list[tuple[bool, float]]) -> None:
    """Whatever the flags and steps of time, also back ones: the share is that of the pictures still in the span."""
    recent, kept, t_s = _Recent(), [], 0.0
    for flagged, step_s in pictures:
        t_s += step_s
        kept.append((t_s, flagged))
        while kept and not (t_s - SPAN_S < kept[0][0] <= t_s):
            del kept[0]
        share = recent.share(t_s, flagged)
        if len(kept) < LEAST_PICTURES:
            assert share is None
        else:
            assert share == sum(one for _, one in kept) / len(kept)
