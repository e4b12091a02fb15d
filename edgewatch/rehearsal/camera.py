"""The camera as numbers: lens, sensor and what lies before it, after the model of EMVA 1288.

Mean ``dark + K e``, variance ``K2 sd2 + 1/12 + K (mean - dark)``; then gamma, quantisation to 8 bit, compression.
``sensor`` makes pictures of it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.heat import Band

Array = NDArray[Any]

FULL_SCALE_DN = 255.0


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
