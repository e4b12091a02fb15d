"""The monitor: pictures, orders, ticks and failures go in, effects come out. Core: it opens nothing, reads no clock.

Every method takes the stamp of the moment and returns effects in the order in which they are to be carried out. Records
and what must be remembered with them come out of one call together, and belong in one transaction.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping, Sequence

from edgewatch.figures.contact import Begin
from edgewatch.figures.meter import BarDone, BarMeter, WindowDone
from edgewatch.figures.values import Figures
from edgewatch.judge.bands import Band
from edgewatch.judge.causes import CAUSES, FAILURE
from edgewatch.judge.drift import LEAST_MASTERS, DriftWatch
from edgewatch.judge.teaching import LEAST_BARS
from edgewatch.judge.trial import CONFORMING, NONCONFORMING
from edgewatch.judge.verification import bar_evidence, verify
from edgewatch.monitor.alerts import Alert, AlertList
from edgewatch.monitor.bar import BarAtWheel, band_body, bar_line
from edgewatch.monitor.barline import BarLine
from edgewatch.monitor.blindness import FLAG_CAUSES, Blindness
from edgewatch.monitor.condition import Complaints
from edgewatch.monitor.effects import Effect, Publish, Record, Remember, SaveBand, SendView, SetRelay, Told
from edgewatch.monitor.feed import Feed
from edgewatch.monitor.lens import LensWatch, lens_limits
from edgewatch.monitor.lessons import Lesson
from edgewatch.monitor.memory import Expectation, Memory, keep_alerts, keep_expectation
from edgewatch.monitor.shaking import ShakeWatch
from edgewatch.monitor.stop import StopEvent, StopState, after
from edgewatch.monitor.wheel import WheelWatch
from edgewatch.settings import Settings
from edgewatch.sight.detections import Detections
from edgewatch.sight.frame import Frame
from edgewatch.sight.sight import Sight
from edgewatch.wire import messages
from edgewatch.wire.messages import Stamp
from edgewatch.wire.orders import Order, Refusal, answer
from edgewatch.wire.relayframes import is_energised

SUMMARY_S = 5.0
"""A summary at least this often while nothing else brings one (s)."""
SUMMARY_APART_S = 1.0
"""Summaries during a contact are at least this far apart (s)."""
FEED_CAUSES = ("frozen", "dropping", "wrong_size", "wrong_rate", "stalled")
DRIFT_CAUSES = ("drift_rate", "drift_reach")
REHEARSED = "rehearsal"
"""The kind of source whose bars come off no line, also when it runs at a camera's pace."""


class Monitor:
    """One station as a state machine.

    ``bands``: every taught band by grade. ``memory``: what a former run remembered. ``named``: the grade that was
    named on the command line, which goes before what was remembered. ``live``: the source does not wait for us.
    """

    def __init__(
        self,
        settings: Settings,
        *,
        bands: Mapping[str, Band],
        memory: Memory | None = None,
        named: str | None = None,
        live: bool = False,
    ) -> None:
        self._settings = settings
        self._optics = settings.sight_optics()
        self._bands = dict(bands)
        memory = memory or Memory()
        self._sight = Sight(self._optics)
        self._meter = BarMeter(settings.figures, self._optics)
        self._blindness = Blindness()
        self._lens = LensWatch()
        self._shake = ShakeWatch(self._optics.fps)
        self._complaints = Complaints(tolerated=() if self._needs_clock(live) else ("clock_not_synced",))
        self._feed = Feed(
            width_px=self._optics.width_px,
            height_px=self._optics.height_px,
            fps=self._optics.fps,
            live=live,
            stall_s=settings.source.stall_s,
        )
        self._line = BarLine(late_s=settings.contact.late_s)
        self._alerts = AlertList(next_number=memory.next_alert, open_alerts=memory.alerts)
        self._number = memory.bar
        self._counts = dict(memory.counts)
        self._stop, self._stop_reason = memory.stop, memory.stop_reason
        self._expectation = self._first_expectation(memory.expectation, named)
        if self._expectation is not memory.expectation:
            self._counts = dict.fromkeys(messages.VERDICTS, 0)
        self._bar: BarAtWheel | None = None
        self._wheel = WheelWatch()
        self._tell_wheel()
        self._drift = dict(memory.drift)
        self._watch: DriftWatch | None = self._drift_watch()
        self._lesson: Lesson | None = None
        self._released_by = ""
        self._view_wanted: Order | None = None
        self._blind_since_s = math.nan
        self._summary_s = -math.inf
        self._frames_seen = 0
        self._frames_skipped = 0
        self._last_bar: messages.Body | None = None
        self._last_t_s = 0.0
        self._unsent = 0
        self._thinned = 0

    # ------------------------------------------------------------------ what goes in

    def begin(self, stamp: Stamp) -> list[Effect]:
        """The station starts: wanted levels and the state it begins with."""
        effects: list[Effect] = []
        for cause in CAUSES:  # what stood when the last run ended is found again, or is gone
            effects += self._told_alerts(self._alerts.go(cause))
        if math.isnan(self._expectation.since_utc_s):
            self._expectation = dataclasses.replace(self._expectation, since_utc_s=stamp.utc_s)
        effects.append(Record(kind="expected", payload=self._expected_body()))
        effects.append(self._remember_expected())
        self._complaints.set("no_band", self._lacks_band())
        effects.append(self._condition_record())
        effects += self._look_at_clock(stamp)
        if self._settings.relay.kind != "none":
            effects.append(self._relay_effect())
        effects += self._summary(stamp, always=True)
        return effects

    def see(self, frame: Frame, stamp: Stamp) -> list[Effect]:
        """Judge one frame."""
        self._frames_seen += 1
        self._frames_skipped += frame.skipped
        self._last_t_s = frame.t_s
        right_size = frame.picture.shape == (self._optics.height_px, self._optics.width_px)
        detections = self._sight.look(frame.picture) if right_size else None
        streaks = 0 if detections is None else len(detections.streaks)
        feed = self._feed.update(frame, now_s=stamp.monotonic_s, streaks=streaks)
        if "frozen" in self._complaints.causes and "frozen" not in feed:
            self._sight.reset()  # it has taken the frozen streaks for the background
        effects = self.complain({cause: cause in feed for cause in FEED_CAUSES}, stamp)
        if detections is None:
            return effects
        causes = self._blindness.update(detections.light, streaks, frame.t_s)
        effects += self.complain({cause: cause in causes for cause in FLAG_CAUSES.values()}, stamp)
        shaking = self._shake.update(detections, frame.t_s)
        effects += self.complain({"vibration": shaking}, stamp, detail=f"{self._shake.shake_px:.1f} px")
        for event in self._meter.update(detections, t_s=frame.t_s, skipped=frame.skipped, again=self._feed.again):
            effects += self._on_event(event, stamp)
        effects += self._look_at_line(stamp)
        if self._bar is not None:
            self._bar.note(self._complaints.withholding)
            self._bar.exhibits.offer(frame.picture, detections, frame.t_s)
        if self._view_wanted is not None:
            effects.append(self._view(self._view_wanted, frame, detections))
            self._view_wanted = None
        return effects

    def order(self, found: Order | Refusal, stamp: Stamp, *, seen: Sequence[str] = ()) -> list[Effect]:
        """Carry out an order, or record why it is refused. ``seen``: identifiers to be remembered over a restart."""
        if isinstance(found, Refusal):
            return [] if found.quiet else [self._answered(found)]
        effects: list[Effect] = [Remember(values={"orders": list(seen)})]
        if found.name == "expect":
            effects += self._expect(found, stamp)
        elif found.name == "acknowledge":
            effects += self._acknowledge(found)
        elif found.name == "release":
            effects += self._release(found)
        elif found.name == "view":
            self._view_wanted = found
            effects.append(self._answered(found))
        else:
            effects += self._begin_lesson(found, stamp)
        return effects

    def tick(self, stamp: Stamp, *, unsent: int = 0, thinned: int = 0, filling: str = "") -> list[Effect]:
        """Time passes, a few times a second at least, also while no picture comes. ``filling``: see ``Filling``."""
        self._unsent, self._thinned = unsent, thinned
        silent = self._feed.silent(stamp.monotonic_s)
        effects = self._look_at_clock(stamp)
        effects += self.complain({"windows_thinned": thinned > 0, "stalled": "stalled" in silent}, stamp)
        effects += self.complain({"outbox_filling": bool(filling)}, stamp, detail=filling)
        effects += self._look_at_line(stamp)
        effects += self._blind_stop(stamp)
        return effects + self._summary(stamp)

    def bar_at_wheel(self, closed: bool, stamp: Stamp) -> list[Effect]:
        """The line's contact input says that a bar is at the wheel, or no longer."""
        self._line.report(closed, stamp.monotonic_s)
        return self._look_at_line(stamp)

    def _needs_clock(self, live: bool) -> bool:
        """Whether a bar of unknown time is kept from being called conforming: it cannot be assigned to heat and bundle.

        A clip was taken at another time anyway, and a rehearsed bar is of no heat.
        """
        kind = self._settings.source.uri.partition(":")[0]
        return live and kind != REHEARSED and self._settings.judge.clock_must_sync

    def _look_at_clock(self, stamp: Stamp) -> list[Effect]:
        return self.complain({"clock_not_synced": not stamp.synced}, stamp)

    def _look_at_line(self, stamp: Stamp) -> list[Effect]:
        missed = self._line.missed(self._bar is not None, stamp.monotonic_s)
        return self.complain({"no_contact": missed}, stamp)

    def complain(self, causes: Mapping[str, bool], stamp: Stamp, *, detail: str = "") -> list[Effect]:
        """Causes that are active or not, as whoever looks after them says; records what changed."""
        effects: list[Effect] = []
        changed = [cause for cause, active in causes.items() if self._complaints.set(cause, active, detail)]
        if not changed:
            return effects
        for cause in changed:
            effects += self._cause_alert(cause, active=causes[cause])
        if self._bar is not None:  # not only with the next picture: it may not come, or end the cause
            self._bar.note(self._complaints.withholding)
        effects.append(self._condition_record())
        return effects + self._blind_stop(stamp)

    def relay_report(
        self, *, stop: bool, reason: str, read_back: bool | None, error: str, stamp: Stamp
    ) -> list[Effect]:
        """What became of a wanted level: it is in force (``error`` empty), or the relay cannot be reached."""
        effects = self.complain({"relay_lost": bool(error)}, stamp, detail=error)
        body = messages.relay(
            wanted="stop" if stop else "run",
            energised=is_energised(stop, self._settings.relay.energise_to),
            read_back="unknown" if read_back is None else "stop" if read_back else "run",
            reason=error or reason,
            latched=self._stop is StopState.LATCHED,
            bar=self._bar.number if stop and self._bar is not None and self._bar.condemned else None,
            who=self._released_by if not stop else "",
        )
        return [*effects, Record(kind="relay", payload=body)]

    def remember(self) -> list[Effect]:
        """Everything that must outlive a restart, anew: the journal that held it was damaged."""
        values = {
            "bar": self._number,
            "expected": keep_expectation(self._expectation),
            "counts": dict(self._counts),
            "stop": self._stop_value(),
            "alerts": keep_alerts(self._alerts),
            "drift": dict(self._drift),
        }
        return [Remember(values=values)]

    def end(self, stamp: Stamp) -> list[Effect]:
        """The source has ended or the station stops: the contact under way is closed."""
        effects: list[Effect] = []
        for event in self._meter.close(self._last_t_s):
            effects += self._on_event(event, stamp)
        return effects + self._summary(stamp, always=True)

    def reset_sight(self) -> None:
        """Forget the pictures seen: after a fault in the seeing, or when the camera came back."""
        self._sight.reset()

    @property
    def causes(self) -> tuple[str, ...]:
        """Names of the causes in force, worst first."""
        return self._complaints.causes

    @property
    def status(self) -> str:
        """One line for the service manager."""
        counts = ", ".join(f"{number} {verdict}" for verdict, number in self._counts.items())
        return f"{self._complaints.condition}; {self._expectation.grade or 'nothing'} expected; {counts}"

    def replace_bands(self, bands: Mapping[str, Band]) -> None:
        """Use these bands from the next contact on."""
        self._bands = dict(bands)
        self._lens.reset()

    # ------------------------------------------------------------------ contacts

    def _on_event(self, event: Begin | WindowDone | BarDone, stamp: Stamp) -> list[Effect]:
        clock = self._look_at_clock(stamp)  # not only with the next tick: the record that follows has this stamp
        if isinstance(event, Begin):
            return clock + self._on_begin()
        assert self._bar is not None
        if isinstance(event, WindowDone):
            return clock + self._on_window(self._bar, event, stamp)
        return clock + self._on_bar(self._bar, event, stamp)

    def _on_begin(self) -> list[Effect]:
        self._number += 1
        self._bar = BarAtWheel(
            self._number,
            self._expectation,
            self._bands,
            settings=self._settings,
            optics=self._optics,
            factor=self._wheel.factor,
        )
        return self._move_stop(StopEvent.CONTACT, "")

    def _on_window(self, bar: BarAtWheel, event: WindowDone, stamp: Stamp) -> list[Effect]:
        lens = self._look_at_lens(event.window, stamp)
        bar.note(self._complaints.withholding)
        self._wheel.update(event.window)
        effects: list[Effect] = [
            *lens,
            Record(kind="window", payload=messages.window(values=event.window, bar=bar.number)),
            Remember(values={"bar": bar.number}),
        ]
        if self._lesson is None:
            standing = bar.look(event.window)
            if standing.nonconforming and not bar.condemned:
                effects += self._condemn(bar, f"after {standing.decided_after_s:.2f} s of contact")
        return effects + self._summary(stamp)

    def _look_at_lens(self, seen: Figures, stamp: Stamp, *, whole: bool = False) -> list[Effect]:
        """Compare a window's streaks, or those of a ``whole`` bar, with what was taught."""
        limits = lens_limits(self._bands.values(), self._optics)
        soiled = self._lens.see_bar(seen, limits) if whole else self._lens.see_window(seen, limits)
        return self.complain({"soiled": soiled}, stamp, detail=self._lens.detail)

    def _condemn(self, bar: BarAtWheel, when: str) -> list[Effect]:
        """The bar at the wheel is nonconforming: say so now and stop the line."""
        bar.condemned = True
        text = f"bar {bar.number} does not conform to {bar.expectation.grade}, {when}"
        latch = self._settings.relay.latch
        effects = self._move_stop(StopEvent.CONDEMN_LATCHING if latch else StopEvent.CONDEMN, f"bar {bar.number}")
        raised = self._alerts.raise_("nonconforming_bar", text, latched=True, bar=bar.number)
        return effects + self._told_alerts(raised)

    def _on_bar(self, bar: BarAtWheel, event: BarDone, stamp: Stamp) -> list[Effect]:
        self._bar = None
        if self._lesson is not None:
            bar.note(["teaching"])
        effects = self._look_at_lens(event.bar, stamp, whole=True)
        if self._lens.soiled:
            bar.note(["soiled"])
        judgement = bar.close(event)
        if judgement.verdict == NONCONFORMING and not bar.condemned:
            effects += self._condemn(bar, "when the contact ended")
        self._counts[judgement.verdict] += 1
        self._last_bar = messages.figures(event.bar)
        pictures = bar.pictures(event, judgement) if self._settings.evidence.folder else []
        body = bar.body(event, judgement, [picture.file for picture in pictures])
        effects += pictures
        effects.append(Record(kind="bar", payload=body))
        effects.append(Remember(values={"bar": bar.number, "counts": dict(self._counts)}))
        effects.append(Told(line=bar_line(body)))
        if bar.condemned:  # the bar has left the wheel; its alert stays until somebody has seen it
            effects += self._told_alerts(self._alerts.go("nonconforming_bar", bar=bar.number))
        effects += self.complain({"wheel_speed": not self._wheel.fits}, stamp)
        if judgement.verdict == CONFORMING:
            effects += self._follow_drift(bar, stamp)
        if self._lesson is not None:
            effects += self._take_lesson(self._lesson, event, stamp)
        return effects + self._summary(stamp, always=True)

    # ------------------------------------------------------------------ drift and lessons

    def _drift_watch(self) -> DriftWatch | None:
        """The chart of the grade in force, going on from what was kept."""
        band = self._bands.get(self._expectation.grade)
        if band is None:
            return None
        watch = DriftWatch(band)
        kept = self._drift.get(band.grade)
        if isinstance(kept, Mapping) and kept.get("taught") == band.taught:  # another teaching begins another chart
            watch.restore(kept)
        return watch

    def _keep_drift(self) -> list[Effect]:
        grade, watch = self._expectation.grade, self._watch
        if watch is None or grade not in self._bands:
            return []
        self._drift[grade] = {**watch.kept(), "taught": self._bands[grade].taught}
        return [Remember(values={"drift": dict(self._drift)})]

    def _follow_drift(self, bar: BarAtWheel, stamp: Stamp) -> list[Effect]:
        if self._watch is None or bar.expectation.grade != self._expectation.grade:
            return []
        state = self._watch.update(bar.evidence())
        return self._keep_drift() + self.complain({cause: cause in state.causes for cause in DRIFT_CAUSES}, stamp)

    def _begin_lesson(self, order: Order, stamp: Stamp) -> list[Effect]:
        if order.verify and order.grade not in self._bands:
            return [self._answered(order, accepted=False, reason=f"no band is taught for {order.grade}")]
        least = LEAST_MASTERS if order.verify else LEAST_BARS
        if order.bars < least:
            return [self._answered(order, accepted=False, reason=f"at least {least} bars are needed")]
        self._lesson = Lesson(order)
        return [self._answered(order), *self.complain({"teaching": True}, stamp, detail=order.grade)]

    def _take_lesson(self, lesson: Lesson, event: BarDone, stamp: Stamp) -> list[Effect]:
        lesson.take(event)
        if not lesson.complete:
            return []
        self._lesson = None
        grade = lesson.order.grade
        effects: list[Effect] = []
        if lesson.order.verify:
            found = verify(self._bands[grade], lesson.bars)
            accepted, sentence = found.holds, found.sentence
            masters = [bar_evidence(bar) for bar in lesson.bars]
            if grade == self._expectation.grade and self._watch is not None and self._watch.recentre(masters):
                effects += self._keep_drift()
                effects += self.complain(dict.fromkeys(DRIFT_CAUSES, False), stamp)
        else:
            taught = lesson.finish(self._optics, wheel_speed_m_s=self._wheel.told_m_s, stamp=stamp)
            accepted, sentence = taught.band is not None, taught.sentence
            if taught.band is not None:
                self._bands[grade] = taught.band
                self._watch = self._drift_watch()
                effects.append(SaveBand(band=taught.band))
                self._lens.reset()
                effects += self.complain({"no_band": self._lacks_band(), "soiled": False}, stamp)
        effects.append(self._answered(lesson.order, accepted=accepted, reason=sentence))
        return effects + self.complain({"teaching": False}, stamp)

    def _lacks_band(self) -> bool:
        return bool(self._expectation.grade) and self._expectation.grade not in self._bands

    def _tell_wheel(self) -> None:
        ordered = self._expectation.wheel_surface_speed_m_s
        if math.isfinite(ordered):
            self._wheel.tell(ordered, current=True)
        else:
            self._wheel.tell(self._settings.wheel.surface_speed_m_s or math.nan, current=False)

    # ------------------------------------------------------------------ orders

    def _answered(self, found: Order | Refusal, *, accepted: bool | None = None, reason: str = "") -> Record:
        return Record(
            kind="order",
            payload=answer(found, accepted=accepted, reason=reason),
            reply_topic=found.reply_topic,
            correlation=found.correlation,
        )

    def _expect(self, order: Order, stamp: Stamp) -> list[Effect]:
        self._expectation = Expectation(
            grade=order.grade,
            heat=order.heat,
            order_number=order.order_number,
            who=order.who,
            since_utc_s=stamp.utc_s,
            wheel_surface_speed_m_s=order.wheel_surface_speed_m_s,
            configured=self._settings.judge.expect,
        )
        self._counts = dict.fromkeys(messages.VERDICTS, 0)
        self._tell_wheel()
        self._watch = self._drift_watch()
        known = not self._lacks_band()
        effects: list[Effect] = [
            self._answered(order, reason="" if known else f"no band is taught for {order.grade}: bars are not judged"),
            Record(kind="expected", payload=self._expected_body()),
            self._remember_expected(),
            Remember(values={"counts": dict(self._counts)}),
        ]
        effects += self.complain({"no_band": not known, **dict.fromkeys(DRIFT_CAUSES, False)}, stamp)
        return effects + self._summary(stamp, always=True)

    def _acknowledge(self, order: Order) -> list[Effect]:
        """``alert`` is an alert's name, or ``all``."""
        _, _, number = order.alert.rpartition("-")
        if order.alert != "all" and order.alert not in {alert_name(one) for one in self._alerts.open}:
            return [self._answered(order, accepted=False, reason="no such open alert")]
        changed = self._alerts.acknowledge(None if order.alert == "all" else int(number), order.who)
        return [self._answered(order), *self._told_alerts(changed)]

    def _release(self, order: Order) -> list[Effect]:
        if self._stop is StopState.RUN:
            return [self._answered(order, reason="the line was not stopped")]
        self._released_by = order.who
        return [self._answered(order), *self._move_stop(StopEvent.RELEASE, f"released by {order.who}")]

    # ------------------------------------------------------------------ the process stop

    def _move_stop(self, event: StopEvent, reason: str) -> list[Effect]:
        state = after(self._stop, event)
        if state is self._stop:
            return []
        self._stop = state
        self._stop_reason = reason if state is not StopState.RUN else ""
        if self._settings.relay.kind == "none":
            return [Remember(values={"stop": self._stop_value()})]
        return [self._relay_effect(reason), Remember(values={"stop": self._stop_value()})]

    def _stop_value(self) -> dict[str, str]:
        return {"state": self._stop.value, "reason": self._stop_reason}

    def _relay_effect(self, reason: str = "") -> SetRelay:
        return SetRelay(stop=self._stop is not StopState.RUN, reason=reason or self._stop_reason or "start")

    def _blind_stop(self, stamp: Stamp) -> list[Effect]:
        """Stop the line when the station has been unable to see for too long; let go when it sees again."""
        if not self._complaints.blinding:
            self._blind_since_s = math.nan
            return self._move_stop(StopEvent.SEE, "the station sees again")
        if math.isnan(self._blind_since_s):
            self._blind_since_s = stamp.monotonic_s
        limit = self._settings.relay.blind_stop_s
        if limit <= 0.0 or stamp.monotonic_s - self._blind_since_s < limit:
            return []
        event = StopEvent.BLIND_LATCHING if self._settings.relay.latch else StopEvent.BLIND
        return self._move_stop(event, f"cannot see: {self._complaints.blinding[0]}")

    # ------------------------------------------------------------------ what is told

    def _cause_alert(self, cause: str, *, active: bool) -> list[Effect]:
        """Failures, whatever keeps bars from being called conforming, drift, and what threatens records are alerts; the
        rest shows in the condition alone.
        """
        what = CAUSES[cause]
        withholds = self._complaints.withholds(cause)
        if not (withholds or what.alerts or what.condition == FAILURE or cause.startswith("drift")):
            return []
        if not active:
            return self._told_alerts(self._alerts.go(cause))
        detail = self._complaints.detail(cause)
        text = f"{what.sentence}{f' ({detail})' if detail else ''}"
        return self._told_alerts(self._alerts.raise_(cause, text, latched=False))

    def _told_alerts(self, changed: Sequence[Alert]) -> list[Effect]:
        if not changed:
            return []
        records: list[Effect] = [
            Record(
                kind="alert",
                payload=messages.alert(
                    alert=alert_name(alert),
                    state=alert.shown,
                    text=alert.text,
                    latched=alert.latched,
                    bar=alert.bar,
                    who=alert.who,
                ),
            )
            for alert in changed
        ]
        return [*records, Remember(values={"alerts": keep_alerts(self._alerts)})]

    def _condition_record(self) -> Record:
        causes = [
            messages.cause(cause=name, condition=self._complaints.word(name), detail=self._complaints.detail(name))
            for name in self._complaints.causes
        ]
        return Record(kind="condition", payload=messages.condition(condition=self._complaints.condition, causes=causes))

    def _expected_body(self) -> messages.Body:
        value = self._expectation
        return messages.expected(
            grade=value.grade,
            heat=value.heat,
            order_number=value.order_number,
            who=value.who,
            wheel_surface_speed_m_s=value.wheel_surface_speed_m_s,
        )

    def _remember_expected(self) -> Remember:
        return Remember(values={"expected": keep_expectation(self._expectation)})

    def _summary(self, stamp: Stamp, *, always: bool = False) -> list[Effect]:
        apart = SUMMARY_APART_S if self._bar is not None else SUMMARY_S
        if not always and stamp.monotonic_s - self._summary_s < apart:
            return []
        self._summary_s = stamp.monotonic_s
        band = self._bands.get(self._expectation.grade)
        body = messages.summary(
            condition=self._complaints.condition,
            expected=self._expectation.grade,
            since_utc_s=self._expectation.since_utc_s,
            conforming=self._counts["conforming"],
            nonconforming=self._counts["nonconforming"],
            inconclusive=self._counts["inconclusive"],
            bands=[band_body(band)] if band else [],
            frames_seen=self._frames_seen,
            frames_skipped=self._frames_skipped,
            unsent=self._unsent,
            windows_thinned=self._thinned,
            relay="" if self._settings.relay.kind == "none" else "run" if self._stop is StopState.RUN else "stop",
            alerts=[alert_name(alert) for alert in self._alerts.open],
        )
        body["figures"] = self._rolling()
        return [Publish(kind="summary", payload=body)]

    def _rolling(self) -> messages.Body | None:
        """Figures of the bar at the wheel up to its last full window; before that, those of the last bar."""
        if self._bar is not None and (so_far := self._meter.bar_so_far()).frames_seen:
            return messages.figures(so_far)
        return self._last_bar

    def _view(self, order: Order, frame: Frame, detections: Detections) -> SendView:
        bar = "no bar at the wheel" if self._bar is None else f"bar {self._bar.number}"
        return SendView(
            picture=frame.picture.copy(),
            detections=detections,
            captions=(f"{bar}, expected {self._expectation.grade or 'nothing'}", self._complaints.condition),
            frame=frame.index,
            request=order.id,
        )

    def _first_expectation(self, kept: Expectation | None, named: str | None) -> Expectation:
        """An order outlives a restart unless the configuration, or the command line, has since said otherwise."""
        configured = self._settings.judge.expect
        if kept is not None and named is None and kept.configured == configured:
            return kept
        return Expectation(grade=configured, configured=configured)


def alert_name(alert: Alert) -> str:
    """Name that the alert has in messages, and that an ``acknowledge`` order gives back."""
    return f"{alert.reason}-{alert.number}"
