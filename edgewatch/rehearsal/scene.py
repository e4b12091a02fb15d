"""A spark stream before a camera: pictures with exact truth, frame by frame.

The same ``Optics`` that the station uses says where the contact point is and how pixels map to millimetres. Particles
are launched in batches, flown (``flight``), struck by bursts (``bursts``) and kept in flat tables; each exposure
samples the tables along the way of every particle, so motion blur is an integral over the exposure.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal import bursts, flight, heat
from edgewatch.rehearsal.camera import CameraModel, Sensor
from edgewatch.rehearsal.steel import Steel
from edgewatch.sight.optics import Optics

Array = NDArray[Any]

GLOW_E_S = 6.5e7
"""Electrons a second from a particle of 50 micrometre radius at 1800 K with ``light`` = 1: a line of about 90 DN at
20 m/s, 1 mm per px and the default camera."""
GLOW_REFERENCE_M = 50e-6
FRAGMENT_K = 2300.0
"""Fragments burn hotter than their parent: fresh iron, short diffusion way."""
SAMPLE_PX = 0.6
"""Longest way between two samples along a streak (px): below the point spread, so the line is smooth."""
PAD_PX = 8
"""Margin kept outside the picture, whose light the lens spreads into it."""
VISIBLE_SNR = 1.0
"""A streak is listed where its line stands at least this many noise deviations above the ground."""
DETECTABLE_SNR = 5.0
"""``track_seen_m`` counts what stands at least this high."""
_BATCH_SPARKS = 400.0
_BATCH_LONGEST_S = 0.1
"""Sparks a batch: numpy's cost a call is spread over many, and the tables stay small."""
_MOST_GENERATIONS = 12


@dataclass(frozen=True, slots=True, kw_only=True)
class Spray:
    """How sparks leave the wheel. ``slip``: launch speed as a share of the wheel's surface speed ("a little below",
    common practice), ``slip_spread`` its deviation. ``angle_sd_deg``, ``depth_sd_deg``: spread in the picture and out
    of it. ``stray_share``: sparks that bounce off something, with ``stray_sd_deg``. ``width_mm``: of the contact.
    ``launch_sd_k``: spread of the launch temperature.
    """

    slip: float = 0.94
    slip_spread: float = 0.04
    angle_sd_deg: float = 6.5
    depth_sd_deg: float = 5.0
    stray_share: float = 0.02
    stray_sd_deg: float = 30.0
    width_mm: float = 3.0
    launch_sd_k: float = 80.0

    def __post_init__(self) -> None:
        """Check ranges once."""
        for name, low, high in (
            ("slip", 0.05, 2.0),
            ("slip_spread", 0.0, 0.5),
            ("angle_sd_deg", 0.0, 90.0),
            ("depth_sd_deg", 0.0, 60.0),
            ("stray_share", 0.0, 1.0),
            ("stray_sd_deg", 0.0, 180.0),
            ("width_mm", 0.0, 200.0),
            ("launch_sd_k", 0.0, 500.0),
        ):
            value = getattr(self, name)
            if not (math.isfinite(value) and low <= value <= high):
                raise ValueError(f"{name} = {value!r}: allowed is {low:g} to {high:g}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Conditions:
    """What the wheel does from ``begin_s`` to ``end_s`` (may be infinite). ``steel`` None or ``sparks_per_s`` 0: it
    runs free. ``wheel_speed_m_s``: surface speed.
    """

    begin_s: float
    end_s: float
    steel: Steel | None
    sparks_per_s: float
    wheel_speed_m_s: float = 28.0

    def __post_init__(self) -> None:
        """Check ranges once."""
        if not (math.isfinite(self.begin_s) and self.end_s > self.begin_s):
            raise ValueError(f"begin_s, end_s = {self.begin_s!r}, {self.end_s!r}: the end comes after the beginning")
        for name, low, high in (("sparks_per_s", 0.0, 1e6), ("wheel_speed_m_s", 1.0, 200.0)):
            value = getattr(self, name)
            if not (math.isfinite(value) and low <= value <= high):
                raise ValueError(f"{name} = {value!r}: allowed is {low:g} to {high:g}")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Truth:
    """What is really in one picture.

    ``streaks``: float32 (N, 4), lines drawn by glowing main particles inside the picture in this exposure, x0 y0 x1 y1
    in px, contact end first along the axis, as far as the line stands one noise deviation above the ground.
    ``streak_snr``: float32 (N,), height of the line's typical (median) part above the ground in noise deviations of the
    ground, as the finished picture has it (gamma, quantisation), before compression. ``flight``: int64 (N,), the same
    number for one particle in every picture and after a burst that it survives. ``speed_m_s``: float32 (N,) as seen in
    the picture's plane. Arms of bursts are not streaks.

    ``track_m``: way of all particles above 1000 K inside the picture; ``track_exposed_m``: the part on which the burst
    hazard acts; ``track_seen_m``: the part five noise deviations above the ground.

    ``bursts``: float32 (M, 2), every burst inside the picture some of whose arms were drawn in this exposure; ``arms``:
    int16, thrown; ``drew_ms``: float32, time for which at least three of its arms were drawn (above one noise
    deviation) in this exposure; ``late``: went off before this exposure began; ``first``: first exposure that shows
    it; ``burst_id``: int64, one for each physical burst; ``burst_t_s``: time it went off; ``fork``; ``burst_flight``.
    ``struck``: number of bursts inside the picture's bounds that went off since the last exposure's end or in this
    exposure, seen or not.
    """

    t_s: float
    streaks: NDArray[np.float32]
    streak_snr: NDArray[np.float32]
    flight: NDArray[np.int64]
    speed_m_s: NDArray[np.float32]
    track_m: float
    track_exposed_m: float
    track_seen_m: float
    bursts: NDArray[np.float32]
    arms: NDArray[np.int16]
    drew_ms: NDArray[np.float32]
    late: NDArray[np.bool_]
    first: NDArray[np.bool_]
    burst_id: NDArray[np.int64]
    burst_t_s: NDArray[np.float64]
    fork: NDArray[np.bool_]
    burst_flight: NDArray[np.int64]


_PIECES = ("birth_s", "end_s", "offset", "last", "flight")
_TABLES = ("x", "y", "log_e_s", "exposed_m")
_ARMS = ("x", "y", "vx", "vy", "stop_s", "birth_s", "life_s", "log_e_s", "burst")
_BURSTS = ("burst_id", "x", "y", "t_s", "arms", "fork", "flight", "shown")


class _Store:
    """Columns of equal length that grow at the end and are thinned from time to time."""

    def __init__(self, names: Iterable[str]) -> None:
        self.columns: dict[str, Array] = {name: np.zeros(0) for name in names}

    def __len__(self) -> int:
        return len(next(iter(self.columns.values())))

    def __getitem__(self, name: str) -> Array:
        return self.columns[name]

    def append(self, **columns: Array) -> None:
        had = len(self)
        for name, values in columns.items():
            self.columns[name] = np.concatenate([self.columns[name], values]) if had else np.asarray(values)

    def keep(self, mask: Array) -> None:
        for name, values in self.columns.items():
            self.columns[name] = values[mask]


class Scene:
    """Pictures of what ``conditions`` describe, one frame after the other from time 0 on.

    ``conditions``: consecutive stretches in rising order (an iterator is read as far as needed); gaps run free.
    Everything random comes from ``rng``: the same seed gives the same pictures. Not thread safe.
    Cost of a 640 x 400 frame with 80 streaks: about 2 ms on one core of a desktop.
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
        self.spray = spray or Spray()
        self._rng = rng
        self._sensor = Sensor(self.camera, optics.width_px, optics.height_px, rng)
        self._conditions: Iterator[Conditions] = iter(conditions)
        self._now: Conditions | None = next(self._conditions, None)
        self._launched_s = 0.0
        self._pieces = _Store(_PIECES)
        self._tables = {name: np.zeros(0, np.float32) for name in _TABLES}
        self._arms = _Store(_ARMS)
        self._bursts = _Store(_BURSTS)
        self._flights = 0
        self._burst_count = 0
        self._index = 0
        self._glow = self._draw_glow()
        self._row_s = self.camera.row_us * 1e-6
        ground = self.camera.dark_dn + self.camera.haze_dn
        self._ground_noise = float(self.camera.noise_dn(np.array(ground)))
        self._ground = ground

    # -- launching ---------------------------------------------------------------------------------------------------

    def _launch_until(self, t_s: float) -> None:
        while self._launched_s < t_s:
            now = self._now
            if now is None:
                self._launched_s = t_s
                return
            if now.end_s <= self._launched_s:
                self._now = next(self._conditions, None)
                continue
            begin = max(self._launched_s, now.begin_s)
            if begin >= t_s:  # a gap before the next stretch
                self._launched_s = t_s
                return
            end = min(now.end_s, begin + min(_BATCH_LONGEST_S, _BATCH_SPARKS / max(now.sparks_per_s, 1.0)))
            if now.steel is not None and now.sparks_per_s > 0.0:
                self._launch(now, now.steel, begin, end)
            self._launched_s = end

    def _launch(self, now: Conditions, steel: Steel, begin_s: float, end_s: float) -> None:
        """Launch one batch, follow it through all its bursts, and add it to the tables."""
        rng, spray = self._rng, self.spray
        count = int(rng.poisson(now.sparks_per_s * steel.stream * (end_s - begin_s)))
        if not count:
            return
        birth = rng.uniform(begin_s, end_s, size=count)
        angle = np.deg2rad(spray.angle_sd_deg) * rng.normal(size=count)
        stray = rng.uniform(size=count) < spray.stray_share
        angle = np.where(stray, np.deg2rad(spray.stray_sd_deg) * rng.normal(size=count), angle)
        angle += math.radians(self.optics.direction_deg)
        depth = np.deg2rad(spray.depth_sd_deg) * rng.normal(size=count)
        speed = now.wheel_speed_m_s * spray.slip * np.exp(spray.slip_spread * rng.normal(size=count))
        ax, ay = self.optics.axis
        side = 1e-3 * spray.width_mm * rng.uniform(-0.5, 0.5, size=count)
        wave = np.cos(depth)
        launch = flight.Launch(
            radius_m=np.clip(1e-6 * steel.radius_um * np.exp(steel.radius_spread * rng.normal(size=count)), 1e-6, 1e-3),
            position_m=np.stack([-ay * side, ax * side, np.zeros(count)], axis=1),
            velocity_m_s=speed[:, None] * np.stack([np.cos(angle) * wave, np.sin(angle) * wave, np.sin(depth)], axis=1),
            temperature_k=np.clip(steel.launch_k + spray.launch_sd_k * rng.normal(size=count), 400.0, 2500.0),
            oxidised=np.zeros(count),
        )
        numbers = self._flights + np.arange(count)
        self._flights += count
        for _ in range(_MOST_GENERATIONS):
            launch, birth, numbers = self._fly_on(launch, birth, numbers, steel)
            if not len(birth):
                break
        self._forget(begin_s - 0.01)

    def _fly_on(
        self, launch: flight.Launch, birth: Array, numbers: Array, steel: Steel
    ) -> tuple[flight.Launch, Array, Array]:
        """Fly one generation; returns what flies on after its bursts."""
        rng = self._rng
        paths = flight.fly(launch, steel)
        exposed = bursts.exposed_m(paths)
        struck_at = bursts.strike(exposed, steel.hazard_per_m, rng)
        glowing = paths.temperature_k >= heat.GLOW_LEAST_K
        steps = paths.path_m.shape[1] - 1
        dark_at = np.where(glowing.any(axis=1), steps - np.argmax(glowing[:, ::-1], axis=1), 0)
        struck = struck_at <= dark_at
        end = birth + paths.step_s * np.where(struck, struck_at, dark_at)
        self._add_pieces(launch, paths, exposed, birth, end, numbers)
        rows = np.flatnonzero(struck)
        step = struck_at[rows]
        index = np.minimum(step.astype(np.int64), steps - 1)
        part = (step - index)[:, None]
        position = paths.position_m[rows, index] * (1.0 - part) + paths.position_m[rows, index + 1] * part
        velocity = paths.velocity_m_s[rows, index + 1]
        forks = rng.uniform(size=len(rows)) < steel.fork_share
        self._add_bursts(launch.radius_m[rows], position, velocity, end[rows], forks, numbers[rows], steel)
        on = np.flatnonzero(~forks & (rng.uniform(size=len(rows)) < steel.goes_on_share))
        turned = velocity[on] + 0.05 * np.linalg.norm(velocity[on], axis=1)[:, None] * rng.normal(size=(len(on), 3))
        rest = flight.Launch(
            radius_m=launch.radius_m[rows[on]] * bursts.GOES_ON_RADIUS,
            position_m=position[on],
            velocity_m_s=turned,
            temperature_k=np.minimum(paths.temperature_k[rows[on], index[on]], 3000.0),
            oxidised=0.5 * paths.oxidised[rows[on], index[on]],
        )
        return rest, end[rows[on]], numbers[rows[on]]

    def _add_pieces(
        self, launch: flight.Launch, paths: flight.Paths, exposed: Array, birth: Array, end: Array, numbers: Array
    ) -> None:
        count, columns = paths.path_m.shape
        offset = len(self._tables["x"]) + np.arange(count, dtype=np.int64) * columns
        scale = 1000.0 / self.optics.mm_per_px
        x0, y0 = self.optics.contact_px
        bright = math.log(GLOW_E_S * max(self.camera.light, 1e-12)) + 2.0 * np.log(launch.radius_m / GLOW_REFERENCE_M)
        log_e_s = heat.log_glow(paths.temperature_k, self.camera.band) + bright[:, None]
        for name, values in (
            ("x", paths.position_m[:, :, 0] * scale + x0),
            ("y", paths.position_m[:, :, 1] * scale + y0),
            ("log_e_s", log_e_s),
            ("exposed_m", exposed),
        ):
            self._tables[name] = np.concatenate([self._tables[name], values.astype(np.float32).ravel()])
        last = np.full(count, columns - 2, dtype=np.int64)
        self._pieces.append(birth_s=birth, end_s=end, offset=offset, last=last, flight=numbers)

    def _add_bursts(
        self, radius: Array, position: Array, velocity: Array, t_s: Array, forks: Array, numbers: Array, steel: Steel
    ) -> None:
        count = len(radius)
        if not count:
            return
        thrown = bursts.throw_arms(velocity, forks, steel, self._rng)
        scale = 1000.0 / self.optics.mm_per_px
        x = position[:, 0] * scale + self.optics.contact_px[0]
        y = position[:, 1] * scale + self.optics.contact_px[1]
        ids = self._burst_count + np.arange(count)
        self._burst_count += count
        hot = float(heat.log_glow(np.array(FRAGMENT_K), self.camera.band))
        log_e_s = math.log(GLOW_E_S * max(self.camera.light, 1e-12)) + hot + np.log(thrown.brightness)
        log_e_s += 2.0 * np.log(radius / GLOW_REFERENCE_M)[thrown.burst]
        self._arms.append(
            x=x[thrown.burst],
            y=y[thrown.burst],
            vx=thrown.velocity_m_s[:, 0] * scale,
            vy=thrown.velocity_m_s[:, 1] * scale,
            stop_s=thrown.stop_s,
            birth_s=t_s[thrown.burst],
            life_s=thrown.life_s,
            log_e_s=log_e_s,
            burst=ids[thrown.burst],
        )
        number = np.bincount(thrown.burst, minlength=count)
        shown = np.zeros(count, dtype=bool)
        self._bursts.append(burst_id=ids, x=x, y=y, t_s=t_s, arms=number, fork=forks, flight=numbers, shown=shown)

    def _forget(self, before_s: float) -> None:
        """Drop what ended before ``before_s``; table rows go in whole runs from the front."""
        alive = self._pieces["end_s"] > before_s
        if len(alive) and not alive.all():
            self._pieces.keep(alive)
            if len(self._pieces):
                front = int(self._pieces["offset"].min())
                if front > 0:
                    self._tables = {name: values[front:] for name, values in self._tables.items()}
                    self._pieces.columns["offset"] = self._pieces["offset"] - front
            else:
                self._tables = {name: values[:0] for name, values in self._tables.items()}
        if len(self._arms):
            self._arms.keep(self._arms["birth_s"] + self._arms["life_s"] > before_s)
        if len(self._bursts):
            # a burst's arms live some milliseconds; keep the burst well beyond
            self._bursts.keep(self._bursts["t_s"] > before_s - 0.05)

    # -- drawing -----------------------------------------------------------------------------------------------------

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
        self._launch_until(last)
        shift = (0.0, 0.0)
        if self.camera.vibration_px > 0.0:
            shake = self.camera.vibration_px * self._rng.normal(size=2)
            shift = (float(shake[0]), float(shake[1]))
        ground = self._sensor.ground_dn(t0 + 0.5 * optics.exposure_s, shift)
        now = self._now
        if (
            self._glow is not None
            and now is not None
            and now.steel is not None
            and now.sparks_per_s > 0
            and now.begin_s < t1 < now.end_s
        ):
            rows, columns, glow = self._glow
            ground[rows, columns] += glow * np.float32(np.exp(0.1 * self._rng.normal()))
        light: list[tuple[Array, Array, Array]] = []
        streaks = self._trace_streaks(t0, t1, last, shift, light)
        burst_part = self._trace_bursts(t0, t1, last, shift, light)
        electrons, rows_lit = self._gather(light)
        picture = self._sensor.expose(electrons, ground, rows_lit)
        return picture, Truth(t_s=t0, **streaks, **burst_part)

    def _snr(self, electrons_per_px: Array) -> Array:
        """Height of a line above the ground in noise deviations, as the finished picture has it."""
        camera = self.camera
        high = electrons_per_px * (camera.gain_dn_per_e * self._sensor.line_peak)
        if camera.gamma == 1.0:
            return np.asarray(np.minimum(high, 255.0 - self._ground) / self._ground_noise)
        low = float(camera.output_dn(np.array(self._ground)))
        slope = float(camera.output_dn(np.array(self._ground + 0.5)) - camera.output_dn(np.array(self._ground - 0.5)))
        noise = math.sqrt(max(self._ground_noise**2 - 1.0 / 12.0, 0.0) * slope**2 + 1.0 / 12.0)
        return np.asarray((camera.output_dn(self._ground + high) - low) / noise)

    def _look_up(self, name: str, base: Array, part: Array) -> Array:
        table = self._tables[name]
        low = table[base]
        return np.asarray(low + (table[base + 1] - low) * part)

    def _place(self, piece: Array, t_s: Array) -> tuple[Array, Array]:
        """Table row and part of a step for pieces (indices) at times."""
        pieces = self._pieces
        step = (t_s - pieces["birth_s"][piece]) * (1.0 / flight.STEP_S)
        index = np.minimum(step.astype(np.int64), pieces["last"][piece])
        return pieces["offset"][piece] + index, (step - index).astype(np.float32)

    def _in_rows(self, y: Array, t_s: Array, t0: float, t1: float) -> Array:
        """Whether a rolling shutter's row at ``y`` is open at ``t_s``."""
        delay = np.clip(y, 0, self.optics.height_px - 1) * self._row_s
        return (t_s >= t0 + delay) & (t_s < t1 + delay)

    def _trace_streaks(
        self, t0: float, t1: float, last: float, shift: tuple[float, float], light: list[tuple[Array, Array, Array]]
    ) -> dict[str, Any]:
        pieces, optics = self._pieces, self.optics
        alive = np.flatnonzero((pieces["birth_s"] < last) & (pieces["end_s"] > t0)) if len(pieces) else np.zeros(0, int)
        if not len(alive):
            return _no_streaks()
        begin = np.maximum(pieces["birth_s"][alive], t0)
        end = np.minimum(pieces["end_s"][alive], last)
        duration = np.maximum(end - begin, 1e-9)
        ends = [self._place(alive, when) for when in (begin, 0.5 * (begin + end), end)]
        xa, xm, xb = (self._look_up("x", *where) for where in ends)
        ya, ym, yb = (self._look_up("y", *where) for where in ends)
        length = np.hypot(xm - xa, ym - ya) + np.hypot(xb - xm, yb - ym)
        speed = length / duration  # px/s
        peak = np.max([self._look_up("log_e_s", *where) for where in ends], axis=0)
        dim = self._snr(np.exp(peak) / np.maximum(speed, 1e-3)) < 0.3
        number = np.where(dim, 1, np.ceil(length / SAMPLE_PX)).astype(np.int64)
        number = np.maximum(number, 1)
        starts = np.cumsum(number) - number
        owner = np.repeat(np.arange(len(alive)), number)
        place = np.arange(len(owner)) - starts[owner]
        dwell = duration / number
        t = begin[owner] + (place + 0.5) * dwell[owner]
        base, part = self._place(alive[owner], t)
        x = self._look_up("x", base, part) + np.float32(shift[0])
        y = self._look_up("y", base, part) + np.float32(shift[1])
        e_s = np.exp(self._look_up("log_e_s", base, part))
        open_ = self._in_rows(y, t, t0, t1) if self._row_s else np.ones(len(t), bool)
        inside = (x > -0.5) & (x < optics.width_px - 0.5) & (y > -0.5) & (y < optics.height_px - 0.5) & open_
        snr = self._snr(e_s / np.maximum(speed, 1e-3)[owner])
        draw = open_ & ~dim[owner]
        light.append((x[draw], y[draw], (e_s * dwell[owner])[draw]))
        metre = (length / number)[owner] * (optics.mm_per_px * 1e-3)
        first_place, last_place = self._place(alive, begin), self._place(alive, end)
        exposed = self._look_up("exposed_m", *last_place) - self._look_up("exposed_m", *first_place)
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
        heights = np.exp(self._look_up("log_e_s", *self._place(wide, nine.ravel()))).reshape(-1, 9)
        typical = np.median(heights, axis=1) / np.maximum(speed[listed], 1e-3)
        return {
            "streaks": lines,
            "streak_snr": self._snr(typical).astype(np.float32),
            "flight": pieces["flight"][alive[listed]],
            "speed_m_s": (speed[listed] * optics.mm_per_px * 1e-3).astype(np.float32),
            "track_m": float(metre[inside].sum()),
            "track_seen_m": float(metre[inside & (snr >= DETECTABLE_SNR)].sum()),
            "track_exposed_m": float((exposed * share_in).sum()),
        }

    def _lines(self, piece: Array, a_s: Array, b_s: Array, shift: tuple[float, float]) -> NDArray[np.float32]:
        """Lines of pieces from times ``a_s`` to ``b_s``, contact end first, cut at the picture's edge."""
        width, height = self.optics.width_px, self.optics.height_px
        columns = []
        for when in (a_s, b_s):
            base, part = self._place(piece, when)
            columns.append(np.clip(self._look_up("x", base, part) + shift[0], -0.5, width - 0.5))
            columns.append(np.clip(self._look_up("y", base, part) + shift[1], -0.5, height - 0.5))
        lines = np.stack(columns, axis=1).astype(np.float32)
        ax, ay = self.optics.axis
        back = (lines[:, 2] - lines[:, 0]) * ax + (lines[:, 3] - lines[:, 1]) * ay < 0.0
        lines[back] = lines[back][:, [2, 3, 0, 1]]
        return lines

    def _trace_bursts(
        self, t0: float, t1: float, last: float, shift: tuple[float, float], light: list[tuple[Array, Array, Array]]
    ) -> dict[str, Any]:
        arms, known, optics = self._arms, self._bursts, self.optics
        if len(arms):
            end_s = arms["birth_s"] + arms["life_s"]
            alive = np.flatnonzero((arms["birth_s"] < last) & (end_s > t0))
        if not len(arms) or not len(alive):
            return _no_bursts()
        birth, life, stop = arms["birth_s"][alive], arms["life_s"][alive], arms["stop_s"][alive]
        begin = np.maximum(birth, t0)
        end = np.minimum(birth + life, last)
        vx, vy = arms["vx"][alive], arms["vy"][alive]
        way = stop * (np.exp(-(begin - birth) / stop) - np.exp(-(end - birth) / stop))
        length = np.hypot(vx, vy) * way
        number = np.maximum(np.ceil(length / SAMPLE_PX), 4).astype(np.int64)
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
        light.append((x[open_], y[open_], (e_s * dwell[owner])[open_]))
        snr = self._snr(e_s / np.maximum(np.hypot(vx, vy)[owner] * fade, 1.0))
        drew = np.add.reduceat(np.where(open_ & (snr >= VISIBLE_SNR), dwell[owner], 0.0), starts)
        # bursts are numbered in rising order, so the arm's burst is found by search
        row = np.searchsorted(known["burst_id"], arms["burst"][alive])
        order = np.lexsort((-drew, row))
        rows, where = np.unique(row[order], return_index=True)
        third = np.minimum(where + 2, len(order) - 1)
        third_drew = np.where(row[order][third] == rows, drew[order][third], 0.0)
        bx, by = known["x"][rows] + shift[0], known["y"][rows] + shift[1]
        longest = np.zeros(len(rows))
        np.maximum.at(longest, np.searchsorted(rows, row), drew)
        inside = (bx > -0.5) & (bx < optics.width_px - 0.5) & (by > -0.5) & (by < optics.height_px - 0.5)
        listed = inside & (longest > 0.0)
        rows, third_drew = rows[listed], third_drew[listed]
        first = ~known["shown"][rows].astype(bool)
        known["shown"][rows] = True
        row_delay = by[listed] * self._row_s
        return {
            "bursts": np.stack([bx[listed], by[listed]], axis=1).astype(np.float32),
            "arms": known["arms"][rows].astype(np.int16),
            "drew_ms": (1e3 * third_drew).astype(np.float32),
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
        super().__init__(optics, itertools.repeat(steady, 1), rng=rng, camera=camera, spray=spray)
        self._launched_s = begin


def vary(steel: Steel, rng: np.random.Generator) -> Steel:
    """Return a steel whose sparks look otherwise at the same hazard: arms, brightness along the streak, sizes."""
    low = int(rng.integers(3, 5))
    return replace(
        steel,
        arms_low=low,
        arms_high=low + int(rng.integers(0, 5)),
        fork_share=float(np.clip(steel.fork_share + rng.uniform(-0.3, 0.3), 0.0, 1.0)),
        goes_on_share=float(np.clip(steel.goes_on_share + rng.uniform(-0.2, 0.2), 0.0, 0.8)),
        arm_speed_m_s=steel.arm_speed_m_s * float(np.exp(rng.normal(0.0, 0.25))),
        arm_life_ms=steel.arm_life_ms * float(np.exp(rng.normal(0.0, 0.2))),
        radius_um=steel.radius_um * float(np.exp(rng.normal(0.0, 0.08))),
        launch_k=steel.launch_k + float(rng.normal(0.0, 60.0)),
        oxidisable_share=steel.oxidisable_share * float(np.exp(rng.normal(0.0, 0.08))),
    )


def _no_streaks() -> dict[str, Any]:
    return {
        "streaks": np.zeros((0, 4), np.float32),
        "streak_snr": np.zeros(0, np.float32),
        "flight": np.zeros(0, np.int64),
        "speed_m_s": np.zeros(0, np.float32),
        "track_m": 0.0,
        "track_seen_m": 0.0,
        "track_exposed_m": 0.0,
    }


def _no_bursts() -> dict[str, Any]:
    return {
        "bursts": np.zeros((0, 2), np.float32),
        "arms": np.zeros(0, np.int16),
        "drew_ms": np.zeros(0, np.float32),
        "late": np.zeros(0, bool),
        "first": np.zeros(0, bool),
        "burst_id": np.zeros(0, np.int64),
        "burst_t_s": np.zeros(0, np.float64),
        "fork": np.zeros(0, bool),
        "burst_flight": np.zeros(0, np.int64),
    }
