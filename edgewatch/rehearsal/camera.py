"""The camera: light on the sensor -> grey values, after the model of EMVA 1288.

Mean ``dark + K e``, variance ``K2 sd2 + 1/12 + K (mean - dark)``; then gamma, quantisation to 8 bit, compression.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.heat import Band

Array = NDArray[Any]

FULL_SCALE_DN = 255.0
_BANK = 1 << 20
"""Random numbers kept beyond one picture's worth: each picture takes a stretch from a random place, so that noise costs
a copy instead of a quarter of a million draws."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CameraModel:
    """Camera, lens and what lies before it. Raises ``ValueError`` naming the field that is out of range.

    ``light``: brightness of the glow, 1 is typical (about 90 DN for a particle of 50 micrometre at 1800 K and 20 m/s at
    1 mm per px). ``psf_sigma_px``, ``psf_wing_share``, ``psf_wing_px``: core and wings of the point spread.
    ``defocus_px``: radius of the blur disc. ``gain_dn_per_e`` (K), ``read_noise_e`` (sd), ``dark_dn``: EMVA 1288.
    ``gamma``: output = full scale (linear / full scale)^(1/gamma). ``haze_dn``: mean of the lamp light on haze and
    wall, ``texture``: unevenness of it, ``flicker``: share of it that flickers at ``flicker_hz``. ``hot_pixels``.
    ``jpeg_quality``: 0 none. ``vibration_px``: sd of the picture's shaking. ``dirt_spots`` on the lens.
    ``wheel_glow_dn``: peak of the glow round the contact point. ``bloom``: share of the light that spreads far.
    ``row_us``: delay from row to row of a rolling shutter; 0: global shutter.
    """

    light: float = 1.0
    psf_sigma_px: float = 0.85
    psf_wing_share: float = 0.06
    psf_wing_px: float = 2.2
    defocus_px: float = 0.0
    gain_dn_per_e: float = 0.06
    read_noise_e: float = 20.0
    dark_dn: float = 8.0
    gamma: float = 1.0
    haze_dn: float = 4.0
    texture: float = 0.3
    flicker: float = 0.1
    flicker_hz: float = 100.0
    hot_pixels: int = 0
    jpeg_quality: int = 0
    vibration_px: float = 0.0
    dirt_spots: int = 0
    wheel_glow_dn: float = 60.0
    bloom: float = 0.01
    row_us: float = 0.0
    band: Band = field(default_factory=Band)

    def __post_init__(self) -> None:
        """Check ranges once."""
        for name, low, high in (
            ("light", 0.0, 1000.0),
            ("psf_sigma_px", 0.2, 10.0),
            ("psf_wing_share", 0.0, 0.9),
            ("psf_wing_px", 0.2, 10.0),
            ("defocus_px", 0.0, 20.0),
            ("gain_dn_per_e", 1e-4, 10.0),
            ("read_noise_e", 0.0, 1000.0),
            ("dark_dn", 0.0, 200.0),
            ("gamma", 0.3, 4.0),
            ("haze_dn", 0.0, 250.0),
            ("texture", 0.0, 1.0),
            ("flicker", 0.0, 1.0),
            ("flicker_hz", 0.0, 100_000.0),
            ("hot_pixels", 0, 100_000),
            ("jpeg_quality", 0, 100),
            ("vibration_px", 0.0, 20.0),
            ("dirt_spots", 0, 1000),
            ("wheel_glow_dn", 0.0, 5000.0),
            ("bloom", 0.0, 0.5),
            ("row_us", 0.0, 1000.0),
        ):
            value = getattr(self, name)
            if not (math.isfinite(value) and low <= value <= high):
                raise ValueError(f"{name} = {value!r}: allowed is {low:g} to {high:g}")

    def noise_dn(self, level_dn: Array) -> Array:
        """Standard deviation (DN, before gamma) at a mean of ``level_dn``: EMVA 1288, quantisation included."""
        shot = self.gain_dn_per_e * np.maximum(np.asarray(level_dn) - self.dark_dn, 0.0)
        return np.asarray(np.sqrt((self.gain_dn_per_e * self.read_noise_e) ** 2 + shot + 1.0 / 12.0))

    def output_dn(self, linear_dn: Array) -> Array:
        """Grey value before quantisation: gamma, clipped to 0..255."""
        clipped = np.clip(np.asarray(linear_dn, dtype=np.float64), 0.0, FULL_SCALE_DN)
        if self.gamma == 1.0:
            return np.asarray(clipped)
        return np.asarray(FULL_SCALE_DN * (clipped / FULL_SCALE_DN) ** (1.0 / self.gamma))

    def varied(self, rng: np.random.Generator) -> CameraModel:
        """Another camera of the same kind: other point spread, noise, gamma, light and ground."""
        return replace(
            self,
            light=self.light * float(np.exp(rng.normal(0.0, 0.25))),
            psf_sigma_px=float(np.clip(self.psf_sigma_px * np.exp(rng.normal(0.0, 0.2)), 0.5, 3.0)),
            psf_wing_share=float(rng.uniform(0.0, 0.2)),
            psf_wing_px=float(rng.uniform(1.5, 3.5)),
            defocus_px=self.defocus_px + float(rng.choice([0.0, rng.uniform(0.3, 1.2)])),
            gain_dn_per_e=self.gain_dn_per_e * float(np.exp(rng.normal(0.0, 0.35))),
            read_noise_e=self.read_noise_e * float(np.exp(rng.normal(0.0, 0.25))),
            dark_dn=float(rng.uniform(4.0, 16.0)),
            gamma=float(rng.choice([1.0, rng.uniform(0.8, 2.2)])),
            haze_dn=self.haze_dn + float(rng.uniform(0.0, 12.0)),
            texture=float(rng.uniform(0.1, 0.6)),
            flicker=float(np.clip(self.flicker + rng.uniform(-0.1, 0.15), 0.0, 1.0)),
            dirt_spots=self.dirt_spots + int(rng.integers(0, 4)),
            wheel_glow_dn=self.wheel_glow_dn * float(np.exp(rng.normal(0.0, 0.5))),
            bloom=float(rng.uniform(0.0, 0.03)),
        )


def _kernel(camera: CameraModel) -> tuple[Array, Array | None]:
    """Point spread: (1-D core kernel, full 2-D kernel or None when the core alone says it all)."""
    half = max(2, math.ceil(3.0 * max(camera.psf_sigma_px, camera.psf_wing_px * (camera.psf_wing_share > 0))))
    half = min(half + math.ceil(camera.defocus_px), 31)
    x = np.arange(-half, half + 1, dtype=np.float64)
    core = np.exp(-0.5 * (x / camera.psf_sigma_px) ** 2)
    core /= core.sum()
    if camera.defocus_px == 0.0:
        return core.astype(np.float32), None
    fine = np.linspace(-half - 0.5, half + 0.5, 8 * (2 * half + 1) + 1)
    centre = 0.5 * (fine[1:] + fine[:-1])
    disc = (centre[:, None] ** 2 + centre[None, :] ** 2 <= camera.defocus_px**2).astype(np.float64)
    disc = disc.reshape(2 * half + 1, 8, 2 * half + 1, 8).sum(axis=(1, 3))
    disc /= disc.sum()
    full = cv2.sepFilter2D(disc, cv2.CV_64F, core, core, borderType=cv2.BORDER_CONSTANT)
    return core.astype(np.float32), (full / full.sum()).astype(np.float32)


class Sensor:
    """One camera at work: fixed ground, hot pixels and dirt, drawn once from ``rng``; then pictures.

    Light comes as electrons a pixel before the lens has spread it. Not thread safe.
    """

    def __init__(self, camera: CameraModel, width_px: int, height_px: int, rng: np.random.Generator) -> None:
        self.camera = camera
        self.width_px, self.height_px = width_px, height_px
        self._rng = rng
        self._core, self._full = _kernel(camera)
        sigma = camera.psf_wing_px
        half = math.ceil(3.0 * sigma)
        wing = np.exp(-0.5 * (np.arange(-half, half + 1) / sigma) ** 2)
        self._wing = (wing / wing.sum()).astype(np.float32)
        self.line_peak = self._line_peak()
        shape = (height_px, width_px)
        self._lamp = self._draw_lamp(shape)
        self._clear = self._draw_dirt(shape)
        self._hot = self._draw_hot(shape)
        self._bank = rng.standard_normal(_BANK + width_px * height_px, dtype=np.float32)
        codes = np.arange(4096) / 16.0
        self._gamma_table = np.rint(camera.output_dn(codes)).astype(np.uint8)

    def _line_peak(self) -> float:
        """Height of a line of one electron per px of length, whatever its direction, electrons a pixel."""
        wing = self.camera.psf_wing_share
        profile = self._core if self._full is None else self._full.sum(axis=0)
        spread = (1.0 - wing) * float(profile.max()) + wing * float(np.convolve(profile, self._wing).max())
        return (1.0 - self.camera.bloom) * spread

    def _draw_lamp(self, shape: tuple[int, int]) -> Array:
        """Lamp light on haze and wall: smooth unevenness."""
        height, width = shape
        coarse = self._rng.normal(size=(6, 9)).astype(np.float32)
        field_ = cv2.resize(coarse, (width, height), interpolation=cv2.INTER_CUBIC)
        return np.asarray(self.camera.haze_dn * np.maximum(1.0 + self.camera.texture * field_, 0.05), dtype=np.float32)

    def _draw_dirt(self, shape: tuple[int, int]) -> Array | None:
        """Share of light that soiled glass lets through; None when clean."""
        if not self.camera.dirt_spots:
            return None
        height, width = shape
        rows, columns = np.mgrid[0:height, 0:width].astype(np.float32)
        clear: Array = np.ones(shape, np.float32)
        for _ in range(self.camera.dirt_spots):
            x, y = self._rng.uniform(0, width), self._rng.uniform(0, height)
            size = self._rng.uniform(0.01, 0.04) * width
            depth = self._rng.uniform(0.2, 0.7)
            clear *= 1.0 - depth * np.exp(-((((columns - x) ** 2 + (rows - y) ** 2) / (2.0 * size**2)) ** 2))
        return clear

    def _draw_hot(self, shape: tuple[int, int]) -> tuple[Array, Array]:
        places = self._rng.choice(shape[0] * shape[1], size=self.camera.hot_pixels, replace=False)
        return places, self._rng.uniform(30.0, 240.0, size=self.camera.hot_pixels).astype(np.float32)

    def ground_dn(self, t_s: float, shift_px: tuple[float, float] = (0.0, 0.0)) -> Array:
        """Mean grey value (linear DN) without sparks at time ``t_s``, float32 (height, width), a fresh array."""
        camera = self.camera
        wave = 1.0 + camera.flicker * math.sin(2.0 * math.pi * camera.flicker_hz * t_s)
        lamp = self._lamp
        if shift_px != (0.0, 0.0):
            matrix = np.array([[1.0, 0.0, shift_px[0]], [0.0, 1.0, shift_px[1]]])
            lamp = cv2.warpAffine(
                lamp, matrix, (self.width_px, self.height_px), flags=cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE
            )
        ground = lamp * np.float32(wave)
        if self._clear is not None:
            ground *= self._clear
        ground += np.float32(camera.dark_dn)
        return np.asarray(ground)

    def spread(self, electrons: Array) -> Array:
        """Light after the lens: core, wings, bloom; float32 electrons."""
        camera = self.camera
        border = cv2.BORDER_CONSTANT
        if self._full is not None:
            core = cv2.filter2D(electrons, cv2.CV_32F, self._full, borderType=border)
        else:
            core = cv2.sepFilter2D(electrons, cv2.CV_32F, self._core, self._core, borderType=border)
        if camera.psf_wing_share > 0.0:
            wing = cv2.sepFilter2D(core, cv2.CV_32F, self._wing, self._wing, borderType=border)
            core = cv2.addWeighted(core, 1.0 - camera.psf_wing_share, wing, camera.psf_wing_share, 0.0)
        if camera.bloom > 0.0:
            small = cv2.resize(core, None, fx=0.125, fy=0.125, interpolation=cv2.INTER_AREA)
            far = cv2.resize(cv2.GaussianBlur(small, (0, 0), 2.0), (core.shape[1], core.shape[0]))
            core = cv2.addWeighted(core, 1.0 - camera.bloom, far, camera.bloom, 0.0)
        return np.asarray(core)

    def expose(self, electrons: Array | None, ground_dn: Array, rows: slice = slice(None)) -> NDArray[np.uint8]:
        """One picture: ``electrons`` (after ``spread``, for the rows given; None: none) over ``ground_dn``; uint8."""
        camera = self.camera
        mean = ground_dn
        if electrons is not None:
            part = electrons * np.float32(camera.gain_dn_per_e)
            if self._clear is not None:
                part *= self._clear[rows]
            mean[rows] += part
        variance = np.maximum(mean - np.float32(camera.dark_dn), np.float32(0.0))
        variance *= np.float32(camera.gain_dn_per_e)
        variance += np.float32((camera.gain_dn_per_e * camera.read_noise_e) ** 2)
        start = int(self._rng.integers(_BANK))
        noise = self._bank[start : start + mean.size].reshape(mean.shape)
        deviation = np.sqrt(variance, out=variance)
        deviation *= noise
        if camera.hot_pixels:
            places, level = self._hot
            mean.reshape(-1)[places] += level
        if camera.gamma == 1.0:
            picture = cv2.add(mean, deviation, dtype=cv2.CV_8U)
        else:
            mean += deviation
            codes = np.clip(mean * np.float32(16.0), 0.0, 4095.0)
            picture = self._gamma_table[codes.astype(np.uint16)]
        if camera.jpeg_quality:
            _, data = cv2.imencode(".jpg", picture, [cv2.IMWRITE_JPEG_QUALITY, camera.jpeg_quality])
            return np.asarray(cv2.imdecode(data, cv2.IMREAD_GRAYSCALE), dtype=np.uint8)
        return np.asarray(picture, dtype=np.uint8)
