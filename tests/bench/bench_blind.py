"""What dirt, blur and shaking do to the figures, and what a clean lens and a steady camera look like.

    python -m tests.bench.bench_blind [light] [blur] [dirt] [shake] [edges] [grades] [streams]

One line a case: streaks, their typical height and width, burst-rate with its standard error, share of the detectable
track that was seen, the highest shaking that was told. Seeds are this bench's own.
"""

from __future__ import annotations

import math
import sys
from typing import Any

import cv2
import numpy as np

from edgewatch.figures.tally import Tally
from edgewatch.monitor.shaking import ShakeWatch
from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.scene import Scene
from edgewatch.rehearsal.steel import STEELS, WORKSHOP
from edgewatch.rehearsal.swarm import Conditions
from edgewatch.sight.optics import Optics
from edgewatch.sight.sight import Sight

OPTICS: dict[str, Any] = {
    "width_px": 640,
    "height_px": 400,
    "mm_per_px": 1.5,
    "contact_px": (30.0, 200.0),
    "direction_deg": 0.0,
    "exposure_ms": 2.5,
    "fps": 100.0,
}
SETTLE_S = 0.25


class _EdgedScene(Scene):
    """With parts of a machine in the picture that shake along: a rail, a post, a rod, ``edges_dn`` brighter."""

    edges_dn = 0.0

    def with_edges(self, edges_dn: float) -> _EdgedScene:
        """Put them there."""
        height, width = self.optics.height_px, self.optics.width_px
        parts = np.zeros((height, width), np.float32)
        cv2.rectangle(parts, (0, 3 * height // 4), (width, height), edges_dn, -1)
        cv2.rectangle(parts, (25 * width // 32, 0), (28 * width // 32, height), edges_dn, -1)
        cv2.line(parts, (60, 0), (400, 120), edges_dn, 3)
        parts = cv2.GaussianBlur(parts, (0, 0), self.camera.psf_sigma_px)
        plain = self._sensor.ground_dn

        def ground_dn(t_s: float, shift_px: tuple[float, float] = (0.0, 0.0)) -> Any:
            ground = plain(t_s, shift_px)
            move = np.array([[1.0, 0.0, shift_px[0]], [0.0, 1.0, shift_px[1]]])
            ground += cv2.warpAffine(parts, move, (width, height), borderMode=cv2.BORDER_REPLICATE)
            return ground

        self._sensor.ground_dn = ground_dn  # type: ignore[method-assign]
        return self


def show(
    tag: str,
    *,
    seeds: tuple[int, ...] = (21,),
    seconds: float = 1.0,
    steel: str = "C45",
    sparks_per_s: float = 4000.0,
    speed_m_s: float = 28.0,
    edges_dn: float = 0.0,
    optics: dict[str, Any] | None = None,
    **camera: Any,
) -> None:
    """Run one case and print its line."""
    own = Optics(**{**OPTICS, **(optics or {})})
    whole, true_m, shake_px, frames = Tally(own), 0.0, 0.0, 0
    for seed in seeds:
        stretch = Conditions(
            begin_s=0.0,
            end_s=1e3,
            steel={**STEELS, **WORKSHOP}[steel],
            sparks_per_s=max(sparks_per_s, 1.0),
            wheel_speed_m_s=speed_m_s,
        )
        model = CameraModel(hot_pixels=5, **camera)
        plan = [stretch] if sparks_per_s else []
        scene = _EdgedScene(own, plan, camera=model, rng=np.random.default_rng(seed)).with_edges(edges_dn)
        sight, watch = Sight(own), ShakeWatch(own.fps)
        for index in range(round((SETTLE_S + seconds) * own.fps)):
            picture, truth = scene.frame()
            seen = sight.look(picture)
            watch.update(seen, index / own.fps)
            if index >= SETTLE_S * own.fps:
                whole.add(seen, t_s=index / own.fps + 1000.0 * seed)
                true_m += truth.track_seen_m
                frames += 1
                shake_px = max(shake_px, watch.shake_px if math.isfinite(watch.shake_px) else 0.0)
    f = whole.figures()
    error = math.sqrt(f.bursts) / f.exposure_m if f.exposure_m > 0.0 else math.nan
    share = f.track_m / true_m if true_m > 0.0 else math.nan
    print(
        f"{tag:28s} streaks/picture {f.streaks / frames:6.1f}  height {f.streak_peak_dn:5.1f} DN  "
        f"width {f.streak_width_px:4.2f} px  rate {f.burst_rate_per_m:5.3f} +- {error:5.3f}  track {share:5.3f}  "
        f"shake {shake_px:4.2f} px",
        flush=True,
    )


def main(sections: list[str]) -> None:
    """Print the sections asked for, or all."""
    three: dict[str, Any] = {"seeds": (21, 22, 23), "seconds": 2.0}

    def wanted(name: str) -> bool:
        return not sections or name in sections

    if wanted("light"):
        for light in (1.0, 0.7, 0.5, 0.35, 0.25, 0.15):
            show(f"light {light}", light=light, **three)
    if wanted("blur"):
        for blur in (0.0, 1.0, 1.5, 2.0, 3.0):
            show(f"defocus {blur} px", defocus_px=blur, **three)
    if wanted("dirt"):
        for spots in (0, 40, 120, 300):
            show(f"dirt {spots} spots", dirt_spots=spots, **three)
    if wanted("shake"):
        for shake in (0.0, 1.5, 3.0, 5.0, 8.0, 12.0):
            show(f"shaking {shake} px", vibration_px=shake, **three)
    if wanted("edges"):
        for edges in (10.0, 40.0):
            for sparks in (0.0, 4000.0):
                for shake in (0.0, 1.0, 1.5, 2.0, 3.0, 5.0):
                    tag = f"edges {edges:.0f} DN, {shake} px{'' if sparks else ', dark'}"
                    show(tag, edges_dn=edges, sparks_per_s=sparks, vibration_px=shake)
    if wanted("grades"):
        for steel in (*STEELS, "stainless 410", "die steel", "grey cast iron", "white cast iron"):
            for speed in (30.0, 20.0):
                show(f"{steel}, {speed:.0f} m/s", steel=steel, speed_m_s=speed)
    if wanted("streams"):
        for tag, case in {
            "500 sparks/s": {"sparks_per_s": 500.0},
            "1000 sparks/s": {"sparks_per_s": 1000.0},
            "7000 sparks/s": {"sparks_per_s": 7000.0},
            "20000 sparks/s": {"sparks_per_s": 20000.0},
            "60 fps, 8 ms": {"optics": {"fps": 60.0, "exposure_ms": 8.0}},
            "1000 fps, 0.9 ms": {"optics": {"fps": 1000.0, "exposure_ms": 0.9}},
            "haze, flicker": {"haze_dn": 40.0, "flicker": 0.4, "texture": 0.6},
            "JPEG 70": {"jpeg_quality": 70},
        }.items():
            for steel in ("C15", "C45", "C100"):
                show(f"{tag}, {steel}", steel=steel, seeds=(7,), **case)  # type: ignore[arg-type]


if __name__ == "__main__":
    main(sys.argv[1:])
