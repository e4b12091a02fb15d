"""Records that the compiled steps take, field by field as the C sources declare them."""

from __future__ import annotations

import ctypes
from ctypes import c_double, c_float, c_int32, c_uint8, c_void_p

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


class Pieces(ctypes.Structure):
    """Where the columns of straight pieces lie, and how many they are."""

    _fields_ = (*((name, c_void_p) for name in ("begin", "end", "axis", "length", "points")), ("number", c_int32))


class Step(ctypes.Structure):
    """A step, of which the compiled steps keep a list."""

    _fields_ = (
        *((name, c_double * 2) for name in ("at", "inward")),
        *((name, c_double) for name in ("height", "size", "share")),
        ("begins", c_int32),
    )


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


class LengthMemory(ctypes.Structure):
    """And what they are learnt from: ``kept`` streaks, of which ``fresh`` are newer than what is known."""

    _fields_ = (
        ("lengths", Lengths),
        *((name, c_void_p) for name in ("away", "log")),
        *((name, c_double) for name in ("all_px", "straight_px")),
        *((name, c_int32) for name in ("kept", "fresh")),
    )


class LengthRules(ctypes.Structure):
    """What lengths are learnt from, and how."""

    _fields_ = (
        *((name, c_double) for name in ("radial_cos", "share_keep", "from_contact_share", "middle_spread")),
        *((name, c_double) for name in ("spread_least", "spread_most", "longest_factor")),
        *((name, c_int32) for name in ("most_kept", "least_kept", "new_part", "most_parts", "part_least")),
    )


class StepRules(ctypes.Structure):
    """What makes a step."""

    _fields_ = (
        *((name, c_double) for name in ("noise", "share")),
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
        *((name, c_double) for name in ("dark_noise", "dark_share", "inner_px", "least_px", "least_share")),
        *(
            (name, c_double)
            for name in ("least_lit", "long_px", "far_from", "far_to", "beside_px", "most", "odds_least")
        ),
        *((name, c_double) for name in ("same_weight", "arms_share")),
        ("beside_along_px", c_void_p),
        *((name, c_float) for name in ("same_side_px", "same_cos", "skew_most", "end_side_px", "end_far_px")),
        *((name, c_int32) for name in ("far_box", "beside_count")),
    )


class LoneNet(ctypes.Structure):
    """Where the weights lie by which it is judged."""

    _fields_ = (
        *((name, c_void_p) for name in ("hidden", "hidden_bias", "output")),
        ("output_bias", c_float),
        ("units", c_int32),
    )


class StreakRules(ctypes.Structure):
    """All that the search for streaks knows."""

    _fields_ = (
        ("steps", StepRules),
        ("pairs", PairRules),
        ("lengths", LengthRules),
        ("lone", LoneRules),
        ("net", LoneNet),
        ("learn_noise", c_double),
        ("level_samples", c_int32),
    )


class Traced(ctypes.Structure):
    """A picture and the pieces of ridge in it."""

    _fields_ = (
        *((name, c_void_p) for name in ("excess", "blurred", "begin", "end", "axis", "length")),
        *((name, c_double) for name in ("contact_x", "contact_y", "noise")),
        *((name, c_int32) for name in ("height", "width", "pieces")),
    )


class CandidateRules(ctypes.Structure):
    """What makes a point a candidate for a burst."""

    _fields_ = (
        *((name, c_double) for name in ("gap_px", "inner_px", "gap_lengths", "least_sin", "cell_px", "near")),
        *((name, c_double) for name in ("least_votes", "blob_noise", "blob_fall", "light_noise", "light_apart_px")),
        ("blob_step", c_void_p),
        *((name, c_int32) for name in ("blob_steps", "blob_margin")),
    )


class Places(ctypes.Structure):
    """Where the picture about a point is read."""

    _fields_ = (("along", c_void_p), ("aside", c_void_p), ("farthest", c_float), ("number", c_int32))


class LookRules(ctypes.Structure):
    """How candidates are sifted, and what the net is to see of them."""

    _fields_ = (
        *((name, Places) for name in ("now", "before", "sift")),
        *((name, c_void_p) for name in ("sift_weights", "sift_bias", "sifted_weights", "shared")),
        *((name, c_double) for name in ("contact_px", "crowd_px", "apart_px")),
        *((name, c_float) for name in ("sifted_bias", "sift_least", "level_noise")),
        *((name, c_int32) for name in ("sift_units", "directions", "rings", "rings_before", "reach", "step")),
        ("context", c_int32),
    )


class Net(ctypes.Structure):
    """Biases and sizes of the net, and its last layer."""

    _fields_ = (
        *((name, c_void_p) for name in ("first_bias", "second_bias", "hidden_bias", "output", "output_bias")),
        *((name, c_void_p) for name in ("share", "share_bias")),
        *((name, c_int32) for name in ("first_units", "second_units", "hidden_units", "outputs", "context")),
        *((name, c_int32) for name in ("places", "reach", "step")),
    )


class ChoiceRules(ctypes.Structure):
    """Which candidates are bursts."""

    _fields_ = (
        *((name, c_double) for name in ("shift", "least_sure", "farthest_px", "unmoved_least", "unmoved_most")),
        *((name, c_double) for name in ("merge_px", "ends_px")),
        ("least_ends", c_int32),
    )


class Told(ctypes.Structure):
    """Sums over the candidates of a picture: how likely they are bursts, and how likely before a look."""

    _fields_ = (("found", c_double), ("expected", c_double))


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


class NewsRules(ctypes.Structure):
    """Which bursts are news, and how long others are remembered."""

    _fields_ = (
        *((name, c_double) for name in ("same_px", "fresh_least", "fresh_near", "late_sure")),
        *((name, c_double) for name in ("drift_share", "drift_s", "period_s", "exposure_s")),
        ("pictures", c_int32),
    )


class OriginRules(ctypes.Structure):
    """From which lines their origin is told."""

    _fields_ = (
        *((name, c_double) for name in ("contact_x", "contact_y", "axis_x", "axis_y")),
        *((name, c_double) for name in ("least_cosine", "mad_to_sigma", "median_error")),
        *((name, c_int32) for name in ("nearest_lines", "least_lines")),
    )


class ListRules(ctypes.Structure):
    """What is listed of a picture, and its flags."""

    _fields_ = (
        *((name, c_double) for name in ("least_snr", "least_length_px", "rate_sure", "cut_px", "edge_px")),
        *((name, c_int32) for name in ("width", "height")),
        *((name, c_uint8) for name in ("cut_begin", "cut_end", "late", "edge")),
    )


class Listed(ctypes.Structure):
    """Where room for the list is, and what else is told of the picture."""

    _fields_ = (
        *((name, c_void_p) for name in ("streaks", "snr", "bursts", "streak_flags", "burst_flags", "arms")),
        *((name, c_double) for name in ("track_px", "middle_snr", "origin_offset_px", "origin_error_px")),
        *((name, c_int32) for name in ("streak_count", "burst_count", "rate_bursts", "remembered")),
    )


class WidthRules(ctypes.Structure):
    """At which points across lines their width is read."""

    _fields_ = (
        *((name, c_double) for name in ("least_length_px", "profile_px", "step_px", "least_top")),
        ("parts", c_void_p),
        *((name, c_int32) for name in ("part_count", "samples", "most_lines")),
    )


class RidgeRules(ctypes.Structure):
    """What makes a ridge point, and the blur's taps."""

    _fields_ = (
        *((name, c_float) for name in ("threshold", "crest_px", "least_bend")),
        *((name, c_int32) for name in ("margin", "inner", "outer")),
    )
