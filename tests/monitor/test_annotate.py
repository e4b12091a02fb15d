"""Drawing keeps the picture and adds what was seen."""

import cv2
import numpy as np
import pytest

from edgewatch.monitor.annotate import annotate, encode_jpeg
from edgewatch.sight.detections import Detections, Light, PictureFlag
from edgewatch.sight.optics import Optics


def detections(streaks: list[list[float]], bursts: list[list[float]]) -> Detections:
    """Detections with the given ends and centres."""
    n, m = len(streaks), len(bursts)
    return Detections(
        streaks=np.array(streaks, np.float32).reshape(n, 4),
        streak_snr=np.full(n, 20, np.float32),
        streak_flags=np.zeros(n, np.uint8),
        bursts=np.array(bursts, np.float32).reshape(m, 2),
        burst_arms=np.full(m, 4, np.int16),
        burst_flags=np.zeros(m, np.uint8),
        light=Light(
            background_dn=5,
            noise_dn=2,
            saturated_share=0,
            streak_width_px=2.5,
            streak_peak_dn=60,
            flags=PictureFlag.NONE,
        ),
    )


OPTICS = Optics(
    width_px=640, height_px=400, mm_per_px=1, contact_px=(-20, 200), direction_deg=0, exposure_ms=2.5, fps=200
)


def test_empty_picture_keeps_its_pixels() -> None:
    """Nothing seen, axis outside: only captions are added below."""
    grey = np.random.default_rng(1).integers(0, 255, (400, 640)).astype(np.uint8)
    far = Optics(
        width_px=640, height_px=400, mm_per_px=1, contact_px=(-20, -300), direction_deg=180, exposure_ms=2.5, fps=200
    )
    drawn = annotate(grey, detections([], []), far, ["bar 1", "burst-rate 0.9 /m"])
    assert drawn.shape == (448, 640, 3)
    assert (drawn[:400] == grey[:, :, None]).all()
    assert drawn[400:].max() > 100


def test_streaks_and_bursts_are_drawn_where_they_are() -> None:
    """Colour appears on the streak's line and on the ring about the burst, and nowhere far from them."""
    drawn = annotate(np.zeros((400, 640), np.uint8), detections([[100, 50, 200, 80]], [[400, 300]]), OPTICS)
    assert drawn[65, 150].any()
    assert drawn[300, 407].any()
    assert not drawn[100:180, 420:640].any()


def test_small_pictures_are_enlarged() -> None:
    """A binned picture stays readable, and the marks move with it."""
    small = Optics(
        width_px=160, height_px=100, mm_per_px=4, contact_px=(-5, 50), direction_deg=0, exposure_ms=2.5, fps=200
    )
    drawn = annotate(np.zeros((100, 160), np.uint8), detections([[20, 20, 60, 20]], []), small)
    assert drawn.shape == (300, 480, 3)
    assert drawn[61, 121].any()


def test_jpeg_round_trip() -> None:
    """The bytes are a JPEG of the same size; an empty picture is refused."""
    data = encode_jpeg(np.full((60, 80), 77, np.uint8))
    back = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_GRAYSCALE)
    assert back.shape == (60, 80)
    assert abs(int(back.mean()) - 77) <= 1
    with pytest.raises((ValueError, cv2.error)):
        encode_jpeg(np.zeros((0, 0), np.uint8))
