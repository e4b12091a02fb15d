"""Wald's sequential test of two Poisson rates: boundaries, expected track, and the bound that no test beats."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Boundaries:
    """Accept the null when events <= slope * track - accept, reject it when events >= slope * track + reject."""

    slope_per_m: float
    accept: float
    reject: float


def _check(null_per_m: float, other_per_m: float, false_alarm: float, miss: float) -> None:
    if not (null_per_m > 0.0 and other_per_m > 0.0 and null_per_m != other_per_m):
        raise ValueError(f"rates {null_per_m!r} and {other_per_m!r}: two different positive rates are needed")
    if not (0.0 < false_alarm < 1.0 and 0.0 < miss < 1.0 - false_alarm):
        raise ValueError(f"false_alarm = {false_alarm!r}, miss = {miss!r}: risks that add up to less than 1 are needed")


def boundaries(null_per_m: float, other_per_m: float, *, false_alarm: float, miss: float) -> Boundaries:
    """Wald's lines for ``null_per_m`` against a higher ``other_per_m`` (Sequential Analysis, 1947)."""
    _check(null_per_m, other_per_m, false_alarm, miss)
    gain = math.log(other_per_m / null_per_m)
    return Boundaries(
        slope_per_m=(other_per_m - null_per_m) / gain,
        accept=math.log((1.0 - false_alarm) / miss) / gain,
        reject=math.log((1.0 - miss) / false_alarm) / gain,
    )


def information_per_m(rate_per_m: float, against_per_m: float) -> float:
    """Kullback-Leibler information of a metre of track at ``rate_per_m`` against ``against_per_m`` (nats)."""
    return rate_per_m * math.log(rate_per_m / against_per_m) - rate_per_m + against_per_m


def least_mean_track_m(null_per_m: float, other_per_m: float, *, false_alarm: float, miss: float) -> float:
    """Least mean track, under ``other_per_m``, of any test with these two risks (Wald's lower bound; m).

    [(1 - b) ln((1 - b) / a) + b ln(b / (1 - a))] / information per metre, a = false alarm, b = miss.
    """
    _check(null_per_m, other_per_m, false_alarm, miss)
    nats = (1.0 - miss) * math.log((1.0 - miss) / false_alarm) + miss * math.log(miss / (1.0 - false_alarm))
    return nats / information_per_m(other_per_m, null_per_m)
