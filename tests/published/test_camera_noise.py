"""Camera noise against the formulas of EMVA 1288 (reference implementation at github.com/EMVA1288/emva1288)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.sensor import Sensor

# Worked with the standard's equations: K = 0.1 DN/e, dark noise 10 e, quantum efficiency 0.6.
GAIN, DARK_E, EFFICIENCY = 0.1, 10.0, 0.6
WORKED = {10.0: (1.069268, 0.561132), 100.0: (1.297433, 4.624515), 1000.0: (2.661453, 22.544074)}


def test_deviation_and_signal_to_noise_as_worked_out() -> None:
    """sigma_y2 = K2 sigma_d2 + 1/12 + K (mu_y - mu_y.dark), SNR = K eta mu_p / sigma_y."""
    camera = CameraModel(gain_dn_per_e=GAIN, read_noise_e=DARK_E, dark_dn=8.0)
    for photons, (deviation, ratio) in WORKED.items():
        signal = GAIN * EFFICIENCY * photons
        noise = float(camera.noise_dn(np.array(camera.dark_dn + signal)))
        assert noise == pytest.approx(deviation, rel=1e-5)
        assert signal / noise == pytest.approx(ratio, rel=1e-5)


def transfer(camera: CameraModel) -> tuple[np.ndarray, np.ndarray, float]:
    """Photon transfer: mean above dark and variance of evenly lit pictures, and the dark variance, from pairs.

    The variance is half that of the difference of two pictures, which takes out what is fixed.
    """
    sensor = Sensor(camera, 320, 240, np.random.default_rng(3))
    full_e = (255.0 - camera.dark_dn) / camera.gain_dn_per_e
    means, variances = [], []
    for share in (0.0, 0.05, 0.15, 0.3, 0.45, 0.6, 0.7):
        light = np.full((240, 320), share * full_e, np.float32)
        pair = [sensor.expose(sensor.ground_dn(0.0), light).astype(float) for _ in range(2)]
        means.append(0.5 * (pair[0].mean() + pair[1].mean()))
        variances.append(0.5 * (pair[0] - pair[1]).var())
    return np.array(means[1:]) - means[0], np.array(variances[1:]), variances[0]


@pytest.mark.parametrize("gain", [0.02, 0.06, 0.25])
def test_photon_transfer_of_pictures_gives_back_the_gain(gain: float) -> None:
    """Slope of variance on mean, zero offset, is K; the dark variance is K2 sigma_d2 + 1/12; as the standard fits."""
    camera = CameraModel(gain_dn_per_e=gain, read_noise_e=1.5 / gain, haze_dn=0.0, flicker=0.0)
    mean, variance, dark = transfer(camera)
    above = variance - dark
    slope = float((mean * above).sum() / (mean * mean).sum())
    assert slope == pytest.approx(gain, rel=0.02)
    assert dark == pytest.approx((gain * camera.read_noise_e) ** 2 + 1.0 / 12.0, rel=0.02)


def test_pictures_are_linear() -> None:
    """Mean above dark follows the light within half a grey value up to seventy percent of full scale."""
    camera = CameraModel(haze_dn=0.0, flicker=0.0)
    mean, _, _ = transfer(camera)
    assert mean == pytest.approx(np.array([0.05, 0.15, 0.3, 0.45, 0.6, 0.7]) * (255.0 - camera.dark_dn), abs=0.5)


def test_best_signal_to_noise_is_the_root_of_the_full_well() -> None:
    """SNR max = sqrt(full well): 122.47 (41.76 dB) for 15 000 e (worked with the standard's equation)."""
    gain = 247.0 / 15_000.0
    camera = CameraModel(gain_dn_per_e=gain, read_noise_e=0.0, dark_dn=8.0)
    noise = math.sqrt(float(camera.noise_dn(np.array(255.0))) ** 2 - 1.0 / 12.0)
    assert 247.0 / noise == pytest.approx(122.474487, rel=1e-6)
    assert 20.0 * math.log10(247.0 / noise) == pytest.approx(41.76091, rel=1e-5)
