"""What of a picture is listed: streaks that stand out and are no arms, bursts that are news, and what is doubtful.

This is the last step: it brings together what ``streaks``, ``bursts``, ``glow`` and ``steadiness`` tell.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.bursts import Apexes
from edgewatch.sight.detections import BurstFlag, StreakFlag
from edgewatch.sight.glow import LATE_SURE, Glow, arm_rules, sort_lines
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.native import records
from edgewatch.sight.optics import Optics
from edgewatch.sight.ranks import middle
from edgewatch.sight.ridges import MARGIN_PX
from edgewatch.sight.steadiness import origin_rules, read_origin
from edgewatch.sight.streaks import Lines

CUT_PX = MARGIN_PX + 2.0
"""A streak that comes this near to the picture's edge leaves it: ridge points end at the margin (px)."""

EDGE_PX = 10.0
"""A burst this near to the edge may have arms outside (px)."""

ROOM = 256
"""The compiled form makes room for so many streaks and bursts to begin with: a full stream has fewer."""


class Listed(NamedTuple):
    """``streaks`` to ``rate_bursts`` and the origin as in ``Detections``; ``track_px``: length of all streaks;
    ``middle_snr``: median of their heights, in noise deviations, NaN without.
    """

    streaks: NDArray[np.float32]
    streak_snr: NDArray[np.float32]
    streak_flags: NDArray[np.uint8]
    bursts: NDArray[np.float32]
    burst_arms: NDArray[np.int16]
    burst_flags: NDArray[np.uint8]
    rate_bursts: int
    track_px: float
    middle_snr: float
    origin_offset_px: float
    origin_error_px: float


class Listing:
    """Lists the pictures of one camera, in order."""

    def __init__(
        self, optics: Optics, glow: Glow, *, least_snr: float, least_length_px: float, rate_sure: float
    ) -> None:
        """``glow`` remembers bursts; ``least_snr``, ``least_length_px``, ``rate_sure``: see ``SightTuning``."""
        self._optics = optics
        self._glow = glow
        self._least_snr = least_snr
        self._least_length_px = least_length_px
        self._rate_sure = rate_sure
        self._arm_rules = arm_rules()
        self._rules = glow.news_rules(), origin_rules(optics), self._list_rules()
        self._room = _Room(0, 0)

    def take(self, lines: Lines, snr_per_dn: float, apexes: Apexes, lengths: Lengths) -> Listed:
        """The list of the next picture. ``snr_per_dn``: of a line, by its level along it in the blurred picture."""
        if native.LIBRARY:
            return self._take_compiled(lines, snr_per_dn, apexes, lengths)
        found = sort_lines(lines.begin, lines.end, lines.whole, apexes, self._glow, lengths)
        begin, end = found.begin, found.end
        length = np.hypot(end[:, 0] - begin[:, 0], end[:, 1] - begin[:, 1])
        snr = lines.level * snr_per_dn
        keep = found.streak & (snr >= self._least_snr) & (length > self._least_length_px)
        streaks, snr = np.concatenate([begin, end], axis=1)[keep], snr[keep]
        news = self._glow.news(apexes, lengths)
        rate_bursts = int(self._glow.news(apexes, lengths, self._rate_sure).size)
        self._glow.remember(apexes)
        at = apexes.at[news]
        flags = np.where(apexes.late[news] > LATE_SURE, BurstFlag.LATE, 0).astype(np.uint8)
        flags[self._near_edge(at, EDGE_PX)] |= np.uint8(BurstFlag.EDGE)
        offset_px, error_px = read_origin(streaks, self._optics)
        return Listed(
            streaks=streaks.astype(np.float32),
            streak_snr=snr.astype(np.float32),
            streak_flags=self._cut_flags(streaks),
            bursts=at.astype(np.float32),
            burst_arms=found.arms[news].astype(np.int16),
            burst_flags=flags,
            rate_bursts=rate_bursts,
            track_px=float(length[keep].sum()),
            middle_snr=middle(snr) if snr.size else math.nan,
            origin_offset_px=offset_px,
            origin_error_px=error_px,
        )

    def _near_edge(self, at: NDArray[np.float64], margin_px: float) -> NDArray[np.bool_]:
        o, (x, y) = self._optics, at.T
        return np.asarray(
            (x < margin_px) | (y < margin_px) | (x > o.width_px - 1 - margin_px) | (y > o.height_px - 1 - margin_px)
        )

    def _cut_flags(self, streaks: NDArray[np.float64]) -> NDArray[np.uint8]:
        flags = np.zeros(len(streaks), np.uint8)
        flags[self._near_edge(streaks[:, :2], CUT_PX)] |= np.uint8(StreakFlag.CUT_BEGIN)
        flags[self._near_edge(streaks[:, 2:], CUT_PX)] |= np.uint8(StreakFlag.CUT_END)
        return flags

    def _take_compiled(self, lines: Lines, snr_per_dn: float, apexes: Apexes, lengths: Lengths) -> Listed:
        count, bursts, old = len(lines.begin), len(apexes.at), self._glow.memory
        if count > self._room.streaks_most or bursts > self._room.bursts_most:
            self._room = _Room(count, bursts)
        self._arm_rules.from_contact = lengths.from_contact
        room, kept = self._room, np.empty((len(old) + bursts, 4))
        done = native.LIBRARY.edgewatch_list(
            count,
            *(_start(one) for one in (lines.begin, lines.end, lines.whole, lines.level)),
            native.double(snr_per_dn),
            bursts,
            *(_start(one) for one in (apexes.at, apexes.sure, apexes.late, apexes.fresh)),
            len(old),
            _start(old),
            _start(kept),
            native.reference(lengths.record()),
            native.reference(self._arm_rules),
            *map(native.reference, self._rules),
            native.reference(room.record),
        )
        native.enough(done, 0)
        self._glow.memory = kept[: room.record.remembered]
        return room.listed()

    def _list_rules(self) -> records.ListRules:
        return records.ListRules(
            least_snr=self._least_snr,
            least_length_px=self._least_length_px,
            rate_sure=self._rate_sure,
            cut_px=CUT_PX,
            edge_px=EDGE_PX,
            width=self._optics.width_px,
            height=self._optics.height_px,
            cut_begin=StreakFlag.CUT_BEGIN,
            cut_end=StreakFlag.CUT_END,
            late=BurstFlag.LATE,
            edge=BurstFlag.EDGE,
        )


def _start(array: NDArray[Any]) -> Any:
    return native.start(np.ascontiguousarray(array))


class _Room:
    """Where the compiled form writes, picture after picture."""

    def __init__(self, streaks: int, bursts: int) -> None:
        self.streaks_most, self.bursts_most = max(ROOM, 2 * streaks), max(ROOM, 2 * bursts)
        self._streaks = np.empty((self.streaks_most, 4), np.float32)
        self._snr = np.empty(self.streaks_most, np.float32)
        self._streak_flags = np.empty(self.streaks_most, np.uint8)
        self._bursts = np.empty((self.bursts_most, 2), np.float32)
        self._arms = np.empty(self.bursts_most, np.int16)
        self._burst_flags = np.empty(self.bursts_most, np.uint8)
        self.record = records.Listed(
            streaks=native.place(self._streaks),
            snr=native.place(self._snr),
            bursts=native.place(self._bursts),
            streak_flags=native.place(self._streak_flags),
            burst_flags=native.place(self._burst_flags),
            arms=native.place(self._arms),
        )

    def listed(self) -> Listed:
        """What was written last."""
        record = self.record
        streaks, bursts = record.streak_count, record.burst_count
        return Listed(
            self._streaks[:streaks].copy(),
            self._snr[:streaks].copy(),
            self._streak_flags[:streaks].copy(),
            self._bursts[:bursts].copy(),
            self._arms[:bursts].copy(),
            self._burst_flags[:bursts].copy(),
            record.rate_bursts,
            record.track_px,
            record.middle_snr,
            record.origin_offset_px,
            record.origin_error_px,
        )
