"""All particles, arms and bursts under way, in flat tables.

Particles are launched in batches, flown (``flight``), struck by bursts (``bursts``) and written down at every step of
the integration, so that a picture looks up where each was and how bright at any time of its exposure.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal import bursts, flight, heat
from edgewatch.rehearsal.steel import Steel
from edgewatch.sight.optics import Optics

Array = NDArray[Any]

GLOW_E_S = 6.5e7
"""Electrons a second from a particle of 50 micrometre radius at 1800 K with ``light`` = 1: a line of about 90 DN at
20 m/s, 1 mm per px and the default camera."""
GLOW_REFERENCE_M = 50e-6
FRAGMENT_K = 2300.0
"""Fragments burn hotter than their parent: fresh iron, short diffusion way."""
BATCH_SPARKS = 1000.0
BATCH_S = 0.25
"""Sparks a batch: numpy's cost a call is spread over many, and the tables stay small."""
_MOST_GENERATIONS = 12


DRAUGHT_SPARKS_PER_S = 4000.0
"""The stream hands its momentum to the air, which moves along at a speed that goes with the square root of the momentum
flux: a gram of metal a second at 26 m/s in a jet of six centimetres gives some 3 m/s. So more grinding force
lengthens the stream although neither particle size nor launch speed changes (common practice knows the effect)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Spray:
    """How sparks leave the wheel. ``slip``: launch speed as a share of the wheel's surface speed ("a little below",
    common practice), ``slip_spread`` its deviation. ``angle_sd_deg``, ``depth_sd_deg``: spread in the picture and out
    of it. ``stray_share``: sparks that bounce off something, with ``stray_sd_deg``. ``width_mm``: of the contact.
    ``launch_sd_k``: spread of the launch temperature. ``draught_m_s``: velocity of the air that a stream of
    ``DRAUGHT_SPARKS_PER_S`` drags along its axis.
    """

    slip: float = 0.94
    slip_spread: float = 0.04
    angle_sd_deg: float = 6.5
    depth_sd_deg: float = 5.0
    stray_share: float = 0.02
    stray_sd_deg: float = 30.0
    width_mm: float = 3.0
    launch_sd_k: float = 80.0
    draught_m_s: float = 3.0

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
            ("draught_m_s", 0.0, 50.0),
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


class Swarm:
    """What flies, as ``conditions`` (consecutive stretches in rising order; an iterator is read as far as needed) say.

    ``light`` and ``band``: of the camera. Everything random comes from ``rng``. ``pieces`` are stretches of flight
    between launch, bursts and darkness; ``arms`` and ``bursts`` as thrown.
    """

    def __init__(
        self,
        optics: Optics,
        conditions: Iterable[Conditions],
        *,
        spray: Spray,
        light: float,
        band: heat.Band,
        rng: np.random.Generator,
        batch_sparks: float = BATCH_SPARKS,
        batch_s: float = BATCH_S,
    ) -> None:
        self.optics = optics
        self._batch_sparks, self._batch_s = batch_sparks, batch_s
        self.spray = spray
        self.light = light
        self.band = band
        self.pieces = _Store(_PIECES)
        self.arms = _Store(_ARMS)
        self.bursts = _Store(_BURSTS)
        self._rng = rng
        self._conditions: Iterator[Conditions] = iter(conditions)
        self._stretches: list[Conditions] = []
        self._now: Conditions | None = None
        self._next_stretch()
        self._launched_s = min(0.0, self._now.begin_s) if self._now is not None else 0.0
        self._tables = {name: np.zeros(0, np.float32) for name in _TABLES}
        self._flights = 0
        self._burst_count = 0

    def launch_until(self, t_s: float, *, keep_from_s: float) -> None:
        """Launch all particles that leave the wheel before ``t_s``; drop what ended before ``keep_from_s``."""
        self._stretches = [stretch for stretch in self._stretches if stretch.end_s > keep_from_s]
        while self._launched_s < t_s:
            now = self._now
            if now is None:
                self._launched_s = t_s
                return
            if now.end_s <= self._launched_s:
                self._next_stretch()
                continue
            begin = max(self._launched_s, now.begin_s)
            if begin >= t_s:  # a gap before the next stretch
                self._launched_s = t_s
                return
            end = min(now.end_s, begin + min(self._batch_s, self._batch_sparks / max(now.sparks_per_s, 1.0)))
            if now.steel is not None and now.sparks_per_s > 0.0:
                self._forget(keep_from_s)
                self._launch(now, now.steel, begin, end)
            self._launched_s = end

    def _next_stretch(self) -> None:
        self._now = next(self._conditions, None)
        if self._now is not None:
            self._stretches.append(self._now)

    def grinding(self, begin_s: float, end_s: float) -> bool:
        """Whether a bar touches the wheel at any time from ``begin_s`` to ``end_s`` (already launched)."""
        return any(
            stretch.steel is not None
            and stretch.sparks_per_s > 0
            and stretch.begin_s < end_s
            and stretch.end_s > begin_s
            for stretch in self._stretches
        )

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
        draught = spray.draught_m_s * math.sqrt(now.sparks_per_s * steel.stream / DRAUGHT_SPARKS_PER_S)
        wind = (draught * ax, draught * ay, 0.0)
        numbers = self._flights + np.arange(count)
        self._flights += count
        for _ in range(_MOST_GENERATIONS):
            launch, birth, numbers = self._fly_on(launch, birth, numbers, steel, wind)
            if not len(birth):
                break

    def _fly_on(
        self,
        launch: flight.Launch,
        birth: Array,
        numbers: Array,
        steel: Steel,
        wind_m_s: tuple[float, float, float],
    ) -> tuple[flight.Launch, Array, Array]:
        """Fly one generation; returns what flies on after its bursts."""
        rng = self._rng
        paths = flight.fly(launch, steel, wind_m_s=wind_m_s)
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
        bright = math.log(GLOW_E_S * max(self.light, 1e-12)) + 2.0 * np.log(launch.radius_m / GLOW_REFERENCE_M)
        log_e_s = heat.log_glow(paths.temperature_k, self.band) + bright[:, None]
        for name, values in (
            ("x", paths.position_m[:, :, 0] * scale + x0),
            ("y", paths.position_m[:, :, 1] * scale + y0),
            ("log_e_s", log_e_s),
            ("exposed_m", exposed),
        ):
            self._tables[name] = np.concatenate([self._tables[name], values.astype(np.float32).ravel()])
        last = np.full(count, columns - 2, dtype=np.int64)
        self.pieces.append(birth_s=birth, end_s=end, offset=offset, last=last, flight=numbers)

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
        hot = float(heat.log_glow(np.array(FRAGMENT_K), self.band))
        log_e_s = math.log(GLOW_E_S * max(self.light, 1e-12)) + hot + np.log(thrown.brightness)
        log_e_s += 2.0 * np.log(radius / GLOW_REFERENCE_M)[thrown.burst]
        self.arms.append(
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
        self.bursts.append(burst_id=ids, x=x, y=y, t_s=t_s, arms=number, fork=forks, flight=numbers, shown=shown)

    def _forget(self, before_s: float) -> None:
        """Drop what ended before ``before_s``; table rows go in whole runs from the front."""
        alive = self.pieces["end_s"] > before_s
        if len(alive) and not alive.all():
            self.pieces.keep(alive)
            if len(self.pieces):
                front = int(self.pieces["offset"].min())
                if front > 0:
                    self._tables = {name: values[front:] for name, values in self._tables.items()}
                    self.pieces.columns["offset"] = self.pieces["offset"] - front
            else:
                self._tables = {name: values[:0] for name, values in self._tables.items()}
        if len(self.arms):
            self.arms.keep(self.arms["birth_s"] + self.arms["life_s"] > before_s)
        if len(self.bursts):
            # a burst's arms live some milliseconds; keep the burst well beyond
            self.bursts.keep(self.bursts["t_s"] > before_s - 0.05)

    def tables(self) -> Iterator[tuple[Array, dict[str, Array]]]:
        """Whole tables, a group of pieces with equal numbers of steps at a time: (pieces, name -> (pieces, K + 1))."""
        lasts = self.pieces["last"]
        for last in np.unique(lasts):
            group = np.flatnonzero(lasts == last)
            rows = self.pieces["offset"][group][:, None] + np.arange(int(last) + 2)
            yield group, {name: values[rows] for name, values in self._tables.items()}

    def look_up(self, name: str, base: Array, part: Array) -> Array:
        """Value of a table (x, y in px; log_e_s; exposed_m) at table rows ``base`` and ``part`` of a step beyond."""
        table = self._tables[name]
        low = table[base]
        return np.asarray(low + (table[base + 1] - low) * part)

    def place(self, piece: Array, t_s: Array) -> tuple[Array, Array]:
        """Table row and part of a step for pieces (indices) at times."""
        pieces = self.pieces
        step = (t_s - pieces["birth_s"][piece]) * (1.0 / flight.STEP_S)
        index = np.minimum(step.astype(np.int64), pieces["last"][piece])
        return pieces["offset"][piece] + index, (step - index).astype(np.float32)
