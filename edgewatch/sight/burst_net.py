"""The net that tells a burst from a crossing, an end beside another streak, or two streaks that overlap.

A small perceptron sifts out what is clearly none (a cascade, Viola & Jones, CVPR 2001). On the rest a net that shares
its weights over directions (convolution, LeCun et al., Neural Computation 1, 1989; here round the ring) says what is
there. Weights were learnt from both simulations with varied rendering by ``tests/bench/learn_bursts.py``.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import burst_weights as learnt
from edgewatch.sight import native
from edgewatch.sight.rings import RING_DIRECTIONS

SIFT_LEAST = 0.025
"""Candidates to which the small perceptron gives less than this are not looked at again: see ``learn_bursts`` for the
share of bursts that this costs."""

FIRST_REACH, FIRST_STEP = 2, 2
SECOND_REACH, SECOND_STEP = 1, 1
"""Reach: the first layer sees a direction with so many to either side, the second a place of the first with so many.
Step: and of these each takes every so-manieth."""

FIRST_PLACES = RING_DIRECTIONS // FIRST_STEP
SECOND_PLACES = FIRST_PLACES // SECOND_STEP


def sift_patches(patches: NDArray[np.float32]) -> NDArray[np.float64]:
    """Rough probability (M,) that each description as the sieve sees it (M, F) is a burst."""
    hidden = layer(patches, learnt.SIFT, learnt.SIFT_BIAS)
    return probability((hidden @ learnt.SIFTED + learnt.SIFTED_BIAS)[:, 0])


def judge_patches(
    patches: NDArray[np.float32], before: NDArray[np.float32], context: NDArray[np.float32]
) -> NDArray[np.float64]:
    """What the net says of descriptions (M, F) with those of the picture before (M, G) and context (M, C): (M, 5).

    Log odds that a burst is there; where, px along the stream and across it from the candidate; log odds that it went
    off before the exposure, and that no earlier picture showed it.
    """
    count = len(patches)
    if not count:
        return np.zeros((0, learnt.OUTPUT.shape[1]))
    first = layer(windows(_channels(patches, before), FIRST_REACH, FIRST_STEP), learnt.FIRST, learnt.FIRST_BIAS)
    first = first.reshape(count, FIRST_PLACES, -1)
    second = layer(windows(first, SECOND_REACH, SECOND_STEP), learnt.SECOND, learnt.SECOND_BIAS)
    joint = np.concatenate([second.reshape(count, -1), context], axis=1)
    hidden = layer(joint, learnt.HIDDEN, learnt.HIDDEN_BIAS)
    return np.asarray(hidden @ learnt.OUTPUT + learnt.OUTPUT_BIAS, dtype=np.float64)


def _channels(patches: NDArray[np.float32], before: NDArray[np.float32]) -> NDArray[np.float32]:
    """Rings of a picture (M, F) and of the one before (M, G) as (M, directions, rings)."""
    count = len(patches)
    if native.LIBRARY:
        first, second = (part.shape[1] // RING_DIRECTIONS for part in (patches, before))
        patches, before = np.ascontiguousarray(patches), np.ascontiguousarray(before)
        out = np.empty((count, RING_DIRECTIONS, first + second), np.float32)
        places = [native.place(part) for part in (patches, before, out)]
        native.LIBRARY.edgewatch_channels(count, places[0], first, places[1], second, RING_DIRECTIONS, places[2])
        return out
    rings = np.concatenate([part.reshape(count, -1, RING_DIRECTIONS) for part in (patches, before)], axis=1)
    return np.asarray(rings.transpose(0, 2, 1))


def windows(values: NDArray[np.float32], reach: int, step: int) -> NDArray[np.float32]:
    """Each direction with its neighbours: (M, D, C) -> (M * D / step, (2 * reach + 1) * C), closed to a ring."""
    count, directions, channels = values.shape
    if native.LIBRARY:
        values, out = (
            np.ascontiguousarray(values),
            np.empty((count * directions // step, (2 * reach + 1) * channels), np.float32),
        )
        native.LIBRARY.edgewatch_windows(
            count, native.place(values), directions, channels, reach, step, native.place(out)
        )
        return out
    closed = np.ascontiguousarray(np.concatenate([values[:, -reach:], values, values[:, :reach]], axis=1))
    size = (2 * reach + 1) * channels
    strides = (closed.strides[0], step * closed.strides[1], closed.strides[2])
    view = np.lib.stride_tricks.as_strided(closed, (count, directions // step, size), strides)
    return np.asarray(view.reshape(-1, size))


def layer(inputs: NDArray[np.float32], weights: NDArray[np.float32], bias: NDArray[np.float32]) -> NDArray[np.float32]:
    """Rectified layer: inputs (M, F), weights (F, U), bias (U,)."""
    if not len(inputs):
        return np.zeros((0, weights.shape[1]), np.float32)
    product: NDArray[np.float32] = inputs @ weights
    product += bias
    return np.asarray(np.maximum(product, 0.0, out=product))


def probability(logit: NDArray[np.floating]) -> NDArray[np.float64]:
    """Probability of log odds."""
    return np.asarray(1.0 / (1.0 + np.exp(-np.clip(logit, -30.0, 30.0))), dtype=np.float64)
