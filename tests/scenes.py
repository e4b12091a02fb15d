"""Invented pictures with exact truth, apart from the rehearsal: the second judge of the detector.

A stream is drawn by quite different code and with a looser physics than the rehearsal's, and its rendering varies:
point spread, noise, gamma, brightness along the streak, number, length and spread of arms, background. Tuning looks at
seeds below ``JUDGE_SEED`` only.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.optics import Optics

JUDGE_SEED = 1000
"""Seeds from here on are for judging."""

LEAST_DRAW_S = 0.00035
"""An arm counts in the exposure in which it drew for this long (s)."""


@dataclass(frozen=True, kw_only=True)
class Look:
    """How a stream is drawn."""

    spread_px: float = 0.9  # standard deviation of the point spread
    noise_dn: float = 2.0
    gamma: float = 1.0
    ground_dn: float = 12.0
    haze_dn: float = 0.0
    flicker_dn: float = 0.0
    hot_pixels: int = 0
    shake_px: float = 0.0
    gain: float = 1.0
    jpeg: int = 0
    per_length: bool = False  # same brightness along the streak, whatever the speed


@dataclass(frozen=True, kw_only=True)
class Stream:
    """What flies. Hazard in bursts per metre."""

    sparks_per_s: float = 2500.0
    hazard_per_m: float = 0.9
    speed_m_s: float = 22.0
    fan_deg: float = 9.0
    reach_m: float = 0.45
    brightness: float = 60.0  # median height of a streak (DN)
    brightness_spread: float = 0.5  # of its logarithm
    arms: tuple[int, int] = (3, 8)
    arm_glow_s: float = 0.0018
    kick: float = 0.35  # speed of arms against the particle, as a share of its speed
    carries_on: float = 0.2  # share of particles that fly on after a burst


@dataclass(frozen=True, kw_only=True)
class Truth:
    """What a picture shows: ``streaks`` (N, 4) px with their height in noise deviations ``snr`` (N,); ``bursts``
    (M, 2) in the picture where three arms first drew long enough; ``late`` (M,): went off before this exposure began;
    ``glowing`` (K, 2), ``drew_s`` and ``glowing_late`` (K,): every burst with an arm drawn here, for how long its third
    arm was, and whether it went off before; ``light`` (K, 2) px: middle of what its arms drew here;
    ``track_px``: streak length within the picture, faint ones too; ``struck``: bursts that went off in this exposure.
    """

    streaks: NDArray[np.float64]
    snr: NDArray[np.float64]
    bursts: NDArray[np.float64]
    late: NDArray[np.bool_]
    glowing: NDArray[np.float64]
    drew_s: NDArray[np.float64]
    glowing_late: NDArray[np.bool_]
    light: NDArray[np.float64]
    track_px: float
    struck: int


@dataclass
class _Flights:
    """Particles: rows of columns; arms belong to a burst number, sparks to -1."""

    t0: NDArray[np.float64]
    t1: NDArray[np.float64]
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    vx: NDArray[np.float64]
    vy: NDArray[np.float64]
    drag: NDArray[np.float64]
    light: NDArray[np.float64]
    burst: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))

    def at(self, rows: NDArray[np.int64], t: NDArray[np.float64]) -> NDArray[np.float64]:
        """Positions (…, 2) in metres from the contact at times ``t`` (rows, k)."""
        age = t - self.t0[rows, None]
        way = -np.expm1(-self.drag[rows, None] * age) / self.drag[rows, None]
        x = self.x[rows, None] + self.vx[rows, None] * way
        y = self.y[rows, None] + self.vy[rows, None] * way + 4.9 * age**2
        return np.stack([x, y], axis=-1)


class Scene:
    """Pictures of one stream with their truth."""

    def __init__(self, optics: Optics, stream: Stream, look: Look, seed: int, seconds: float) -> None:
        """Draw every particle of ``seconds`` at once; the stream is steady from the first picture on."""
        self.optics, self.stream, self.look = optics, stream, look
        self._rng = np.random.default_rng(seed)
        self.frames = int(seconds * optics.fps)
        self._hot = self._rng.integers(0, optics.width_px * optics.height_px, look.hot_pixels)
        self._hot_dn = self._rng.uniform(40, 200, look.hot_pixels)
        self._flights, self._bursts = self._fly(seconds)

    def _fly(self, seconds: float) -> tuple[_Flights, NDArray[np.float64]]:
        s, rng = self.stream, self._rng
        before = 0.08
        n = rng.poisson(s.sparks_per_s * (seconds + before))
        t0 = rng.uniform(-before, seconds, n)
        angle = math.radians(self.optics.direction_deg) + np.radians(rng.normal(0, s.fan_deg, n))
        speed = s.speed_m_s * rng.lognormal(0, 0.12, n)
        depth = np.cos(np.radians(rng.normal(0, 12, n)))
        drag = s.speed_m_s / (1.5 * s.reach_m) * rng.lognormal(0, 0.2, n)
        reach = s.reach_m * rng.lognormal(0, 0.35, n) / 1.2
        way = np.minimum(reach, 0.97 * speed / drag)
        struck = rng.exponential(1.0 / max(s.hazard_per_m, 1e-9), n)
        bursting = struck < way
        going = rng.uniform(size=n) < s.carries_on
        end = np.where(bursting & ~going, struck, way)
        t1 = t0 - np.log1p(-end * drag / speed) / drag
        light = s.brightness * rng.lognormal(0, s.brightness_spread, n)
        sparks = _Flights(
            t0, t1, np.zeros(n), np.zeros(n), speed * depth * np.cos(angle), speed * depth * np.sin(angle), drag, light
        )
        b = np.flatnonzero(bursting)
        tb = t0[b] - np.log1p(-struck[b] * drag[b] / speed[b]) / drag[b]
        at = sparks.at(b, tb[:, None])[:, 0]
        slow = np.exp(-drag[b] * (tb - t0[b]))
        k = rng.integers(s.arms[0], s.arms[1] + 1, b.size)
        of = np.repeat(np.arange(b.size), k)
        m = of.size
        v = speed[b] * slow
        up = rng.uniform(-1, 1, m)
        turn = rng.uniform(0, 2 * math.pi, m)
        kick = s.kick * s.speed_m_s * rng.uniform(0.6, 1.2, m) * np.sqrt(1 - up**2)
        ahead = rng.uniform(0.4, 0.8, b.size)[of]
        arms = _Flights(
            tb[of],
            tb[of] + s.arm_glow_s * rng.lognormal(0, 0.25, m),
            at[of, 0],
            at[of, 1],
            ahead * v[of] * (depth * np.cos(angle))[b][of] + kick * np.cos(turn),
            ahead * v[of] * (depth * np.sin(angle))[b][of] + kick * np.sin(turn),
            np.full(m, 150.0) * rng.lognormal(0, 0.2, m),
            light[b][of] * rng.uniform(0.5, 1.1, m),
        )
        joined = _Flights(
            *(np.concatenate([getattr(sparks, f), getattr(arms, f)]) for f in list(_Flights.__annotations__)[:8])
        )
        joined.burst = np.concatenate([np.full(n, -1), of])
        return joined, np.column_stack([tb, at])

    def __iter__(self) -> Iterator[tuple[NDArray[np.uint8], Truth]]:
        """Pictures and truths in order."""
        listed = np.zeros(self._bursts.shape[0], np.bool_)
        for frame in range(self.frames):
            yield self._picture(frame, listed)

    def _px(self, metres: NDArray[np.float64]) -> NDArray[np.float64]:
        return metres * (1000.0 / self.optics.mm_per_px) + np.asarray(self.optics.contact_px)

    def _picture(self, frame: int, listed: NDArray[np.bool_]) -> tuple[NDArray[np.uint8], Truth]:
        o, f = self.optics, self._flights
        begin = frame * o.period_s
        end = begin + o.exposure_s
        rows = np.flatnonzero((f.t0 < end) & (f.t1 > begin))
        a, b = np.maximum(f.t0[rows], begin), np.minimum(f.t1[rows], end)
        light = self._deposit(rows, a, b)
        ends = self._px(f.at(rows, np.stack([a, b], axis=1)))
        snr = self._snr(rows, ends, a, b)
        return self._develop(light), self._truth(rows, ends, snr, a, b, begin, end, listed)

    def _glow(self, rows: NDArray[np.int64], t: NDArray[np.float64]) -> NDArray[np.float64]:
        """Brightness over a particle's life: rises fast, fades towards its end."""
        f = self._flights
        age = (t - f.t0[rows, None]) / (f.t1 - f.t0)[rows, None]
        glow = np.where(
            f.burst[rows, None] >= 0, 1.0 - 0.7 * age, np.minimum(1.0, 0.6 + 4 * age) * (1.0 - 0.6 * age**2)
        )
        return f.light[rows, None] * glow

    def _heights(
        self, rows: NDArray[np.int64], ends: NDArray[np.float64], draw_s: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Factor from glow to height of the line: one at the stream's own speed, higher where slower."""
        if self.look.per_length:
            return np.ones(rows.size)
        length = np.hypot(*(ends[:, 1] - ends[:, 0]).T)
        typical = self.stream.speed_m_s * 0.6 * 1000 / self.optics.mm_per_px
        return np.minimum(3.0, typical * draw_s / np.maximum(length, 1.0))

    def _snr(
        self, rows: NDArray[np.int64], ends: NDArray[np.float64], a: NDArray[np.float64], b: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Height of each line, where it is half drawn, in noise deviations."""
        glow = self._glow(rows, 0.5 * (a + b)[:, None])[:, 0] * self._heights(rows, ends, b - a) * self.look.gain
        if self.look.gamma != 1.0:
            glow = 255.0 * (glow / 255.0) ** self.look.gamma
        return np.asarray(glow / self.look.noise_dn)

    def _deposit(self, rows: NDArray[np.int64], a: NDArray[np.float64], b: NDArray[np.float64]) -> NDArray[np.float32]:
        o = self.optics
        ends = self._px(self._flights.at(rows, np.stack([a, b], axis=1)))
        length = np.hypot(*(ends[:, 1] - ends[:, 0]).T)
        height = self._heights(rows, ends, b - a)
        steps = np.maximum(2, np.ceil(length * 3.0).astype(int))
        of = np.repeat(np.arange(rows.size), steps)
        nth = np.arange(of.size) - np.repeat(np.cumsum(steps) - steps, steps)
        share = (nth + 0.5) / steps[of]
        t = (a[of] + share * (b - a)[of])[:, None]
        at = self._px(self._flights.at(rows[of], t))[:, 0]
        # A line of unit weight per pixel, blurred by the point spread, has the height 1/(sqrt(2 pi) sigma).
        weight = (
            self._glow(rows[of], t)[:, 0]
            * height[of]
            * (length / steps)[of]
            * math.sqrt(2 * math.pi)
            * self.look.spread_px
        )
        if self.look.shake_px:
            at = at + self._rng.normal(0, self.look.shake_px, 2)
        return _splat(at, weight, o.width_px, o.height_px, self.look.spread_px)

    def _develop(self, light: NDArray[np.float32]) -> NDArray[np.uint8]:
        k, o, rng = self.look, self.optics, self._rng
        yy, xx = np.mgrid[0 : o.height_px, 0 : o.width_px].astype(np.float32)
        ground = k.ground_dn + k.haze_dn * np.exp(
            -(((xx - 0.4 * o.width_px) / 250) ** 2) - ((yy - 0.6 * o.height_px) / 150) ** 2
        )
        ground = ground + k.flicker_dn * rng.uniform(-1, 1) * (0.5 + xx / o.width_px)
        picture = light * k.gain
        if k.gamma != 1.0:
            picture = 255.0 * (np.clip(picture, 0, 4096) / 255.0) ** k.gamma
        picture = picture + ground
        picture += rng.standard_normal(picture.shape, dtype=np.float32) * (k.noise_dn * np.sqrt(1 + picture / 200))
        picture.ravel()[self._hot] += self._hot_dn
        out = np.clip(np.rint(picture), 0, 255).astype(np.uint8)
        if k.jpeg:
            out = cv2.imdecode(cv2.imencode(".jpg", out, [cv2.IMWRITE_JPEG_QUALITY, k.jpeg])[1], cv2.IMREAD_GRAYSCALE)
        return out

    def _truth(self, rows, ends, snr, a, b, begin, end, listed) -> Truth:  # type: ignore[no-untyped-def]
        o, f = self.optics, self._flights
        spark = f.burst[rows] < 0
        lines, inside = clip_lines(ends[spark].reshape(-1, 4), o.width_px, o.height_px)
        track = float(np.hypot(*(lines[inside, 2:] - lines[inside, :2]).T).sum())
        third = self._third_draw(f.burst[rows[~spark]], (b - a)[~spark])
        px = self._px(self._bursts[:, 1:])
        within = (px >= 0).all(axis=1) & (px[:, 0] < o.width_px) & (px[:, 1] < o.height_px)
        shown = np.flatnonzero((third >= LEAST_DRAW_S) & ~listed & within)
        glowing = np.flatnonzero((third > 0) & within)
        middle, drawn_s = 0.5 * (ends[~spark, 0] + ends[~spark, 1]), (b - a)[~spark]
        whole_s = np.maximum(np.bincount(f.burst[rows[~spark]], drawn_s, len(px)), 1e-9)
        light = [np.bincount(f.burst[rows[~spark]], drawn_s * middle[:, k], len(px)) / whole_s for k in (0, 1)]
        listed[shown] = True
        time = self._bursts[:, 0]
        return Truth(
            streaks=lines[inside],
            snr=snr[spark][inside],
            bursts=px[shown],
            late=time[shown] < begin,
            glowing=px[glowing],
            drew_s=third[glowing],
            glowing_late=time[glowing] < begin,
            light=np.stack(light, axis=1)[glowing],
            track_px=track,
            struck=int(((time >= begin) & (time < end) & within).sum()),
        )

    def _third_draw(self, burst: NDArray[np.int64], draw_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """For how long the third longest drawn arm of every burst was drawn (s)."""
        third = np.zeros(self._bursts.shape[0])
        order = np.lexsort((-draw_s, burst))
        burst, draw_s = burst[order], draw_s[order]
        place = np.arange(burst.size) - np.searchsorted(burst, burst)
        third[burst[place == 2]] = draw_s[place == 2]
        return third


def _splat(
    at: NDArray[np.float64], weight: NDArray[np.float64], width: int, height: int, spread_px: float
) -> NDArray[np.float32]:
    """Bilinear splats, blurred by the point spread (H, W)."""
    pad = 8
    x, y = at[:, 0] + pad, at[:, 1] + pad
    inside = (x >= 0) & (y >= 0) & (x < width + 2 * pad - 1) & (y < height + 2 * pad - 1)
    x, y, weight = x[inside], y[inside], weight[inside]
    ix, iy = x.astype(int), y.astype(int)
    fx, fy = x - ix, y - iy
    wide = width + 2 * pad
    total = np.zeros(wide * (height + 2 * pad))
    for dx, dy, share in ((0, 0, (1 - fx) * (1 - fy)), (1, 0, fx * (1 - fy)), (0, 1, (1 - fx) * fy), (1, 1, fx * fy)):
        total += np.bincount((iy + dy) * wide + ix + dx, weight * share, total.size)
    image = cv2.GaussianBlur(total.reshape(-1, wide).astype(np.float32), (0, 0), spread_px)
    return image[pad:-pad, pad:-pad]


def clip_lines(lines: NDArray[np.float64], width: int, height: int) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Lines (N, 4) cut to the picture (Liang and Barsky 1984), and which of them lie in it."""
    p0, d = lines[:, :2], lines[:, 2:] - lines[:, :2]
    low, high = np.zeros(lines.shape[0]), np.ones(lines.shape[0])
    with np.errstate(divide="ignore", invalid="ignore"):
        for axis, size in ((0, width - 1), (1, height - 1)):
            t0, t1 = -p0[:, axis] / d[:, axis], (size - p0[:, axis]) / d[:, axis]
            low = np.fmax(low, np.minimum(t0, t1))
            high = np.fmin(high, np.maximum(t0, t1))
    out = np.concatenate([p0 + d * low[:, None], p0 + d * high[:, None]], axis=1)
    return out, (low < high)


def crossing_lines(
    optics: Optics, look: Look, rng: np.random.Generator, *, groups: int = 12, angle_deg: float = math.nan
) -> NDArray[np.uint8]:
    """Two or three long lines through one point, ``groups`` times in a picture, at ``angle_deg`` or 5 to 90 degrees."""
    w, h = optics.width_px, optics.height_px
    columns, rows = 4, 3
    at, weight = [], []
    for k in range(groups):
        cx = (k % columns + rng.uniform(0.35, 0.65)) * w / columns
        cy = (k // columns % rows + rng.uniform(0.35, 0.65)) * h / rows
        turn = rng.uniform(0, math.pi)
        for _ in range(int(rng.integers(2, 4))):
            before, after = rng.uniform(22, 60, 2)
            s = np.arange(-before, after, 1 / 3)
            glow = rng.uniform(30, 120) * math.sqrt(2 * math.pi) * look.spread_px / 3
            at.append(np.stack([cx + s * math.cos(turn), cy + s * math.sin(turn)], axis=1))
            weight.append(np.full(s.size, glow))
            turn += math.radians(angle_deg if math.isfinite(angle_deg) else rng.uniform(5, 90))
    light = _splat(np.concatenate(at), np.concatenate(weight), w, h, look.spread_px)
    scene = Scene.__new__(Scene)
    scene.optics, scene.look, scene._rng = optics, look, rng
    scene._hot, scene._hot_dn = np.zeros(0, np.int64), np.zeros(0)
    return scene._develop(light)


def loose_dashes(optics: Optics, look: Look, rng: np.random.Generator, *, dashes: int = 60) -> NDArray[np.uint8]:
    """Dashes and spots strewn about, from thin to several pixels wide: spatter, drops, lamps, none of them a burst."""
    w, h = optics.width_px, optics.height_px
    at, weight = [], []
    for _ in range(dashes):
        length = float(rng.choice([0.0, rng.uniform(2, 15), rng.uniform(10, 50)]))
        wide = float(rng.uniform(0.0, 2.5))
        turn = (
            math.radians(optics.direction_deg + rng.normal(0, 25)) if rng.uniform() < 0.6 else rng.uniform(0, math.pi)
        )
        number = max(40, int(length * 12))
        s = rng.uniform(-0.5, 0.5, number) * length
        aside = rng.normal(0, wide, number)
        x, y = rng.uniform(0, w), rng.uniform(0, h)
        at.append(
            np.stack(
                [x + s * math.cos(turn) - aside * math.sin(turn), y + s * math.sin(turn) + aside * math.cos(turn)], 1
            )
        )
        area = (length + 2.5 * look.spread_px) * 2.5 * math.hypot(wide, look.spread_px)
        weight.append(np.full(number, rng.uniform(30, 250) * area / number))
    scene = Scene.__new__(Scene)
    scene.optics, scene.look, scene._rng = optics, look, rng
    scene._hot, scene._hot_dn = np.zeros(0, np.int64), np.zeros(0)
    return scene._develop(_splat(np.concatenate(at), np.concatenate(weight), w, h, look.spread_px))
