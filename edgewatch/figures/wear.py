"""The wheel wears, the sparks slow down, the stream gets shorter: reach at another wheel speed.

A grinding wheel is used from full to about two thirds of its diameter; at constant turns its surface, and with it the
launch of the sparks, slows as much. Reach follows with a power of the speed that the flight model gives: less than
one, because slower particles also lose less of their speed and stand brighter on the sensor.
"""

from __future__ import annotations

import math

REACH_EXPONENT = 0.58
"""Reach goes with this power of the wheel's surface speed. From simulated flights of the steels of the rehearsal (0.1
to 3 bursts per metre, particles of 40 to 50 micrometre, 18 to 45 m/s, half to twice the usual light): 0.54 to 0.63."""
REACH_EXPONENT_SPREAD = 0.05
"""Largest deviation found of a bar steel's own exponent from ``REACH_EXPONENT``: two percent of reach over a wheel's
whole life (a third of its diameter)."""
SPEED_RATIO_LOW, SPEED_RATIO_HIGH = 0.75, 1.03
"""Spark speed near the wheel over surface speed that is believed: sparks leave a little below the surface speed and
lose some percent until they are measured; a few percent above one are the error of speed, scale and exposure."""
LOW_M_S, HIGH_M_S = 1.0, 200.0
"""Surface speeds of grinding wheels, with room on both sides."""


def _check_speed(name: str, value: float) -> None:
    if not (math.isfinite(value) and LOW_M_S <= value <= HIGH_M_S):
        raise ValueError(f"{name} = {value!r}: allowed is {LOW_M_S:g} to {HIGH_M_S:g} m/s")


def reach_at_speed(reach_mm: float, from_speed_m_s: float, to_speed_m_s: float) -> float:
    """Reach (mm) that a stream seen at ``from_speed_m_s`` would have at ``to_speed_m_s``; NaN stays NaN.

    Both speeds of the wheel's surface, or both of the sparks near the wheel (they go together within two percent over
    a wheel's life). Error: about two percent over a third of the diameter (``REACH_EXPONENT_SPREAD``).
    Raises ``ValueError`` naming the parameter that is out of range.
    """
    _check_speed("from_speed_m_s", from_speed_m_s)
    _check_speed("to_speed_m_s", to_speed_m_s)
    if reach_mm < 0.0 or math.isinf(reach_mm):
        raise ValueError(f"reach_mm = {reach_mm!r}: allowed is a finite number from 0, or NaN")
    return float(reach_mm * (to_speed_m_s / from_speed_m_s) ** REACH_EXPONENT)


def reach_factor(
    *,
    taught_wheel_m_s: float = math.nan,
    taught_spark_m_s: float = math.nan,
    wheel_m_s: float = math.nan,
    spark_m_s: float = math.nan,
) -> float:
    """What reach must be multiplied by to hold at the taught wheel speed; 1 where speeds are not known (NaN or 0).

    The wheel's own speeds are preferred, as they carry no noise; else the sparks tell by how much it has slowed.
    Speeds out of range raise ``ValueError``.
    """
    for taught, now in ((taught_wheel_m_s, wheel_m_s), (taught_spark_m_s, spark_m_s)):
        if math.isfinite(taught) and math.isfinite(now) and taught > 0.0 and now > 0.0:
            return reach_at_speed(1.0, now, taught)
    return 1.0


def speed_ratio(spark_m_s: float, wheel_m_s: float) -> float:
    """Spark speed near the wheel over the wheel's surface speed; NaN where either is not known (NaN or 0)."""
    if not (math.isfinite(spark_m_s) and math.isfinite(wheel_m_s) and spark_m_s > 0.0 and wheel_m_s > 0.0):
        return math.nan
    return spark_m_s / wheel_m_s


def speed_fits(spark_m_s: float, wheel_m_s: float) -> bool:
    """Whether the measured spark speed fits the surface speed: otherwise scale, exposure or wheel speed is wrong.

    Holds where either is not known: nothing is said of what is not known.
    """
    ratio = speed_ratio(spark_m_s, wheel_m_s)
    return math.isnan(ratio) or SPEED_RATIO_LOW <= ratio <= SPEED_RATIO_HIGH
