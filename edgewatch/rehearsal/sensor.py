"""A camera at work: electrons before the lens -> an 8-bit picture.

The ground (lamp light on haze and wall, dirt, hot pixels) is drawn once; each picture adds light and noise. Work arrays
are kept from picture to picture: fresh megabytes cost more than the arithmetic on them.
"""

from __future__ import annotations

import math
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.camera import FULL_SCALE_DN, CameraModel

Array = NDArray[Any]

_BANK = 1 << 20
"""Random numbers kept beyond one picture's worth: each picture takes a stretch from a random place, so that noise costs
a copy instead of a quarter of a million draws. The same stretch comes again about once in a million pictures."""
_BLOOM_SIGMA_PX = 16.0
"""How far bloom spreads: some percent of the picture's width."""
_LEAST_GAMMA_STEPS = 16
"""Steps of the gamma table to one grey value."""


def _gaussian(sigma_px: float) -> Array:
    half = max(1, math.ceil(3.5 * sigma_px))
    x = np.arange(-half, half + 1, dtype=np.float64)
    kernel = np.exp(-0.5 * (x / sigma_px) ** 2)
    return np.asarray(kernel / kernel.sum())


def _disc_kernel(core: Array, radius_px: float) -> Array:
    """Disc of confusion of ``radius_px`` convolved with the core, square, sum 1."""
    half = len(core) // 2 + math.ceil(radius_px)
    side, fine = 2 * half + 1, 8
    centre = (np.arange(side * fine) + 0.5) / fine - half - 0.5
    disc = (centre[:, None] ** 2 + centre[None, :] ** 2 <= radius_px**2).astype(np.float64)
    disc = disc.reshape(side, fine, side, fine).sum(axis=(1, 3))
    disc = disc / disc.sum()
    return np.asarray(cv2.sepFilter2D(disc, cv2.CV_64F, core, core, borderType=cv2.BORDER_CONSTANT))


def line_peak(camera: CameraModel) -> float:
    """Height of a long line of one electron per px of its length (electrons a pixel)."""
    profile = _gaussian(camera.psf_sigma_px)
    if camera.defocus_px > 0.0:
        profile = _disc_kernel(profile, camera.defocus_px).sum(axis=0)
    wing = float(np.convolve(profile, _gaussian(camera.psf_wing_px)).max())
    peak = (1.0 - camera.psf_wing_share) * float(profile.max()) + camera.psf_wing_share * wing
    return (1.0 - camera.bloom) * peak


class LineHeight:
    """Height of drawn lines above typical ground, in noise deviations of the ground, as the finished picture has it.

    Gamma and quantisation are included, compression is not.
    """

    def __init__(self, camera: CameraModel) -> None:
        self._camera = camera
        self._dn_per_electron = camera.gain_dn_per_e * line_peak(camera)
        ground = camera.dark_dn + camera.haze_dn
        slope = float(camera.output_dn(np.array(ground + 0.5)) - camera.output_dn(np.array(ground - 0.5)))
        analog = max(float(camera.noise_dn(np.array(ground))) ** 2 - 1.0 / 12.0, 0.0)
        self._noise = math.sqrt(analog * slope**2 + 1.0 / 12.0)
        self._ground = ground
        self._low = float(camera.output_dn(np.array(ground)))

    def __call__(self, electrons_per_px: Array) -> Array:
        """Height for lines of so many electrons per px of length, any shape."""
        level = electrons_per_px * self._dn_per_electron + self._ground
        if self._camera.gamma == 1.0:
            return np.asarray((np.minimum(level, FULL_SCALE_DN) - self._low) / self._noise)
        return np.asarray((self._camera.output_dn(level) - self._low) / self._noise)


class Sensor:
    """One camera at work; everything random comes from ``rng``. Not thread safe: work arrays are shared."""

    def __init__(self, camera: CameraModel, width_px: int, height_px: int, rng: np.random.Generator) -> None:
        self.camera = camera
        self.width_px, self.height_px = width_px, height_px
        self._rng = rng
        core = _gaussian(camera.psf_sigma_px)
        self._core = core.astype(np.float32)
        self._disc = _disc_kernel(core, camera.defocus_px).astype(np.float32) if camera.defocus_px > 0.0 else None
        shape = (height_px, width_px)
        self._lamp = self._draw_lamp(shape)
        self._clear = self._draw_dirt(shape)
        self._hot = self._draw_hot(shape)
        self._bank = rng.standard_normal(_BANK + width_px * height_px, dtype=np.float32)
        codes = np.arange(256 * _LEAST_GAMMA_STEPS) / _LEAST_GAMMA_STEPS
        self._gamma_table = np.rint(camera.output_dn(codes)).astype(np.uint8)
        self._mean = np.zeros(shape, np.float32)
        self._noise = np.zeros(shape, np.float32)
        self._lit: Array = np.zeros((0, 0), np.float32)

    def _draw_lamp(self, shape: tuple[int, int]) -> Array:
        """Lamp light on haze and wall: smooth unevenness."""
        height, width = shape
        coarse = self._rng.normal(size=(6, 9)).astype(np.float32)
        uneven = cv2.resize(coarse, (width, height), interpolation=cv2.INTER_CUBIC)
        return np.asarray(self.camera.haze_dn * np.maximum(1.0 + self.camera.texture * uneven, 0.05), dtype=np.float32)

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
            square = ((columns - x) ** 2 + (rows - y) ** 2) / (2.0 * size**2)
            clear *= 1.0 - depth * np.exp(-square * square)
        return clear

    def _draw_hot(self, shape: tuple[int, int]) -> tuple[Array, Array]:
        places = self._rng.choice(shape[0] * shape[1], size=self.camera.hot_pixels, replace=False)
        return places, self._rng.uniform(30.0, 240.0, size=self.camera.hot_pixels).astype(np.float32)

    def ground_dn(self, t_s: float, shift_px: tuple[float, float] = (0.0, 0.0)) -> Array:
        """Mean grey value (linear DN) without sparks at time ``t_s``, float32 (height, width).

        The array is the sensor's own and holds until the next call; ``expose`` takes it.
        """
        camera = self.camera
        wave = 1.0 + camera.flicker * math.sin(2.0 * math.pi * camera.flicker_hz * t_s)
        lamp = self._lamp
        if shift_px != (0.0, 0.0):
            matrix = np.array([[1.0, 0.0, shift_px[0]], [0.0, 1.0, shift_px[1]]])
            size = (self.width_px, self.height_px)
            lamp = cv2.warpAffine(lamp, matrix, size, flags=cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
        ground = self._mean
        np.multiply(lamp, np.float32(wave), out=ground)
        if self._clear is not None:
            ground *= self._clear
        ground += np.float32(camera.dark_dn)
        return ground

    def spread(self, electrons: Array) -> Array:
        """Light after the lens: core or disc, wings, bloom; float32, electrons a pixel."""
        camera, border = self.camera, cv2.BORDER_CONSTANT
        height, width = electrons.shape
        if self._lit.shape[0] < height or self._lit.shape[1] != width:
            self._lit = np.zeros((height, width), np.float32)
        lit = self._lit[:height]
        if self._disc is not None:
            cv2.filter2D(electrons, cv2.CV_32F, self._disc, dst=lit, borderType=border)
        else:
            cv2.sepFilter2D(electrons, cv2.CV_32F, self._core, self._core, dst=lit, borderType=border)
        wing, bloom = camera.psf_wing_share, camera.bloom
        if wing == 0.0 and bloom == 0.0:
            return lit
        # wings and bloom are smooth: blur them small
        half = cv2.resize(lit, ((width + 1) // 2, (height + 1) // 2), interpolation=cv2.INTER_AREA)
        wide = cv2.GaussianBlur(half, (0, 0), camera.psf_wing_px / 2.0, borderType=border)
        wide *= np.float32((1.0 - bloom) * wing)
        if bloom > 0.0:
            small = cv2.resize(half, ((width + 15) // 16, (height + 15) // 16), interpolation=cv2.INTER_AREA)
            far = cv2.GaussianBlur(small, (0, 0), _BLOOM_SIGMA_PX / 16.0)
            far *= np.float32(bloom)
            wide = cv2.add(wide, cv2.resize(far, (half.shape[1], half.shape[0])))
        around = cv2.resize(wide, (width, height))
        cv2.addWeighted(lit, (1.0 - bloom) * (1.0 - wing), around, 1.0, 0.0, dst=lit)
        return lit

    def expose(self, ground_dn: Array, electrons: Array | None = None, rows: slice = slice(None)) -> NDArray[np.uint8]:
        """One picture, uint8 (height, width): ``electrons`` (after ``spread``, for ``rows``) over ``ground_dn``.

        ``ground_dn`` is used up.
        """
        camera, mean, noise = self.camera, ground_dn, self._noise
        if electrons is not None:
            light = electrons * np.float32(camera.gain_dn_per_e)
            if self._clear is not None:
                light *= self._clear[rows]
            mean[rows] += light
        # variance: K2 sd2 + K (mean - dark); quantisation adds its twelfth by itself
        np.multiply(mean, np.float32(camera.gain_dn_per_e), out=noise)
        own = (camera.gain_dn_per_e * camera.read_noise_e) ** 2 - camera.gain_dn_per_e * camera.dark_dn
        noise += np.float32(own)
        np.maximum(noise, np.float32(0.0), out=noise)
        np.sqrt(noise, out=noise)
        start = int(self._rng.integers(_BANK))
        noise *= self._bank[start : start + mean.size].reshape(mean.shape)
        if camera.hot_pixels:
            places, level = self._hot
            mean.reshape(-1)[places] += level
        if camera.gamma == 1.0:
            picture = cv2.add(mean, noise, dtype=cv2.CV_8U)
        else:
            mean += noise
            mean *= np.float32(_LEAST_GAMMA_STEPS)
            np.clip(mean, 0.0, 256 * _LEAST_GAMMA_STEPS - 1, out=mean)
            picture = self._gamma_table[mean.astype(np.uint16)]
        if camera.jpeg_quality:
            _, data = cv2.imencode(".jpg", picture, [cv2.IMWRITE_JPEG_QUALITY, camera.jpeg_quality])
            return np.asarray(cv2.imdecode(data, cv2.IMREAD_GRAYSCALE), dtype=np.uint8)
        return np.asarray(picture, dtype=np.uint8)
