"""Reference bars taken by order: the next bars at the wheel teach a band, or are master bars that check one."""

from __future__ import annotations

import dataclasses

from edgewatch.errors import SettingsError
from edgewatch.figures.meter import BarDone
from edgewatch.judge.bands import Band, ReferenceBar
from edgewatch.judge.teaching import find_outliers, reference_bar, teach
from edgewatch.sight.optics import Optics
from edgewatch.wire.messages import Stamp
from edgewatch.wire.orders import Order
from edgewatch.wire.times import write_time


@dataclasses.dataclass(frozen=True, slots=True, kw_only=True)
class Taught:
    """The outcome of a lesson: a band, or why there is none; in words for the answer."""

    band: Band | None
    sentence: str


class Lesson:
    """Collects the ``bars`` reference bars that an order asked for."""

    def __init__(self, order: Order) -> None:
        self.order = order
        self._bars: list[ReferenceBar] = []

    @property
    def bars(self) -> tuple[ReferenceBar, ...]:
        """Reference bars taken so far."""
        return tuple(self._bars)

    @property
    def complete(self) -> bool:
        """Whether all have been taken."""
        return len(self._bars) >= self.order.bars

    def take(self, event: BarDone) -> bool:
        """Take one contact; ``False`` if it has no track to teach from."""
        try:
            self._bars.append(reference_bar(len(self._bars) + 1, "order", event.bar, event.windows))
        except ValueError:
            return False
        return True

    def finish(self, optics: Optics, *, wheel_speed_m_s: float, stamp: Stamp) -> Taught:
        """Make the band. An outlying bar among the references makes none: the classic mistake is a wrong bar. One that
        is taught by a clock that is not synchronised is good, and marked: its date may be wrong.
        """
        outliers = find_outliers(self._bars)
        if outliers:
            named = ", ".join(f"bar {one.number} by {one.figure}" for one in outliers)
            return Taught(band=None, sentence=f"not taught: {named} does not fit the others")
        try:
            band = teach(
                self.order.grade,
                self._bars,
                optics=optics,
                wheel_speed_m_s=wheel_speed_m_s,
                taught=write_time(stamp.utc_s),
            )
        except SettingsError as error:
            return Taught(band=None, sentence=f"not taught: {error}")
        low, high = band.burst_rate_low_per_m, band.burst_rate_high_per_m
        sentence = f"taught from {band.bars_used} bars: burst-rate {low:.3g} to {high:.3g} /m"
        if not stamp.synced:
            sentence += "; the clock is not synchronised: the date of the teaching may be wrong"
        return Taught(band=dataclasses.replace(band, clock_synced=stamp.synced), sentence=sentence)
