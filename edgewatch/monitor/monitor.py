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
from edgewatch.judge.bands import Band
from edgewatch.judge.causes import BLIND, CAUSES, FAILURE
from edgewatch.judge.trial import NONCONFORMING, Judgement, Trial
from edgewatch.monitor.alerts import Alert, AlertList
from edgewatch.monitor.blindness import FLAG_CAUSES, Blindness
from edgewatch.monitor.condition import Complaints
from edgewatch.monitor.effects import Effect, KeepPicture, Publish, Record, Remember, SendView, SetRelay, Told
from edgewatch.monitor.exhibits import Exhibits
from edgewatch.monitor.memory import Expectation, Memory, keep_alerts, keep_expectation
from edgewatch.monitor.stop import StopEvent, StopState, after
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
DROPPING_SHARE = 0.2
"""More than this share of a contact's frames skipped: the bar is not judged as if all had been seen."""


class Monitor:
    """One station as a state machine.

    ``bands``: every taught band by grade. ``memory``: what a former run remembered. ``named``: the grade that was
    named on the command line, which goes before what was remembered.
    """

    def __init__(
        self,
        settings: Settings,
        *,
        bands: Mapping[str, Band],
        memory: Memory | None = None,
        named: str | None = None,
    ) -> None:
        self._settings = settings
        self._optics = settings.sight_optics()
        self._bands = dict(bands)
        memory = memory or Memory()
        self._sight = Sight(self._optics)
        self._meter = BarMeter(settings.figures, self._optics)
        self._blindness = Blindness()
        self._complaints = Complaints()
        self._exhibits = Exhibits(settings.evidence.pictures)
        self._alerts = AlertList(next_number=memory.next_alert, open_alerts=memory.alerts)
        self._bar = memory.bar
        self._counts = dict(memory.counts)
        self._stop, self._stop_reason = memory.stop, memory.stop_reason
        self._expectation = self._first_expectation(memory.expectation, named)
        if self._expectation is not memory.expectation:
            self._counts = dict.fromkeys(messages.VERDICTS, 0)
        self._trial: Trial | None = None
        self._bar_causes: dict[str, None] = {}
        self._condemned = False
        self._released_by = ""
        self._view_wanted: Order | None = None
        self._blind_since_s = math.nan
        self._summary_s = -math.inf
        self._frames_seen = 0
        self._frames_skipped = 0
        self._rolling: messages.Body | None = None
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
        grade = self._expectation.grade
        self._complaints.set("no_band", bool(grade) and grade not in self._bands)
        effects.append(self._condition_record())
        if self._settings.relay.kind != "none":
            effects.append(self._relay_effect())
        effects += self._summary(stamp, always=True)
        return effects

    def see(self, frame: Frame, stamp: Stamp) -> list[Effect]:
        """Judge one frame."""
        effects: list[Effect] = []
        self._frames_seen += 1
        self._frames_skipped += frame.skipped
        self._last_t_s = frame.t_s
        right_size = frame.picture.shape == (self._optics.height_px, self._optics.width_px)
        effects += self.complain({"wrong_size": not right_size}, stamp, detail=f"{frame.picture.shape[::-1]} px")
        if not right_size:
            return effects
        detections = self._sight.look(frame.picture)
        causes = self._blindness.update(detections.light, len(detections.streaks), frame.t_s)
        effects += self.complain({cause: cause in causes for cause in FLAG_CAUSES.values()}, stamp)
        for event in self._meter.update(detections, t_s=frame.t_s, skipped=frame.skipped):
            effects += self._on_event(event, stamp)
        if self._meter.in_contact:
            self._bar_causes.update(dict.fromkeys(self._complaints.blinding))
            self._exhibits.offer(frame.picture, detections, frame.t_s)
        if self._view_wanted is not None:
            effects.append(self._view(frame, detections))
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
            effects.append(self._answered(found, accepted=False, reason="this station does not teach by order"))
        return effects

    def tick(self, stamp: Stamp, *, unsent: int = 0, thinned: int = 0) -> list[Effect]:
        """Time passes, a few times a second at least, also while no picture comes."""
        self._unsent, self._thinned = unsent, thinned
        effects = self.complain({"clock_not_synced": not stamp.synced, "windows_thinned": thinned > 0}, stamp)
        effects += self._blind_stop(stamp)
        return effects + self._summary(stamp)

    def complain(self, causes: Mapping[str, bool], stamp: Stamp, *, detail: str = "") -> list[Effect]:
        """Causes that are active or not, as whoever looks after them says; records what changed."""
        effects: list[Effect] = []
        changed = [cause for cause, active in causes.items() if self._complaints.set(cause, active, detail)]
        if not changed:
            return effects
        for cause in changed:
            effects += self._cause_alert(cause, active=causes[cause])
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
            bar=self._bar if self._condemned and stop else None,
            who=self._released_by if not stop else "",
        )
        return [*effects, Record(kind="relay", payload=body)]

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
    def status(self) -> str:
        """One line for the service manager."""
        counts = ", ".join(f"{number} {verdict}" for verdict, number in self._counts.items())
        return f"{self._complaints.condition}; {self._expectation.grade or 'nothing'} expected; {counts}"

    def replace_bands(self, bands: Mapping[str, Band]) -> None:
        """Use these bands from the next contact on."""
        self._bands = dict(bands)

    # ------------------------------------------------------------------ contacts

    def _on_event(self, event: Begin | WindowDone | BarDone, stamp: Stamp) -> list[Effect]:
        if isinstance(event, Begin):
            return self._on_begin()
        if isinstance(event, WindowDone):
            return self._on_window(event, stamp)
        return self._on_bar(event, stamp)

    def _on_begin(self) -> list[Effect]:
        self._bar += 1
        self._bar_causes = {}
        self._condemned = False
        self._exhibits.clear()
        band = self._bands.get(self._expectation.grade)
        self._trial = Trial(
            band,
            [other for grade, other in self._bands.items() if grade != self._expectation.grade],
            false_alarm=self._settings.judge.false_alarm,
            miss=self._settings.judge.miss,
            least_streaks=self._settings.judge.least_streaks,
            misfit=band.misfit(self._optics) if band else (),
        )
        return self._move_stop(StopEvent.CONTACT, "")

    def _on_window(self, event: WindowDone, stamp: Stamp) -> list[Effect]:
        assert self._trial is not None
        self._bar_causes.update(dict.fromkeys(self._complaints.blinding))
        window = event.window
        effects: list[Effect] = [
            Record(kind="window", payload=messages.window(values=window, bar=self._bar)),
            Remember(values={"bar": self._bar}),
        ]
        self._rolling = messages.figures(event.bar)
        standing = self._trial.look(window, tuple(BLIND.intersection(self._bar_causes)))
        if standing.nonconforming and not self._condemned:
            effects += self._condemn(f"after {standing.decided_after_s:.2f} s of contact")
        return effects + self._summary(stamp)

    def _condemn(self, when: str) -> list[Effect]:
        """The bar under trial is nonconforming: say so now and stop the line."""
        self._condemned = True
        text = f"bar {self._bar} does not conform to {self._expectation.grade}, {when}"
        effects = self._move_stop(
            StopEvent.CONDEMN_LATCHING if self._settings.relay.latch else StopEvent.CONDEMN, f"bar {self._bar}"
        )
        return effects + self._told_alerts(self._alerts.raise_("nonconforming_bar", text, latched=True, bar=self._bar))

    def _on_bar(self, event: BarDone, stamp: Stamp) -> list[Effect]:
        assert self._trial is not None
        causes = list(self._bar_causes)
        if not self._expectation.grade:
            causes.append("no_expected")
        if event.bar.frames_skipped > DROPPING_SHARE * (event.bar.frames_seen + event.bar.frames_skipped):
            causes.append("dropping")
        judgement = self._trial.close(event.bar, tuple(dict.fromkeys(causes)))
        self._trial = None
        effects: list[Effect] = []
        if judgement.verdict == NONCONFORMING and not self._condemned:
            effects += self._condemn("when the contact ended")
        self._counts[judgement.verdict] += 1
        self._rolling = messages.figures(event.bar)
        names: list[str] = []
        if judgement.verdict == NONCONFORMING:
            for effect in self._pictures(event, judgement):
                names.append(effect.name)
                effects.append(effect)
        band = self._bands.get(self._expectation.grade)
        body = messages.bar(
            bar=self._bar,
            expected=self._expectation.grade,
            verdict=judgement.verdict,
            values=event.bar,
            decided_after_s=judgement.decided_after_s,
            causes=judgement.causes,
            nearest=judgement.nearest,
            heat=self._expectation.heat,
            order_number=self._expectation.order_number,
            band=band_body(band) if band else None,
            pictures=names,
            extra={"figure": judgement.figure, "log_evidence": judgement.log_evidence, "ended_by": event.reason},
        )
        effects.append(Record(kind="bar", payload=body))
        effects.append(Remember(values={"bar": self._bar, "counts": dict(self._counts)}))
        effects.append(Told(line=bar_line(body)))
        if self._condemned:  # the bar has left the wheel; its alert stays until somebody has seen it
            effects += self._told_alerts(self._alerts.go("nonconforming_bar", bar=self._bar))
        return effects + self._summary(stamp, always=True)

    def _pictures(self, event: BarDone, judgement: Judgement) -> list[KeepPicture]:
        if not self._settings.evidence.folder:
            return []
        captions = captions_of(
            self._bar, self._expectation.grade, event, judgement, self._bands.get(self._expectation.grade)
        )
        return [
            KeepPicture(
                bar=self._bar,
                name=f"bar-{self._bar:06d}-{number}.jpg",
                picture=exhibit.picture,
                detections=exhibit.detections,
                captions=(*captions, f"{exhibit.t_s - event.begin_s:.3f} s after contact began"),
            )
            for number, exhibit in enumerate(self._exhibits.kept, start=1)
        ]

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
        known = not order.grade or order.grade in self._bands
        effects: list[Effect] = [
            self._answered(order, reason="" if known else f"no band is taught for {order.grade}: bars are not judged"),
            Record(kind="expected", payload=self._expected_body()),
            self._remember_expected(),
            Remember(values={"counts": dict(self._counts)}),
        ]
        effects += self.complain({"no_band": not known}, stamp)
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
        """Failures and whatever blinds the station, and drift, are alerts; the rest shows in the condition alone."""
        what = CAUSES[cause]
        if not (what.blinds or what.condition == FAILURE or cause.startswith("drift")):
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
            messages.cause(cause=name, condition=CAUSES[name].condition, detail=self._complaints.detail(name))
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
        apart = SUMMARY_APART_S if self._meter.in_contact else SUMMARY_S
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
        body["figures"] = self._rolling
        return [Publish(kind="summary", payload=body)]

    def _view(self, frame: Frame, detections: Detections) -> SendView:
        assert self._view_wanted is not None
        bar = f"bar {self._bar}" if self._meter.in_contact else "no bar at the wheel"
        return SendView(
            picture=frame.picture.copy(),
            detections=detections,
            captions=(f"{bar}, expected {self._expectation.grade or 'nothing'}", self._complaints.condition),
            frame=frame.index,
            request=self._view_wanted.id,
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


def band_body(band: Band) -> messages.Body:
    """The limits of a band for a message."""
    return messages.band(
        grade=band.grade,
        burst_rate_low_per_m=band.burst_rate_low_per_m,
        burst_rate_high_per_m=band.burst_rate_high_per_m,
        reach_low_mm=math.nan if band.reach_low_mm is None else band.reach_low_mm,
        reach_high_mm=math.nan if band.reach_high_mm is None else band.reach_high_mm,
    )


def bar_line(body: messages.Body) -> messages.Body:
    """The line that ``watch --json`` prints for a bar: the contract's keys first, and nothing that it does not hold."""
    keys = (
        "bar",
        "begin_s",
        "end_s",
        "expected",
        "verdict",
        "decided_after_s",
        "burst_rate_per_m",
        "burst_rate_low_per_m",
        "burst_rate_high_per_m",
        "reach_mm",
        "reach_truncated",
        "bursts",
        "streaks",
        "track_m",
        "nearest",
        "causes",
    )
    return {key: body[key] for key in keys}


def captions_of(bar: int, grade: str, event: BarDone, judgement: Judgement, band: Band | None) -> tuple[str, ...]:
    """Lines below an evidence picture: the figures and the band they are held against."""
    f = event.bar
    lines = [f"bar {bar}: {judgement.verdict}, expected {grade}; decided after {judgement.decided_after_s:.2f} s"]
    rate = f"burst-rate {f.burst_rate_per_m:.3g} /m ({f.burst_rate_low_per_m:.3g} to {f.burst_rate_high_per_m:.3g})"
    reach = f"reach {f.reach_mm:.0f} mm{' (cut off)' if f.reach_truncated else ''}"
    if band is None:
        return (*lines, f"{rate}, {reach}; no band")
    lines.append(f"{rate}; band {band.burst_rate_low_per_m:.3g} to {band.burst_rate_high_per_m:.3g}")
    if band.reach_low_mm is not None and band.reach_high_mm is not None:
        lines.append(f"{reach}; band {band.reach_low_mm:.0f} to {band.reach_high_mm:.0f}")
    nearest = ", ".join(f"{name} {weight:.2f}" for name, weight in judgement.nearest[:4])
    return (*lines, f"nearest: {nearest or 'none'}")
