"""The process stop: whether the line should run, and why. One table of transitions.

It is a process stop, never a safety function.
"""

from __future__ import annotations

import enum
from types import MappingProxyType


class StopState(str, enum.Enum):
    """``HELD`` ends by itself when the next contact begins, ``BLIND`` when the station sees again, ``LATCHED`` by
    release only.
    """

    RUN = "run"
    HELD = "held"
    BLIND = "blind"
    LATCHED = "latched"


class StopEvent(str, enum.Enum):
    """What moves it. The ``_LATCHING`` ones happen where the configuration latches."""

    CONDEMN = "condemn"
    CONDEMN_LATCHING = "condemn_latching"
    BLIND = "blind"
    BLIND_LATCHING = "blind_latching"
    SEE = "see"
    CONTACT = "contact"
    RELEASE = "release"


TRANSITIONS = MappingProxyType(
    {
        (StopState.RUN, StopEvent.CONDEMN): StopState.HELD,
        (StopState.RUN, StopEvent.CONDEMN_LATCHING): StopState.LATCHED,
        (StopState.RUN, StopEvent.BLIND): StopState.BLIND,
        (StopState.RUN, StopEvent.BLIND_LATCHING): StopState.LATCHED,
        (StopState.HELD, StopEvent.CONDEMN_LATCHING): StopState.LATCHED,
        (StopState.HELD, StopEvent.BLIND): StopState.BLIND,
        (StopState.HELD, StopEvent.BLIND_LATCHING): StopState.LATCHED,
        (StopState.HELD, StopEvent.CONTACT): StopState.RUN,
        (StopState.HELD, StopEvent.RELEASE): StopState.RUN,
        (StopState.BLIND, StopEvent.CONDEMN): StopState.HELD,
        (StopState.BLIND, StopEvent.CONDEMN_LATCHING): StopState.LATCHED,
        (StopState.BLIND, StopEvent.SEE): StopState.RUN,
        (StopState.BLIND, StopEvent.RELEASE): StopState.RUN,
        (StopState.LATCHED, StopEvent.RELEASE): StopState.RUN,
    }
)
"""An event that is not listed changes nothing."""


def after(state: StopState, event: StopEvent) -> StopState:
    """The state after ``event``."""
    return TRANSITIONS.get((state, event), state)
