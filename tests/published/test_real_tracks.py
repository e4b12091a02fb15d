"""Real photographs that ship inside scikit-image (public domain or CC0, see ``skimage.data``), as still scenes.

No registry package was found that carries photographs of bright tracks with counts. These check the other side: what
a real scene of brickwork, stars, coins or lattice masts with lamps does to the sight when it stays before the camera.
"""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray
from skimage import data

from edgewatch.sight import Sight
from edgewatch.sight.optics import Optics
from tests.scoring import match_streaks
from tests.sight.test_sight import draw

SEED = 97


def _mono(name: str) -> NDArray[np.uint8]:
    picture = getattr(data, name)()
    mono = cv2.cvtColor(picture, cv2.COLOR_RGB2GRAY) if picture.ndim == 3 else picture
    return np.ascontiguousarray(mono[:400, :640])


def _optics(picture: NDArray[np.uint8]) -> Optics:
    height, width = picture.shape
    return Optics(
        width_px=width,
        height_px=height,
        mm_per_px=1.0,
        contact_px=(-60.0, 100.0),
        direction_deg=0.0,
        exposure_ms=2.5,
        fps=200.0,
    )


@pytest.mark.slow
@pytest.mark.parametrize("name", ["rocket", "hubble_deep_field", "coins", "brick", "camera", "moon"])
def test_still_real_scene_shows_nothing_and_hides_nothing(name: str) -> None:
    """With read noise on it a real scene is learnt within half a second: nothing is seen; then a spark is."""
    scene = _mono(name).astype(np.float64)
    rng = np.random.default_rng(SEED)
    sight = Sight(_optics(_mono(name)))

    def take(extra: NDArray[np.float64] | float = 0.0) -> NDArray[np.uint8]:
        noisy = 0.6 * scene + extra + rng.normal(0.0, 2.0, scene.shape)
        return np.clip(np.rint(noisy), 0, 255).astype(np.uint8)

    seen = [sight.look(take()) for _ in range(100)]
    assert sum(len(one.streaks) + len(one.bursts) for one in seen[60:]) == 0
    line = (90.0, 100.0, 150.0, 101.0)
    spark = draw([(*line, 70.0)], ground=0.0, noise=0.0, shape=(scene.shape[0], scene.shape[1]))
    found = sight.look(take(spark.astype(np.float64)))
    assert len(match_streaks(np.array([line]), found.streaks)) == 1
    assert len(found.bursts) == 0
