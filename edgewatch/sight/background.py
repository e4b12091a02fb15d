"""Background and noise: what the picture would be without sparks.

Two parts. A *pattern* follows each pixel slowly by sigma-delta steps of one grey level (McFarlane & Schofield, Machine
Vision and Applications 8, 1995): machine parts, hot pixels, the wheel's glow. Equal steps up and down converge to a
pixel's median over time; ours are rarer upwards and converge to a low quantile, which a crowded stream leaves dark. A
*drift* is what the picture at hand adds smoothly over space (haze, lamp flicker): the difference from the pattern,
averaged in cells and opened morphologically (Serra 1982), so that nothing as thin as a streak survives in it. A single
picture has no pattern: its background is the median over a neighbourhood, which bright streaks and dark bars both
leave alone as long as they cover less than half of it.
"""

from __future__ import annotations

from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.native import records
from edgewatch.sight.ranks import middle

_cv: Any = cv2  # its own type hints differ between versions and forbid scalars that it takes

CELL_PX = 8
"""Side of the cells in which the drift is averaged (px): several streak widths."""

OPENING_CELLS = 5
"""Side of the opening in cells: bundles of streaks narrower than 40 px do not enter the drift. The compiled form has it
as a constant, like the side of a cell."""

DEEPEST_HOLE_DN = 1.0
"""A cell further below the pattern than the picture as a whole is not drift, which is smooth (DN)."""

MEDIAN_STEP, MEDIAN_WINDOW = 3, 11
"""The median of a single picture is taken over 33 px, of every third: several streaks apart."""

MEAN_BELOW = 0.3989
"""Mean of the negative part of Gaussian noise per deviation, 1 / sqrt(2 pi)."""

TEXTURE_NOISE = 1.6
TEXTURE_REACH = 5.0
"""Roughness from this many noise deviations on raises the ground by so many of its own."""

OTHER_SCENE_DN = 20.0
"""When half of the picture changes by more than this at once, beside what all of it changes by (a lamp), it is another
scene, and all is learnt anew (DN)."""

LEARN_AT = (4, 8, 16)
"""After so many pictures the pattern is the lowest value seen: sparks have moved on. That it lies below the mean by one
or two noise deviations everywhere is made up for by the drift."""

UP_EVERY = 4
"""The pattern may step up in one learning picture of so many and down in each: it converges to the value that a fifth
of the pictures lie below, which is dark even where a streak lies in most pictures."""

PATTERN_RATE_HZ = 25.0
"""Grey levels per second that the pattern may follow: a lamp warming up, not a spark stream."""

LEAST_NOISE_DN = 1.3
"""Noise is never taken to be lower (DN): quantisation hides it, and compression smooths it away and leaves ripples of
its own. On tuning scenes compressed to quality 70 this finds more and lists less that is none than 1.0 or 1.6."""

NOISE_STRIDE = (5, 7)
"""Rows and columns between the pixels that noise is estimated from; coprime with compression blocks of 8 and 16."""

NOISE_CLIP, CLIPPED_SHARE = 3.0, 0.9871
"""Noise is the deviation of what lies within so many deviations, which for a Gaussian is this share of the whole."""

NOISE_EVERY = 4
"""After the first pictures noise is measured in one of so many: gain and light do not change faster."""


class Background:
    """Follows background and noise.

    After each picture: ``level_dn`` its mean background, ``uneven_dn`` the deviation of the background across it,
    ``raw_noise_dn`` its noise, ``noise_dn`` the same but never below what quantisation hides (DN).
    """

    def __init__(self, *, period_s: float) -> None:
        """``period_s``: time between pictures (s)."""
        self._every = max(1, round(1.0 / (PATTERN_RATE_HZ * period_s)))
        self._state = records.GroundState()
        self.reset()

    def reset(self) -> None:
        """Forget everything seen."""
        self._first: NDArray[np.uint8] | None = None
        self._lowest: NDArray[np.uint8] | None = None
        self._pattern: NDArray[np.uint8] | None = None
        self._pattern_cells: NDArray[np.float32] | None = None
        self._cells: NDArray[np.float32] | None = None
        self._seen = 0
        self._steps = 0
        self.level_dn = 0.0
        self.noise_dn = LEAST_NOISE_DN
        self.raw_noise_dn = 0.0
        self.uneven_dn = 0.0

    @property
    def settled(self) -> bool:
        """Whether this is the picture with which the pattern is first complete."""
        return self._seen == max(LEARN_AT)

    def excess(self, picture: NDArray[np.uint8]) -> NDArray[np.uint8]:
        """Picture less its background (DN, clipped at 0), uint8 (H, W); learns from the picture."""
        height, width = picture.shape
        small = (max(2, width // CELL_PX), max(2, height // CELL_PX))
        if native.LIBRARY and self._pattern is not None and _divides(picture.shape):
            over = self._excess_compiled(np.ascontiguousarray(picture))
            if over is not None:
                self._learn(picture, None, small)
                return over
        cells = _cells(picture, small)
        if self._cells is not None:
            change = cells - self._cells
            if middle(np.abs(change - middle(change))) > OTHER_SCENE_DN:
                self.reset()
        self._cells = cells
        if self._pattern_cells is not None:
            cells = cells - self._pattern_cells
            # where a glow that the pattern has learnt goes out, the opening would carry the hole to its surroundings
            cells = np.maximum(cells, middle(cells) - DEEPEST_HOLE_DN)
        drift = _open(cells)
        # Whole grey levels from here on: 8-bit arithmetic is several times faster, and the picture has no finer ones.
        opened: NDArray[np.uint8] | None = None
        if self._pattern is None:
            opened = _add_drift(np.zeros_like(picture), drift)
            ground = _median(picture) if self._seen == 0 else opened
        else:
            ground = _add_drift(self._pattern, drift)
        rows, columns = NOISE_STRIDE
        here = np.ascontiguousarray(ground[::rows, ::columns])
        level, uneven = _cv.meanStdDev(here)
        self.level_dn, self.uneven_dn = float(level[0, 0]), float(uneven[0, 0])
        if self._noise_is_due:
            self._measure_noise(picture[::rows, ::columns], here)
        self._learn(picture, opened, small)
        if self._seen == 1:
            ground = self._over_texture(picture, ground, small)
        return np.asarray(_cv.subtract(picture, ground))

    @property
    def _noise_is_due(self) -> bool:
        return self._seen < NOISE_EVERY or self._seen % NOISE_EVERY == 0

    def _excess_compiled(self, picture: NDArray[np.uint8]) -> NDArray[np.uint8] | None:
        """Excess over pattern and drift; ``None`` when the picture shows another scene."""
        assert self._pattern is not None
        assert self._pattern_cells is not None
        assert self._cells is not None
        due = self._noise_is_due
        over, state = np.empty(picture.shape, np.uint8), self._state
        other_scene = native.LIBRARY.edgewatch_excess(
            native.start(picture),
            native.start(self._pattern),
            native.start(self._pattern_cells),
            native.start(self._cells),
            *picture.shape,
            _RULES_DUE if due else _RULES,
            native.start(over),
            native.reference(state),
        )
        native.enough(other_scene, 1)
        if other_scene:
            return None
        self.level_dn, self.uneven_dn = state.level_dn, state.uneven_dn
        if due:
            self.raw_noise_dn = state.raw_noise_dn / CLIPPED_SHARE
            self.noise_dn = max(LEAST_NOISE_DN, self.raw_noise_dn)
        return over

    def _measure_noise(self, picture: NDArray[np.uint8], ground: NDArray[np.uint8]) -> None:
        left = picture.ravel().astype(np.float32) - ground.ravel()
        # Median absolute deviation finds the scale, clipping the sparks away; the clipped deviation then refines it
        # below one grey level, which a median of integers cannot do.
        centre = middle(left)
        scale = max(LEAST_NOISE_DN, 1.4826 * middle(np.abs(left - centre)))
        quiet = left[np.abs(left - centre) <= NOISE_CLIP * scale]
        deviation = float(quiet.std()) / CLIPPED_SHARE if quiet.size else 0.0
        self.raw_noise_dn = deviation
        self.noise_dn = max(LEAST_NOISE_DN, deviation)

    def _over_texture(
        self, picture: NDArray[np.uint8], ground: NDArray[np.uint8], small: tuple[int, int]
    ) -> NDArray[np.uint8]:
        """Ground raised where the picture is rough. Sparks only add light, so what lies below the ground is noise or
        texture alone: where its mean is greater than noise explains, that texture reaches as far above the ground too.
        """
        below = _cv.resize(_cv.subtract(ground, picture), small, interpolation=_cv.INTER_AREA).astype(np.float32)
        rough = _cv.blur(below, (3, 3)) / MEAN_BELOW - TEXTURE_NOISE * self.noise_dn
        if float(rough.max()) <= 0.0:
            return ground
        raised = np.clip(TEXTURE_REACH * rough, 0.0, 255.0).astype(np.uint8)
        return np.asarray(_cv.add(ground, _cv.resize(raised, ground.shape[::-1], interpolation=_cv.INTER_LINEAR)))

    def _learn(self, picture: NDArray[np.uint8], opened: NDArray[np.uint8] | None, small: tuple[int, int]) -> None:
        self._seen += 1
        if self._first is None or self._lowest is None:
            self._first, self._lowest = opened, picture.copy()
            return
        if self._seen <= max(LEARN_AT):
            self._lowest = _cv.min(self._lowest, picture)
            if self._seen not in LEARN_AT:
                return
            self._pattern = _cv.max(self._first, self._lowest)
        elif self._seen % self._every == 0:
            self._steps += 1
            if native.LIBRARY and _divides(picture.shape):
                self._follow_compiled(np.ascontiguousarray(picture))
                return
            down = _cv.min(_cv.compare(picture, self._pattern, _cv.CMP_LT), 1)
            self._pattern = _cv.subtract(self._pattern, down)
            if self._steps % UP_EVERY == 0:
                up = _cv.min(_cv.compare(picture, self._pattern, _cv.CMP_GT), 1)
                self._pattern = _cv.add(self._pattern, up)
        else:
            return
        self._pattern_cells = _cells(self._pattern, small)

    def _follow_compiled(self, picture: NDArray[np.uint8]) -> None:
        """Both in place: nobody else holds them."""
        assert self._pattern is not None
        assert self._pattern_cells is not None
        done = native.LIBRARY.edgewatch_follow(
            native.start(picture),
            native.start(self._pattern),
            *picture.shape,
            self._steps % UP_EVERY == 0,
            native.start(self._pattern_cells),
        )
        native.enough(done, 0)


def _rules(*, measure_noise: bool) -> Any:
    return native.reference(
        records.GroundRules(
            deepest_dn=DEEPEST_HOLE_DN,
            other_scene_dn=OTHER_SCENE_DN,
            noise_clip=NOISE_CLIP,
            least_noise_dn=LEAST_NOISE_DN,
            row_stride=NOISE_STRIDE[0],
            column_stride=NOISE_STRIDE[1],
            measure_noise=measure_noise,
        )
    )


_RULES, _RULES_DUE = _rules(measure_noise=False), _rules(measure_noise=True)


def _cells(picture: NDArray[np.uint8], small: tuple[int, int]) -> NDArray[np.float32]:
    """Means in cells (DN, whole), float32 in (columns, rows) as ``small`` has them."""
    if native.LIBRARY and _divides(picture.shape):
        picture, cells = np.ascontiguousarray(picture), np.empty(small[::-1], np.float32)
        native.enough(native.LIBRARY.edgewatch_cells(native.start(picture), *picture.shape, native.start(cells)), 0)
        return cells
    return np.asarray(_cv.resize(picture, small, interpolation=_cv.INTER_AREA).astype(np.float32))


def _divides(shape: tuple[int, ...]) -> bool:
    """Whether a picture consists of whole cells, and of some, which the compiled steps ask for."""
    height, width = shape
    return min(height, width) >= 4 * CELL_PX and height % CELL_PX == 0 == width % CELL_PX


def _add_drift(pattern: NDArray[np.uint8], drift: NDArray[np.float32]) -> NDArray[np.uint8]:
    """A pattern and a drift in cells (DN, taken as whole), the latter drawn between the cells' centres."""
    whole = _cv.resize(np.rint(drift), pattern.shape[::-1], interpolation=_cv.INTER_LINEAR)
    return np.asarray(np.clip(np.floor(whole + np.float32(0.5)) + pattern, 0.0, 255.0), np.uint8)


def _median(picture: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Median about each pixel, of one pixel in MEDIAN_STEP each way, over MEDIAN_WINDOW of these."""
    thin = np.ascontiguousarray(picture[::MEDIAN_STEP, ::MEDIAN_STEP])
    height, width = picture.shape
    smooth = _cv.blur(_cv.medianBlur(thin, MEDIAN_WINDOW), (3, 3))
    return np.asarray(_cv.resize(smooth, (width, height), interpolation=_cv.INTER_LINEAR))


def _open(cells: NDArray[np.float32]) -> NDArray[np.float32]:
    kernel = np.ones((OPENING_CELLS, OPENING_CELLS), np.uint8)
    opened = _cv.morphologyEx(cells, _cv.MORPH_OPEN, kernel, borderType=_cv.BORDER_REPLICATE)
    return np.asarray(_cv.blur(opened, (OPENING_CELLS, OPENING_CELLS)))
