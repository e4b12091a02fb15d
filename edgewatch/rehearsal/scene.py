"""A spark stream before a camera: pictures with exact truth, frame by frame.

The same ``Optics`` that the station uses says where the contact point is and how pixels map to millimetres. Each
exposure samples the swarm's tables along the way of every particle, so motion blur is an integral over the exposure.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal import flight
from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.sensor import LineHeight, Sensor
from edgewatch.rehearsal.steel import Steel
from edgewatch.rehearsal.swarm import Conditions, Spray, Swarm
from edgewatch.rehearsal.truth import Truth, no_bursts, no_streaks
from edgewatch.sight.optics import Optics

Array = NDArray[Any]

SAMPLE_PX = 0.6
"""Longest way between two samples along a streak (px): below the point spread, so the line is smooth."""
MOST_SAMPLES = 4096
"""Samples along one streak at most: at a scale of micrometres a streak would be a million pixels long."""
PAD_PX = 8
"""Margin kept outside the picture, whose light the lens spreads into it."""
VISIBLE_SNR = 1.0
"""A streak is listed where its line stands at least this many noise deviations above the ground."""
DETECTABLE_SNR = 5.0
"""``track_seen_m`` counts what stands at least this high."""


class Scene:
    """Pictures of what ``conditions`` describe, one frame after the other from time 0 on.

    ``conditions``: consecutive stretches in rising order (an iterator is read as far as needed); gaps run free.
    Everything random comes from ``rng``: the same seed gives the same pictures. Not thread safe.
    """

    def __init__(
        self,
        optics: Optics,
        conditions: Iterable[Conditions],
        *,
        rng: np.random.Generator,
        camera: CameraModel | None = None,
        spray: Spray | None = None,
    ) -> None:
        self.optics = optics
        self.camera = camera or CameraModel()
        self._rng = rng
        self._sensor = Sensor(self.camera, optics.width_px, optics.height_px, rng)
        self._swarm = Swarm(
            optics, conditions, spray=spray or Spray(), light=self.camera.light, band=self.camera.band, rng=rng
        )
        self._index = 0
        self._glow = self._draw_glow()
        self._row_s = self.camera.row_us * 1e-6
        self._height = LineHeight(self.camera)

    def _draw_glow(self) -> tuple[slice, slice, Array] | None:
        """Glow of wheel and bar round the contact point: (rows, columns, mean DN)."""
        if self.camera.wheel_glow_dn <= 0.0:
            return None
        x0, y0 = self.optics.contact_px
        size = 9.0 / self.optics.mm_per_px
        half = math.ceil(4.0 * size)
        top, bottom = max(0, int(y0) - half), min(self.optics.height_px, int(y0) + half + 1)
        left, right = max(0, int(x0) - half), min(self.optics.width_px, int(x0) + half + 1)
        if top >= bottom or left >= right:
            return None
        rows, columns = np.mgrid[top:bottom, left:right].astype(np.float32)
        distance = ((columns - x0) ** 2 + (rows - y0) ** 2) / (2.0 * size**2)
        glow = self.camera.wheel_glow_dn * np.exp(-distance)
        return slice(top, bottom), slice(left, right), glow.astype(np.float32)

    def frame(self) -> tuple[NDArray[np.uint8], Truth]:
        """Next picture, uint8 (height, width), and its truth. Frame i is exposed from i / fps on."""
        optics = self.optics
        t0 = self._index / optics.fps
        self._index += 1
        t1 = t0 + optics.exposure_s
        last = t1 + optics.height_px * self._row_s
        self._swarm.launch_until(last, keep_from_s=t0)
        shift = (0.0, 0.0)
        if self.camera.vibration_px > 0.0:
            shake = self.camera.vibration_px * self._rng.normal(size=2)
            shift = (float(shake[0]), float(shake[1]))
        ground = self._sensor.ground_dn(t0 + 0.5 * optics.exposure_s, shift)
        if self._glow is not None and self._swarm.grinding(t0, t1):
            rows, columns, glow = self._glow
            ground[rows, columns] += glow * np.float32(np.exp(0.1 * self._rng.normal()))
        light: list[tuple[Array, Array, Array]] = []
        streaks = self._trace_streaks(t0, t1, last, shift, light)
        burst_part = self._trace_bursts(t0, t1, last, shift, light)
        picture = self._sensor.expose(ground, *self._gather(light))
        return picture, Truth(t_s=t0, **streaks, **burst_part)

    def skip(self, frames: int) -> None:
        """Let ``frames`` pictures pass unseen: the stream goes on, nothing is drawn. Cheap."""
        if frames < 0:
            raise ValueError(f"frames = {frames!r}: at least 0")
        self._index += frames

    def _in_rows(self, y: Array, t_s: Array, t0: float, t1: float) -> Array:
        """Whether a rolling shutter's row at ``y`` is open at ``t_s``."""
        delay = np.clip(y, 0, self.optics.height_px - 1) * self._row_s
        return (t_s >= t0 + delay) & (t_s < t1 + delay)

    def _trace_streaks(
        self, t0: float, t1: float, last: float, shift: tuple[float, float], light: list[tuple[Array, Array, Array]]
    ) -> dict[str, Any]:
        swarm, optics = self._swarm, self.optics
        pieces = swarm.pieces
        alive = np.flatnonzero((pieces["birth_s"] < last) & (pieces["end_s"] > t0)) if len(pieces) else np.zeros(0, int)
        if not len(alive):
            return no_streaks()
        begin = np.maximum(pieces["birth_s"][alive], t0)
        end = np.minimum(pieces["end_s"][alive], last)
        duration = np.maximum(end - begin, 1e-9)
        ends = [swarm.place(alive, when) for when in (begin, 0.5 * (begin + end), end)]
        xa, xm, xb = (swarm.look_up("x", *where) for where in ends)
        ya, ym, yb = (swarm.look_up("y", *where) for where in ends)
        length = np.hypot(xm - xa, ym - ya) + np.hypot(xb - xm, yb - ym)
        speed = length / duration  # px/s
        peak = np.max([swarm.look_up("log_e_s", *where) for where in ends], axis=0)
        dim = self._height(np.exp(peak) / np.maximum(speed, 1e-3)) < 0.3
        number = np.where(dim, 1, np.clip(np.ceil(length / SAMPLE_PX), 1, MOST_SAMPLES)).astype(np.int64)
        starts = np.cumsum(number) - number
        owner = np.repeat(np.arange(len(alive)), number)
        place = np.arange(len(owner)) - starts[owner]
        dwell = duration / number
        t = begin[owner] + (place + 0.5) * dwell[owner]
        base, part = swarm.place(alive[owner], t)
        x = swarm.look_up("x", base, part) + np.float32(shift[0])
        y = swarm.look_up("y", base, part) + np.float32(shift[1])
        e_s = np.exp(swarm.look_up("log_e_s", base, part))
        open_ = self._in_rows(y, t, t0, t1) if self._row_s else np.ones(len(t), bool)
        inside = (x > -0.5) & (x < optics.width_px - 0.5) & (y > -0.5) & (y < optics.height_px - 0.5) & open_
        snr = self._height(e_s / np.maximum(speed, 1e-3)[owner])
        draw = open_ & ~dim[owner]
        light.append((x[draw], y[draw], (e_s * dwell[owner])[draw]))
        metre = (length / number)[owner] * (optics.mm_per_px * 1e-3)
        first_place, last_place = swarm.place(alive, begin), swarm.place(alive, end)
        exposed = swarm.look_up("exposed_m", *last_place) - swarm.look_up("exposed_m", *first_place)
        share_in = np.add.reduceat(inside.astype(np.float64), starts) / number
        visible = inside & (snr >= VISIBLE_SNR)
        low = np.minimum.reduceat(np.where(visible, place, len(owner)), starts)
        high = np.maximum.reduceat(np.where(visible, place, -1), starts)
        listed = np.flatnonzero(high >= 0)
        a = begin[listed] + low[listed] * dwell[listed]
        b = begin[listed] + (high[listed] + 1) * dwell[listed]
        lines = self._lines(alive[listed], a, b, shift)
        nine = a[:, None] + (b - a)[:, None] * np.linspace(0.05, 0.95, 9)
        wide = np.repeat(alive[listed], 9)
        heights = np.exp(swarm.look_up("log_e_s", *swarm.place(wide, nine.ravel()))).reshape(-1, 9)
        typical = np.median(heights, axis=1) / np.maximum(speed[listed], 1e-3)
        return {
            "streaks": lines,
            "streak_snr": self._height(typical).astype(np.float32),
            "flight": pieces["flight"][alive[listed]],
            "speed_m_s": (speed[listed] * optics.mm_per_px * 1e-3).astype(np.float32),
            "track_m": float(metre[inside].sum()),
            "track_seen_m": float(metre[inside & (snr >= DETECTABLE_SNR)].sum()),
            "track_exposed_m": float((exposed * share_in).sum()),
        }

    def _lines(self, piece: Array, a_s: Array, b_s: Array, shift: tuple[float, float]) -> NDArray[np.float32]:
        """Lines of pieces from times ``a_s`` to ``b_s``, contact end first, cut at the picture's edge."""
        width, height = self.optics.width_px, self.optics.height_px
        swarm = self._swarm
        columns = []
        for when in (a_s, b_s):
            base, part = swarm.place(piece, when)
            columns.append(np.clip(swarm.look_up("x", base, part) + shift[0], -0.5, width - 0.5))
            columns.append(np.clip(swarm.look_up("y", base, part) + shift[1], -0.5, height - 0.5))
        lines = np.stack(columns, axis=1).astype(np.float32)
        ax, ay = self.optics.axis
        back = (lines[:, 2] - lines[:, 0]) * ax + (lines[:, 3] - lines[:, 1]) * ay < 0.0
        lines[back] = lines[back][:, [2, 3, 0, 1]]
        return lines

    def _trace_bursts(
        self, t0: float, t1: float, last: float, shift: tuple[float, float], light: list[tuple[Array, Array, Array]]
    ) -> dict[str, Any]:
        arms, known, optics = self._swarm.arms, self._swarm.bursts, self.optics
        if len(arms):
            end_s = arms["birth_s"] + arms["life_s"]
            alive = np.flatnonzero((arms["birth_s"] < last) & (end_s > t0))
        if not len(arms) or not len(alive):
            return no_bursts()
        birth, life, stop = arms["birth_s"][alive], arms["life_s"][alive], arms["stop_s"][alive]
        begin = np.maximum(birth, t0)
        end = np.minimum(birth + life, last)
        vx, vy = arms["vx"][alive], arms["vy"][alive]
        way = stop * (np.exp(-(begin - birth) / stop) - np.exp(-(end - birth) / stop))
        length = np.hypot(vx, vy) * way
        number = np.clip(np.ceil(length / SAMPLE_PX), 4, MOST_SAMPLES).astype(np.int64)
        starts = np.cumsum(number) - number
        owner = np.repeat(np.arange(len(alive)), number)
        place = np.arange(len(owner)) - starts[owner]
        dwell = (end - begin) / number
        age = begin[owner] + (place + 0.5) * dwell[owner] - birth[owner]
        fade = np.exp(-age / stop[owner])
        x = arms["x"][alive][owner] + vx[owner] * stop[owner] * (1.0 - fade) + shift[0]
        y = arms["y"][alive][owner] + vy[owner] * stop[owner] * (1.0 - fade) + shift[1]
        e_s = np.exp(arms["log_e_s"][alive])[owner] * (1.0 - age / life[owner])
        open_ = self._in_rows(y, birth[owner] + age, t0, t1) if self._row_s else np.ones(len(x), bool)
        shone = e_s * dwell[owner] * open_
        light.append((x[open_], y[open_], shone[open_]))
        snr = self._height(e_s / np.maximum(np.hypot(vx, vy)[owner] * fade, 1.0))
        drawn = open_ & (snr >= VISIBLE_SNR)
        drew = np.add.reduceat(np.where(drawn, dwell[owner], 0.0), starts)
        height = np.maximum.reduceat(np.where(drawn, snr, 0.0), starts)
        # bursts are numbered in rising order, so the arm's burst is found by search
        row = np.searchsorted(known["burst_id"], arms["burst"][alive])
        rows, third_drew = _third(row, drew)
        _, third_height = _third(row, height)
        bx, by = known["x"][rows] + shift[0], known["y"][rows] + shift[1]
        longest, of = np.zeros(len(rows)), np.searchsorted(rows, row)
        np.maximum.at(longest, of, drew)
        middle = np.stack([_middle(of[owner], shone, along, len(rows)) for along in (x, y)], axis=1)
        inside = (bx > -0.5) & (bx < optics.width_px - 0.5) & (by > -0.5) & (by < optics.height_px - 0.5)
        listed = inside & (longest > 0.0)
        rows, third_drew, third_height = rows[listed], third_drew[listed], third_height[listed]
        first = ~known["shown"][rows].astype(bool)
        known["shown"][rows] = True
        row_delay = by[listed] * self._row_s
        return {
            "bursts": np.stack([bx[listed], by[listed]], axis=1).astype(np.float32),
            "burst_light": middle[listed].astype(np.float32),
            "arms": known["arms"][rows].astype(np.int16),
            "drew_ms": (1e3 * third_drew).astype(np.float32),
            "burst_snr": third_height.astype(np.float32),
            "late": known["t_s"][rows] < t0 + row_delay,
            "first": first,
            "burst_id": known["burst_id"][rows].astype(np.int64),
            "burst_t_s": known["t_s"][rows].astype(np.float64),
            "fork": known["fork"][rows].astype(bool),
            "burst_flight": known["flight"][rows].astype(np.int64),
        }

    def _gather(self, light: list[tuple[Array, Array, Array]]) -> tuple[Array | None, slice]:
        """Electrons a pixel after the lens, for the rows that get any."""
        width, height = self.optics.width_px, self.optics.height_px
        if not light:
            return None, slice(0, 0)
        x = np.concatenate([part[0] for part in light]) + PAD_PX
        y = np.concatenate([part[1] for part in light]) + PAD_PX
        e = np.concatenate([part[2] for part in light])
        wide, tall = width + 2 * PAD_PX, height + 2 * PAD_PX
        keep = (x >= 0.0) & (x < wide - 1) & (y >= 0.0) & (y < tall - 1)
        x, y, e = x[keep], y[keep], e[keep]
        if not len(x):
            return None, slice(0, 0)
        column, row = x.astype(np.int64), y.astype(np.int64)
        u, v = x - column, y - row
        top = int(row.min())
        lines = int(row.max()) - top + 2
        base = (row - top) * wide + column
        right = e * u
        left = e - right
        index = np.concatenate([base, base + 1, base + wide, base + wide + 1])
        weight = np.concatenate([left * (1.0 - v), right * (1.0 - v), left * v, right * v])
        sum_ = np.bincount(index, weights=weight, minlength=lines * wide)[: lines * wide]
        # room for the lens to spread into, above and below
        margin = PAD_PX
        first, end = max(0, top - margin), min(tall, top + lines + margin)
        field = np.zeros((end - first, wide), np.float32)
        field[top - first : top - first + lines] = sum_.reshape(lines, wide)
        field = self._sensor.spread(field)
        low, high = max(first, PAD_PX), min(end, PAD_PX + height)
        if low >= high:
            return None, slice(0, 0)
        part = field[low - first : high - first, PAD_PX : PAD_PX + width]
        return part, slice(low - PAD_PX, high - PAD_PX)


def _third(group: Array, values: Array) -> tuple[Array, Array]:
    """Groups that occur, rising, and the third largest value of each (0 where there are fewer)."""
    order = np.lexsort((-values, group))
    groups, where = np.unique(group[order], return_index=True)
    third = np.minimum(where + 2, len(order) - 1)
    return groups, np.where(group[order][third] == groups, values[order][third], 0.0)


def _middle(group: NDArray[np.int64], weight: Array, values: Array, count: int) -> Array:
    """Weighted mean of the values of each of ``count`` groups."""
    whole = np.maximum(np.bincount(group, weight, count), np.finfo(np.float64).tiny)
    return np.asarray(np.bincount(group, weight * values, count) / whole)


class Stream(Scene):
    """A steady stream of one steel: the shortest way to pictures with truth.

    ``Stream(optics, find_steel("C45"), sparks_per_s=4000, rng=numpy.random.default_rng(1)).frame()``. The stream runs
    already when the first picture is taken.
    """

    def __init__(
        self,
        optics: Optics,
        steel: Steel,
        *,
        rng: np.random.Generator,
        sparks_per_s: float = 4000.0,
        wheel_speed_m_s: float = 28.0,
        camera: CameraModel | None = None,
        spray: Spray | None = None,
    ) -> None:
        begin = -flight.LONGEST_S
        steady = Conditions(
            begin_s=begin,
            end_s=math.inf,
            steel=steel,
            sparks_per_s=sparks_per_s,
            wheel_speed_m_s=wheel_speed_m_s,
        )
        super().__init__(optics, [steady], rng=rng, camera=camera, spray=spray)
