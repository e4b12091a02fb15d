"""The station as a state machine: pictures, orders, ticks and failures in, effects out."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest

from edgewatch.judge.bands import Band, band_toml
from edgewatch.monitor.effects import Effect, KeepPicture, Publish, Record, Remember, SaveBand, SendView, SetRelay, Told
from edgewatch.monitor.memory import Memory, read_memory
from edgewatch.monitor.monitor import Monitor
from edgewatch.settings import read_settings
from edgewatch.sight.frame import Frame
from edgewatch.wire.orders import Order, Refusal
from tests.monitor.streams import FPS, HEIGHT, WIDTH, band, line_of_bars, quiet, sparks, stamp

QUIET_GRADE = band("C15", 0.0, 0.3)
BURSTING_GRADE = band("C80", 2.0, 3.0)


def monitor(
    expect: str = "C15",
    *,
    bands: Mapping[str, Band] | None = None,
    relay: Mapping[str, Any] | None = None,
    memory: Memory | None = None,
    named: str | None = None,
) -> Monitor:
    """A monitor with two taught grades and a relay."""
    settings = read_settings(
        {
            "source": {"width_px": WIDTH, "height_px": HEIGHT},
            "optics": {"mm_per_px": 2.0, "contact_px": [10, 100], "fps": FPS, "exposure_ms": 4.0},
            "judge": {"expect": expect, "least_streaks": 20},
            "relay": {"kind": "line", "port": "loop://", **(relay or {})},
        },
        file="test",
    )
    known = {"C15": QUIET_GRADE, "C80": BURSTING_GRADE} if bands is None else bands
    return Monitor(settings, bands=known, memory=memory, named=named)


def run(station: Monitor, *, bars: int = 1, seed: int = 5, begin_s: float = 0.0) -> list[Effect]:
    """All effects of a line of bars."""
    effects: list[Effect] = []
    last_s = begin_s
    for frame in line_of_bars(np.random.default_rng(seed), bars=bars, begin_s=begin_s):
        effects += station.see(frame, stamp(frame.t_s))
        last_s = frame.t_s
    return effects + station.end(stamp(last_s))


def records(effects: list[Effect], kind: str) -> list[Mapping[str, Any]]:
    """Bodies of the records of one kind."""
    return [effect.payload for effect in effects if isinstance(effect, Record) and effect.kind == kind]


def order(name: str, **fields: Any) -> Order:
    """An order from the foreman."""
    return Order(name=name, id=f"id-{name}", sent_utc_s=1.79e9, who="foreman", **fields)


def test_a_conforming_bar_is_recorded_and_nothing_stops() -> None:
    """Streaks without bursts, expected so: windows, one conforming bar, no alert, no stop, no picture."""
    effects = run(monitor("C15"))
    bars = records(effects, "bar")
    assert [(one["bar"], one["verdict"], one["expected"]) for one in bars] == [(1, "conforming", "C15")]
    assert bars[0]["begin_s"] == pytest.approx(0.4, abs=0.02)
    assert bars[0]["end_s"] == pytest.approx(1.39, abs=0.03)
    assert len(records(effects, "window")) == 4
    assert not records(effects, "alert")
    assert not [e for e in effects if isinstance(e, (SetRelay, KeepPicture))]
    told = [e.line for e in effects if isinstance(e, Told)]
    assert told[0]["verdict"] == "conforming"
    summary = [e.payload for e in effects if isinstance(e, Publish) and e.kind == "summary"][-1]
    assert summary["bars"] == {"conforming": 1, "nonconforming": 0, "inconclusive": 0}


def test_a_foreign_bar_stops_the_line_before_its_contact_ends() -> None:
    """Expected to burst and it does not: the relay is wanted stopped while the bar still touches the wheel."""
    station = monitor("C80")
    effects: list[Effect] = []
    stopped_s = math.nan
    for frame in line_of_bars(np.random.default_rng(5), bars=1, contact_s=2.0):
        found = station.see(frame, stamp(frame.t_s))
        if math.isnan(stopped_s) and any(isinstance(e, SetRelay) and e.stop for e in found):
            stopped_s = frame.t_s
        effects += found
    assert 0.4 < stopped_s < 2.4
    bar = records(effects, "bar")[0]
    assert bar["verdict"] == "nonconforming"
    assert bar["decided_after_s"] <= stopped_s - 0.4 + 0.05
    assert bar["nearest"][0][0] == "C15"
    alerts = records(effects, "alert")
    assert [(one["state"], one["bar"], one["latched"]) for one in alerts] == [("raised", 1, True)]
    pictures = [e for e in effects if isinstance(e, KeepPicture)]
    assert [p.file for p in pictures] == bar["pictures"]
    assert len(pictures) == 3
    assert any("band 2 to 3" in caption for caption in pictures[0].captions)


def test_latched_stop_outlives_bars_and_restart_until_released() -> None:
    """Neither the next bar nor a new process lets the line run; an order does."""
    station = monitor("C80")
    effects = run(station)
    kept: dict[str, Any] = {}
    for effect in effects:
        if isinstance(effect, Remember):
            kept.update(effect.values)
    again = monitor("C80", memory=read_memory(kept))
    begun = again.begin(stamp(10.0))
    assert [e.stop for e in begun if isinstance(e, SetRelay)] == [True]
    assert not [e for e in run(again, begin_s=10.0) if isinstance(e, SetRelay) and not e.stop]
    released = again.order(order("release"), stamp(20.0))
    assert [e.stop for e in released if isinstance(e, SetRelay)] == [False]
    assert records(released, "order")[0]["accepted"]
    assert records(run(again, begin_s=20.0), "bar")[0]["bar"] == 3


def test_unlatched_stop_ends_when_the_next_bar_touches_the_wheel() -> None:
    """Without latch each bar stands for itself."""
    effects = run(monitor("C80", relay={"latch": False}), bars=2)
    assert [e.stop for e in effects if isinstance(e, SetRelay)] == [True, False, True]


def test_unknown_grade_judges_nothing_and_says_so() -> None:
    """The station runs; bars are inconclusive with a cause; the condition names it."""
    station = monitor("C45")
    begun = station.begin(stamp(0.0))
    condition = records(begun, "condition")[0]
    assert condition["condition"] == "out_of_specification"
    assert [cause["cause"] for cause in condition["causes"]] == ["no_band"]
    bar = records(run(station), "bar")[0]
    assert (bar["verdict"], "no_band" in bar["causes"]) == ("inconclusive", True)


def test_expect_order_changes_the_grade_and_begins_the_counts_anew() -> None:
    """Heat and order number travel with every bar; the order survives a restart, a new configuration ends it."""
    station = monitor("C80")
    run(station)
    effects = station.order(order("expect", grade="C15", heat="H7", order_number="4711"), stamp(5.0), seen=["id-1"])
    assert records(effects, "expected")[0]["grade"] == "C15"
    kept = {key: value for e in effects if isinstance(e, Remember) for key, value in e.values.items()}
    bar = records(run(station, begin_s=5.0), "bar")[0]
    assert (bar["verdict"], bar["heat"], bar["order_number"]) == ("conforming", "H7", "4711")
    assert records(monitor("C80", memory=read_memory(kept)).begin(stamp(9.0)), "expected")[0]["grade"] == "C15"
    assert records(monitor("C15", memory=read_memory(kept)).begin(stamp(9.0)), "expected")[0]["who"] == "settings"
    named = monitor("C80", memory=read_memory(kept), named="C80").begin(stamp(9.0))
    assert records(named, "expected")[0]["grade"] == "C80"


def test_acknowledge_clears_the_alert_of_a_bar_that_has_gone() -> None:
    """By the alert's name, or all; an unknown name is refused."""
    station = monitor("C80")
    name = records(run(station), "alert")[0]["alert"]
    refused = station.order(order("acknowledge", alert="stalled-99"), stamp(3.0))
    assert not records(refused, "order")[0]["accepted"]
    cleared = records(station.order(order("acknowledge", alert=name), stamp(3.0)), "alert")[0]
    assert (cleared["state"], cleared["who"]) == ("cleared", "foreman")
    assert not records(station.order(order("acknowledge", alert="all"), stamp(3.0)), "alert")


def test_refused_orders_are_recorded_unless_they_flood() -> None:
    """A refusal tells why; a quiet one leaves no trace."""
    station = monitor()
    loud = station.order(Refusal(name="expect", reason="malformed"), stamp(0.0))
    assert [(one["accepted"], one["reason"]) for one in records(loud, "order")] == [(False, "malformed")]
    assert station.order(Refusal(name="expect", reason="flood", quiet=True), stamp(0.0)) == []


def test_view_shows_the_next_picture() -> None:
    """Asked for once, sent once."""
    station = monitor()
    rng = np.random.default_rng(1)
    assert records(station.order(order("view"), stamp(0.0)), "order")[0]["accepted"]
    frame = Frame(picture=sparks(rng), index=7, t_s=0.1)
    views = [e for e in station.see(frame, stamp(0.1)) if isinstance(e, SendView)]
    assert [(view.frame, view.request) for view in views] == [(7, "id-view")]
    frame = Frame(picture=sparks(rng), index=8, t_s=0.11)
    assert not [e for e in station.see(frame, stamp(0.1)) if isinstance(e, SendView)]


def test_a_blind_station_never_says_conforming() -> None:
    """The camera is lost for a moment in the middle of a good bar: inconclusive, with its cause."""
    station = monitor("C15")
    effects: list[Effect] = []
    for frame in line_of_bars(np.random.default_rng(5), bars=1):
        if frame.index == 80:
            effects += station.complain({"camera_lost": True}, stamp(frame.t_s), detail="unplugged")
        if frame.index == 100:
            effects += station.complain({"camera_lost": False}, stamp(frame.t_s))
        effects += station.see(frame, stamp(frame.t_s))
    bar = records(effects, "bar")[0]
    assert (bar["verdict"], bar["causes"]) == ("inconclusive", ["camera_lost"])
    assert [one["condition"] for one in records(effects, "condition")] == ["failure", "good"]
    assert [one["state"] for one in records(effects, "alert")] == ["raised", "cleared"]


def test_pictures_of_another_size_are_not_judged() -> None:
    """A named cause, no exception, and the judging goes on when the size is right again."""
    station = monitor()
    wrong = Frame(picture=np.zeros((10, 10), np.uint8), index=0, t_s=0.0)
    assert records(station.see(wrong, stamp(0.0)), "condition")[0]["causes"][0]["cause"] == "wrong_size"
    right = Frame(picture=quiet(np.random.default_rng(1)), index=1, t_s=0.01)
    assert records(station.see(right, stamp(0.01)), "condition")[0]["condition"] == "good"


def test_too_many_skipped_frames_make_a_bar_inconclusive() -> None:
    """Half of the frames were not looked at: what was missed is not known to be good."""
    station = monitor("C15")
    effects: list[Effect] = []
    for frame in line_of_bars(np.random.default_rng(5), bars=1, contact_s=2.0):
        if frame.index % 2 == 0:
            half = Frame(picture=frame.picture, index=frame.index, t_s=frame.t_s, skipped=1)
            effects += station.see(half, stamp(frame.t_s))
    bar = records(effects, "bar")[0]
    assert bar["verdict"] == "inconclusive"
    assert "dropping" in bar["causes"]


def test_blind_for_too_long_stops_the_line_until_it_sees_again() -> None:
    """With blind_stop_s, and without latch."""
    station = monitor(relay={"blind_stop_s": 3.0, "latch": False})
    station.begin(stamp(0.0))
    station.complain({"camera_lost": True}, stamp(1.0))
    assert not [e for e in station.tick(stamp(3.9)) if isinstance(e, SetRelay)]
    assert [e.stop for e in station.tick(stamp(4.1)) if isinstance(e, SetRelay)] == [True]
    seen = station.complain({"camera_lost": False}, stamp(5.0))
    assert [e.stop for e in seen if isinstance(e, SetRelay)] == [False]


def test_relay_reports_are_recorded_and_a_lost_relay_is_a_failure() -> None:
    """Wanted level, read-back and reason; then the port is gone, then back."""
    station = monitor()
    fine = station.relay_report(stop=True, reason="bar 4", read_back=True, error="", stamp=stamp(0.0))
    body = records(fine, "relay")[0]
    assert (body["wanted"], body["read_back"], body["energised"], body["reason"]) == ("stop", "stop", False, "bar 4")
    lost = station.relay_report(stop=True, reason="bar 4", read_back=None, error="port gone", stamp=stamp(1.0))
    assert records(lost, "condition")[0]["condition"] == "failure"
    back = station.relay_report(stop=True, reason="bar 4", read_back=True, error="", stamp=stamp(2.0))
    assert records(back, "condition")[0]["condition"] == "good"


def test_summary_comes_on_time_and_not_more() -> None:
    """Every five seconds while nothing happens."""
    station = monitor()
    station.begin(stamp(0.0))
    times = [t / 10 for t in range(1, 160) if any(isinstance(e, Publish) for e in station.tick(stamp(t / 10)))]
    assert times == pytest.approx([5.0, 10.0, 15.0])


def test_a_summary_has_the_figures_of_the_bar_at_the_wheel() -> None:
    """Up to its last full window while it touches, of the whole contact when it has ended."""
    station = monitor()
    station.begin(stamp(0.0))
    seen: list[Any] = []
    for frame in line_of_bars(np.random.default_rng(5), bars=2, contact_s=1.5):
        effects = station.see(frame, stamp(frame.t_s))
        seen += [e.payload["figures"] for e in effects if isinstance(e, Publish)]
    assert [(one["frames_seen"], round(one["begin_s"], 2)) for one in seen] == [
        (75, 0.4),
        (150, 0.4),
        (75, 2.3),
        (150, 2.3),
    ]


@pytest.mark.parametrize("synced", [True, False])
def test_a_band_taught_by_order_says_whether_its_date_can_be_trusted(synced: bool) -> None:
    """A board without a battery clock has woken in the wrong year: the band is good, its date is marked."""
    station = monitor("C15")
    station.begin(stamp(0.0, synced=synced))
    station.order(order("teach", grade="X1", bars=5), stamp(0.0, synced=synced))
    effects: list[Effect] = []
    for frame in line_of_bars(np.random.default_rng(5), bars=5):
        effects += station.see(frame, stamp(frame.t_s, synced=synced))
    (saved,) = [effect.band for effect in effects if isinstance(effect, SaveBand)]
    assert saved.clock_synced is synced
    assert ("date" in records(effects, "order")[-1]["reason"]) is not synced
    assert (f"clock_synced = {str(synced).lower()}" in band_toml(saved)) and saved.taught.startswith("2026-")


def test_the_same_input_gives_the_same_effects() -> None:
    """Replay is exact: nothing but what goes in decides what comes out."""

    def bodies(effects: list[Effect]) -> list[str]:
        return [repr(e) for e in effects if isinstance(e, (Record, Remember, Publish, SetRelay, Told))]

    assert bodies(run(monitor("C80"), bars=2)) == bodies(run(monitor("C80"), bars=2))


@pytest.mark.parametrize(
    "kept",
    [
        {},
        {"bar": "x", "expected": 3, "counts": [], "stop": "y", "alerts": 7, "orders": {}},
        {"bar": -1, "expected": {"grade": "../x"}, "counts": {"conforming": -3}, "alerts": {"open": [{"number": "z"}]}},
        {"alerts": {"next": None, "open": [None, 5, {"number": 3}]}},
    ],
)
def test_a_damaged_memory_keeps_no_station_down(kept: dict[str, Any]) -> None:
    """What cannot be understood counts as not kept."""
    memory = read_memory(kept)
    assert memory.bar == 0
    assert memory.alerts == ()
    assert monitor(memory=memory).begin(stamp(0.0))


def test_a_stop_that_cannot_be_read_is_a_stop() -> None:
    """The safe reading of a damaged latch."""
    memory = read_memory({"stop": {"state": "rnu"}})
    begun = monitor(memory=memory).begin(stamp(0.0))
    assert [e.stop for e in begun if isinstance(e, SetRelay)] == [True]
