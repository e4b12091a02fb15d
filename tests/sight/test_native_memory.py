"""The compiled steps stay within their arrays: run under the compiler's checks of addresses and undefined behaviour.

Pictures of every size and kind, with contact points in and beside them: full noise, saturated, checkered, crowds of
lines that leave the picture.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from edgewatch.sight import native

TOP = Path(__file__).parents[2]
PICTURES = 500

LOOK = """
import sys
from pathlib import Path
import cv2
import numpy as np
from edgewatch.sight import native
native.LIBRARY, why_not = native.load(Path(sys.argv[1]))
assert native.LIBRARY is not None, why_not
from edgewatch.sight.optics import Optics
from edgewatch.sight.sight import Sight

def draw(rng, height, width):
    kind = int(rng.integers(5))
    if kind == 0:
        return rng.integers(0, 256, (height, width)).astype(np.uint8)
    if kind == 1:
        return np.full((height, width), int(rng.choice([0, 128, 255])), np.uint8)
    if kind == 2:
        return ((np.add.outer(np.arange(height), np.arange(width)) % 2) * 255).astype(np.uint8)
    picture = rng.normal(10, 2, (height, width)).clip(0, 255).astype(np.uint8)
    for _ in range(int(rng.integers(0, 60))):
        a = rng.uniform(-10, [width + 10, height + 10])
        b = a + rng.normal(0, 40, 2)
        ends = [tuple(int(v) for v in end) for end in (a, b)]
        cv2.line(picture, *ends, int(rng.integers(20, 256)), int(rng.integers(1, 3)), cv2.LINE_AA)
    return picture

rng, looked = np.random.default_rng(int(sys.argv[2])), 0
while looked < int(sys.argv[3]):
    width, height = (int(v) for v in rng.integers(16, [200, 160]))
    if rng.uniform() < 0.5:
        width, height = 8 * (width // 8), 8 * (height // 8)
    optics = Optics(
        width_px=width,
        height_px=height,
        mm_per_px=float(rng.uniform(0.2, 3)),
        contact_px=(float(rng.uniform(-20, width + 20)), float(rng.uniform(-20, height + 20))),
        direction_deg=float(rng.uniform(-180, 180)),
        exposure_ms=2.5,
        fps=float(rng.choice([60, 100, 200])),
    )
    sight = Sight(optics)
    for _ in range(int(rng.integers(1, 25))):
        seen = sight.look(draw(rng, height, width))
        assert np.isfinite(seen.streaks).all() and np.isfinite(seen.bursts).all()
        looked += 1
print(looked)
"""


@pytest.mark.slow
def test_no_step_reads_or_writes_beyond_its_arrays(tmp_path: Path) -> None:
    """A byte too far ends the run with the place in the C source."""
    for path in [*native.FOLDER.glob("*.c"), *native.FOLDER.glob("*.h")]:
        shutil.copy(path, tmp_path)
    build = f"""
import sys
from pathlib import Path
sys.path.insert(0, {str(TOP / "deploy")!r})
import build_sight
print(build_sight.compile_sight(Path({str(tmp_path)!r})))
"""
    checks = "gcc -g -fsanitize=address,undefined -fno-sanitize-recover=undefined"
    done = subprocess.run(
        [sys.executable, "-c", build], env={**os.environ, "CC": checks}, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    found = [
        subprocess.run(
            ["gcc", f"-print-file-name={name}.so"], capture_output=True, text=True, check=True
        ).stdout.strip()
        for name in ("libasan", "libubsan")
    ]
    environment = {
        **os.environ,
        "LD_PRELOAD": " ".join(found),
        "ASAN_OPTIONS": "detect_leaks=0",
        "PYTHONPATH": str(TOP),
    }
    words = [sys.executable, "-c", LOOK, str(tmp_path / native.FILE.name), "1", str(PICTURES)]
    done = subprocess.run(words, env=environment, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr[-3000:]
    assert int(done.stdout) >= PICTURES
