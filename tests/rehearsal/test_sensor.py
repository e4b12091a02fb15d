"""The sensor: light is kept, lines are as high as said, noise is as modelled, faults show."""

from __future__ import annotations

import numpy as np
import pytest

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.sensor import LineHeight, Sensor, line_peak

QUIET = CameraModel(haze_dn=0.0, read_noise_e=0.0, gain_dn_per_e=0.01, wheel_glow_dn=0.0)


def make(camera: CameraModel, *, width: int = 160, height: int = 120, seed: int = 1) -> Sensor:
    """A small sensor."""
    return Sensor(camera, width, height, np.random.default_rng(seed))


@pytest.mark.parametrize(
    "camera", [CameraModel(), CameraModel(defocus_px=1.7), CameraModel(bloom=0.0, psf_wing_share=0.0)]
)
def test_the_lens_keeps_the_light(camera: CameraModel) -> None:
    """A point in the middle spreads over pixels that sum to what it was, to a percent."""
    light = np.zeros((160, 160), np.float32)
    light[80, 80] = 1000.0
    assert float(make(camera).spread(light).sum()) == pytest.approx(1000.0, rel=0.01)


@pytest.mark.parametrize(
    "camera",
    [
        CameraModel(),
        CameraModel(psf_sigma_px=1.6),
        CameraModel(defocus_px=2.2),
        CameraModel(psf_wing_share=0.2, psf_wing_px=3.0),
    ],
)
def test_a_line_is_as_high_as_said(camera: CameraModel) -> None:
    """A long line of one electron a pixel peaks at ``line_peak``, to four percent (wings are blurred small)."""
    light = np.zeros((120, 160), np.float32)
    light[60, :] = 1.0
    assert float(make(camera).spread(light)[60, 80]) == pytest.approx(line_peak(camera), rel=0.04)


def test_ground_flickers_and_dirt_darkens() -> None:
    """The lamp's wave shows in the ground; dirt takes its share."""
    still = make(CameraModel(haze_dn=20.0, flicker=0.5, flicker_hz=100.0))
    high = still.ground_dn(0.0025).mean()
    low = still.ground_dn(0.0075).mean()
    assert high - low == pytest.approx(20.0, rel=0.25)
    dirty = make(CameraModel(haze_dn=20.0, texture=0.0, flicker=0.0, dirt_spots=6))
    assert dirty.ground_dn(0.0).min() < 24.0
    assert dirty.ground_dn(0.0).max() == pytest.approx(28.0, abs=0.1)


def test_hot_pixels_stay_where_they_are() -> None:
    """The same pixels stand out in every picture."""
    sensor = make(CameraModel(hot_pixels=20))
    pictures = [sensor.expose(sensor.ground_dn(0.01 * k)) > 30 for k in range(5)]
    assert np.logical_and.reduce(pictures).sum() >= 18
    assert np.logical_or.reduce(pictures).sum() <= 20


def test_full_scale_is_the_end() -> None:
    """Light beyond the full well clips at 255, with gamma too."""
    for gamma in (1.0, 2.2):
        sensor = make(CameraModel(gamma=gamma))
        light = np.full((120, 160), 1e6, np.float32)
        assert (sensor.expose(sensor.ground_dn(0.0), light) == 255).all()


def test_gamma_lifts_the_shadows() -> None:
    """The mean of a dark picture follows the curve."""
    flat = make(CameraModel(gamma=1.0, haze_dn=20.0, flicker=0.0))
    lifted = make(CameraModel(gamma=2.0, haze_dn=20.0, flicker=0.0))
    plain = flat.expose(flat.ground_dn(0.0)).astype(float)
    curved = lifted.expose(lifted.ground_dn(0.0)).astype(float)
    assert curved.mean() == pytest.approx((255.0 * np.sqrt(plain / 255.0)).mean(), rel=0.01)


def test_compression_changes_pictures_little() -> None:
    """JPEG at quality 70: the mean stays, single pixels do not."""
    sharp, rough = make(CameraModel()), make(CameraModel(jpeg_quality=70))
    a = sharp.expose(sharp.ground_dn(0.0)).astype(float)
    b = rough.expose(rough.ground_dn(0.0)).astype(float)
    assert abs(a.mean() - b.mean()) < 1.0
    assert (a != b).any()


def test_shaking_moves_the_wall() -> None:
    """A shift of ten pixels moves the uneven ground by ten pixels."""
    sensor = make(CameraModel(haze_dn=40.0, texture=0.6, flicker=0.0))
    still = sensor.ground_dn(0.0).copy()
    moved = sensor.ground_dn(0.0, (10.0, 0.0)).copy()
    assert moved[:, 20:150] == pytest.approx(still[:, 10:140], abs=1e-3)


def test_two_pictures_differ_by_noise_alone() -> None:
    """Two exposures of the same ground: same mean, independent noise."""
    sensor = make(CameraModel(flicker=0.0))
    a = sensor.expose(sensor.ground_dn(0.0)).astype(float).ravel()
    b = sensor.expose(sensor.ground_dn(0.0)).astype(float).ravel()
    wall = sensor.ground_dn(0.0).ravel()
    assert abs(np.corrcoef(a - wall, b - wall)[0, 1]) < 0.05


def test_heights_are_in_noise_deviations_and_saturate() -> None:
    """A line of n noise deviations is said to be n high; none is higher than full scale."""
    camera = CameraModel()
    height = LineHeight(camera)
    noise = float(camera.noise_dn(np.array(camera.dark_dn + camera.haze_dn)))
    electrons = 5.0 * noise / (camera.gain_dn_per_e * line_peak(camera))
    assert float(height(np.array(electrons))) == pytest.approx(5.0)
    assert float(height(np.array(1e9))) == pytest.approx((255.0 - camera.dark_dn - camera.haze_dn) / noise)
    assert float(height(np.array(0.0))) == pytest.approx(0.0, abs=1e-9)


def test_a_varied_camera_is_another_camera_within_range() -> None:
    """Forty variations are all valid and differ in spread, noise, gamma and ground."""
    rng = np.random.default_rng(5)
    cameras = [CameraModel().varied(rng) for _ in range(40)]
    for name in ("psf_sigma_px", "gain_dn_per_e", "read_noise_e", "haze_dn", "light"):
        assert len({getattr(camera, name) for camera in cameras}) == 40
    assert len({camera.gamma for camera in cameras}) > 10


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("light", -1.0),
        ("psf_sigma_px", 0.0),
        ("gain_dn_per_e", 0.0),
        ("read_noise_e", float("nan")),
        ("gamma", 0.0),
        ("jpeg_quality", 101),
        ("row_us", -1.0),
        ("haze_dn", 300.0),
    ],
)
def test_impossible_cameras_are_refused_by_field(field: str, value: float) -> None:
    """Every value out of range names itself."""
    with pytest.raises(ValueError, match=field):
        CameraModel(**{field: value})
