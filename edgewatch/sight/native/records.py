"""Records that the compiled steps take, field by field as the C sources declare them."""

from __future__ import annotations

import ctypes
from ctypes import c_double, c_float, c_int32, c_void_p

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native


class Picture(ctypes.Structure):
    """A blurred picture."""

    _fields_ = (("blurred", c_void_p), ("height", c_int32), ("width", c_int32))


class GroundRules(ctypes.Structure):
    """How drift and noise are taken from a picture."""

    _fields_ = (
        *((name, c_double) for name in ("deepest_dn", "other_scene_dn", "noise_clip", "least_noise_dn")),
        *((name, c_int32) for name in ("row_stride", "column_stride", "measure_noise")),
    )


class GroundState(ctypes.Structure):
    """What they were found to be."""

    _fields_ = tuple((name, c_double) for name in ("level_dn", "uneven_dn", "raw_noise_dn"))


class Steps(ctypes.Structure):
    """Where the columns of steps lie."""

    _fields_ = tuple((name, c_void_p) for name in ("at", "inward", "height", "size", "share", "begins"))


class Lengths(ctypes.Structure):
    """How long streaks are at a distance from the contact point; ``number`` of places 0: not known."""

    _fields_ = (
        ("places", c_void_p),
        ("typical", c_void_p),
        ("contact_x", c_double),
        ("contact_y", c_double),
        ("longest_px", c_double),
        ("spread", c_double),
        ("number", c_int32),
    )


class StepRules(ctypes.Structure):
    """What makes a step."""

    _fields_ = (
        *((name, c_double) for name in ("least_height", "share")),
        *((name, c_int32) for name in ("least_points", "beyond_px", "box_px")),
    )


class PairRules(ctypes.Structure):
    """What makes a pair of steps, and its cost."""

    _fields_ = (
        *((name, c_float) for name in ("side_px", "side_tan", "least_run_px", "ratio_log", "fade_px")),
        *((name, c_double) for name in ("ratio_most", "path_share", "long_px")),
        *((name, c_double) for name in ("cost_full", "cost_most", "pair_most", "full_share")),
        ("dark_most", c_int32),
    )


class LoneRules(ctypes.Structure):
    """What is read about a step left alone, and which lines are the same."""

    _fields_ = (
        *((name, c_double) for name in ("turn_most", "turn_error_most", "turn_errors", "turn_spread", "turn_unknown")),
        *((name, c_double) for name in ("dark_dn", "dark_share", "inner_px", "least_px", "least_share", "least_lit")),
        *((name, c_double) for name in ("long_px", "far_from", "far_to", "beside_px", "most", "odds_least")),
        *((name, c_double) for name in ("same_weight", "arms_share", "noise_dn")),
        ("beside_along_px", c_void_p),
        *((name, c_float) for name in ("same_side_px", "same_cos", "skew_most", "end_side_px", "end_far_px")),
        *((name, c_int32) for name in ("far_box", "beside_count", "from_contact")),
    )


class LoneNet(ctypes.Structure):
    """Where the weights lie by which it is judged."""

    _fields_ = (
        *((name, c_void_p) for name in ("hidden", "hidden_bias", "output")),
        ("output_bias", c_float),
        ("units", c_int32),
    )


class ArmRules(ctypes.Structure):
    """What makes a line an arm."""

    _fields_ = (
        *((name, c_double) for name in ("late_sure", "arm_side_px", "arm_gap_px", "late_gap_px", "short_share")),
        *((name, c_double) for name in ("radial_cos", "across_cos", "across_share", "stem_least_px", "old_reach")),
        *((name, c_int32) for name in ("from_contact", "least_arms")),
    )


def picture(blurred: NDArray[np.float32]) -> Picture:
    """The record of a picture, float32 (H, W)."""
    return Picture(native.place(blurred), *blurred.shape)


class RidgeRules(ctypes.Structure):
    """What makes a ridge point, and the blur's taps."""

    _fields_ = (
        *((name, c_float) for name in ("threshold", "crest_px", "least_bend")),
        *((name, c_int32) for name in ("margin", "inner", "outer")),
    )
