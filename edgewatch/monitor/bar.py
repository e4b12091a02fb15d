"""The bar at the wheel: its number, what is expected of it, its trial, what was wrong meanwhile, its pictures."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping

from edgewatch.figures.meter import BarDone
from edgewatch.figures.values import Figures
from edgewatch.judge.bands import Band
from edgewatch.judge.causes import BLIND
from edgewatch.judge.likeness import Evidence
from edgewatch.judge.trial import NONCONFORMING, Judgement, Standing, Trial
from edgewatch.monitor.effects import KeepPicture
from edgewatch.monitor.exhibits import Exhibits
from edgewatch.monitor.memory import Expectation
from edgewatch.settings import Settings
from edgewatch.sight.optics import Optics
from edgewatch.wire import messages

DROPPING_SHARE = 0.2
"""With more than this share of a contact's frames skipped, the bar is not judged as if all had been seen."""


class BarAtWheel:
    """One contact from begin to verdict. ``factor``: gives what reach must be multiplied by (wheel speed)."""

    def __init__(
        self,
        number: int,
        expectation: Expectation,
        bands: Mapping[str, Band],
        *,
        settings: Settings,
        optics: Optics,
        factor: Callable[[Band], float],
    ) -> None:
        self.number = number
        self.expectation = expectation
        self.band = bands.get(expectation.grade)
        self.condemned = False
        """Whether it has been called nonconforming."""
        self.exhibits = Exhibits(settings.evidence.pictures)
        self._causes: dict[str, None] = {}
        band = self.band
        self._trial = Trial(
            band,
            [other for grade, other in bands.items() if grade != expectation.grade],
            false_alarm=settings.judge.false_alarm,
            miss=settings.judge.miss,
            least_streaks=settings.judge.least_streaks,
            misfit=band.misfit(optics) if band else (),
            reach_factor=(lambda window: factor(band)) if band else None,
        )

    def note(self, causes: Iterable[str]) -> None:
        """Causes that hold while it touches the wheel."""
        self._causes.update(dict.fromkeys(causes))

    def look(self, window: Figures) -> Standing:
        """Take one window into the trial."""
        return self._trial.look(window, tuple(BLIND.intersection(self._causes)))

    def evidence(self) -> Evidence:
        """What it has shown."""
        return self._trial.evidence()

    def close(self, event: BarDone) -> Judgement:
        """The verdict."""
        seen, skipped = event.bar.frames_seen, event.bar.frames_skipped
        if not self.expectation.grade:
            self.note(["no_expected"])
        if skipped > DROPPING_SHARE * (seen + skipped):
            self.note(["dropping"])
        return self._trial.close(event.bar, tuple(self._causes))

    def pictures(self, event: BarDone, judgement: Judgement) -> list[KeepPicture]:
        """Evidence to keep, if it is nonconforming."""
        if judgement.verdict != NONCONFORMING:
            return []
        captions = captions_of(self.number, self.expectation.grade, event, judgement, self.band)
        return [
            KeepPicture(
                bar=self.number,
                name=f"{place}",
                picture=exhibit.picture,
                detections=exhibit.detections,
                captions=(*captions, f"{exhibit.t_s - event.begin_s:.3f} s after contact began"),
            )
            for place, exhibit in enumerate(self.exhibits.kept, start=1)
        ]

    def body(self, event: BarDone, judgement: Judgement, pictures: Iterable[str]) -> messages.Body:
        """The bar's message."""
        evidence = self.evidence()
        return messages.bar(
            bar=self.number,
            expected=self.expectation.grade,
            verdict=judgement.verdict,
            values=event.bar,
            decided_after_s=judgement.decided_after_s,
            causes=judgement.causes,
            nearest=judgement.nearest,
            heat=self.expectation.heat,
            order_number=self.expectation.order_number,
            band=band_body(self.band) if self.band else None,
            pictures=list(pictures),
            extra={
                "figure": judgement.figure,
                "log_evidence": judgement.log_evidence,
                "ended_by": event.reason,
                "reach_at_taught_speed_mm": evidence.reach_mm,
            },
        )


def band_body(band: Band) -> messages.Body:
    """The limits of a band for a message."""
    nan = float("nan")
    return messages.band(
        grade=band.grade,
        burst_rate_low_per_m=band.burst_rate_low_per_m,
        burst_rate_high_per_m=band.burst_rate_high_per_m,
        reach_low_mm=nan if band.reach_low_mm is None else band.reach_low_mm,
        reach_high_mm=nan if band.reach_high_mm is None else band.reach_high_mm,
    )


def bar_line(body: messages.Body) -> messages.Body:
    """The line that ``watch --json`` prints for a bar."""
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
