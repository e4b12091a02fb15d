"""Every cause that a bar or the station can be given: the only registry.

A cause of the station makes its condition one of the five words of NAMUR NE 107; one that blinds keeps every bar from
being called conforming while it lasts, and evidence taken meanwhile is not used. One that withholds does the first
without the second: the station sees, so a foreign bar is condemned all the same. A cause of a bar alone has no
condition.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType

GOOD = "good"
MAINTENANCE = "maintenance_required"
OUT_OF_SPECIFICATION = "out_of_specification"
FUNCTION_CHECK = "function_check"
FAILURE = "failure"
CONDITIONS = (GOOD, MAINTENANCE, OUT_OF_SPECIFICATION, FUNCTION_CHECK, FAILURE)
"""From best to worst. Manuals of field devices differ in the middle of that order; ours puts a deliberate check before
doubtful figures, because while somebody works on the station its figures mean nothing at all."""


@dataclass(frozen=True, slots=True)
class Cause:
    """What it means in one sentence, the condition it makes of the station (empty: none), whether it blinds,
    whether it is an alert where a failure, blindness or withholding is one anyway, whether it withholds `conforming`
    though the station sees."""

    sentence: str
    condition: str = ""
    blinds: bool = False
    alerts: bool = False
    withholds: bool = False


CAUSES = MappingProxyType(
    {
        # of a bar: nothing to judge by
        "no_expected": Cause("No grade is expected, so nothing is judged."),
        "no_band": Cause("No band is taught for the expected grade.", OUT_OF_SPECIFICATION),
        "band_misfit_scale": Cause("The band was taught at another scale (mm per px).", OUT_OF_SPECIFICATION),
        "band_misfit_exposure": Cause("The band was taught at another exposure.", OUT_OF_SPECIFICATION),
        "band_misfit_rate": Cause("The band was taught at another frame rate.", OUT_OF_SPECIFICATION),
        "too_few_streaks": Cause("The contact shows too few streaks to be judged."),
        "evidence_short": Cause("The contact is too short or too weak to tell a foreign bar from a good one."),
        "resembles_other": Cause("The bar cannot be told from another taught grade."),
        "reach_truncated": Cause("The frame edge cuts the stream off, and the band holds a reach."),
        "figures_refused": Cause("Figures of the bar were not finite or were negative, and were left out."),
        # the pictures: what cannot be seen
        "no_light": Cause("No light reaches the camera: lens cap, dead sensor, no noise.", FAILURE, True),
        "saturated": Cause("Large parts of the picture are at full scale.", OUT_OF_SPECIFICATION, True),
        "out_of_focus": Cause("Streaks are much wider than they should be: out of focus.", OUT_OF_SPECIFICATION, True),
        "soiled": Cause("Streaks are much dimmer or wider than in teaching.", OUT_OF_SPECIFICATION, True),
        "vibration": Cause("The camera shakes: streaks start elsewhere in every picture.", OUT_OF_SPECIFICATION, True),
        "crowded": Cause("Streaks overlap so much that counts are not trusted.", OUT_OF_SPECIFICATION, True),
        "stray_light": Cause("The background is too bright or too uneven.", OUT_OF_SPECIFICATION, True),
        # the source: what does not come
        "stalled": Cause("The camera has stopped delivering pictures.", FAILURE, True),
        "camera_lost": Cause("The camera or stream is gone and is being opened anew.", FAILURE, True),
        "frozen": Cause("The camera delivers the same picture again and again.", FAILURE, True),
        "dropping": Cause("Too many pictures were not looked at.", OUT_OF_SPECIFICATION, True),
        "wrong_size": Cause("The pictures do not have the configured size.", FAILURE, True),
        "wrong_rate": Cause("The frame rate is not the configured one.", OUT_OF_SPECIFICATION, True),
        "wrong_exposure": Cause("The camera does not use the configured exposure.", OUT_OF_SPECIFICATION, True),
        "no_contact": Cause("The line reports a bar at the wheel and no sparks are seen.", OUT_OF_SPECIFICATION, True),
        # the figures over many bars
        "wheel_speed": Cause("Spark speed does not fit the wheel's: optics, exposure or wheel.", OUT_OF_SPECIFICATION),
        "drift_rate": Cause("Burst-rate of conforming bars has shifted slowly.", MAINTENANCE),
        "drift_reach": Cause("Reach of conforming bars has shifted slowly: wheel wear, soiled optics.", MAINTENANCE),
        "teaching": Cause("Reference bars are being taken; they are not judged.", FUNCTION_CHECK),
        "band_unreadable": Cause("A band file cannot be used.", MAINTENANCE),
        # the ports
        "broker_lost": Cause("The broker is away; messages wait in the journal.", MAINTENANCE),
        "broker_refuses": Cause("The broker refuses this station: user, password or rights.", MAINTENANCE),
        "broker_untrusted": Cause("The broker's certificate is not trusted or has expired.", MAINTENANCE),
        "relay_lost": Cause("The relay does not answer, or is not in the wanted state.", FAILURE),
        "journal_lost": Cause("The journal cannot be written; records wait in memory.", FAILURE),
        "records_shed": Cause("The journal was away too long; records were given up, and counted.", FAILURE),
        "records_refused": Cause("Records that cannot be written were left out and counted.", MAINTENANCE, alerts=True),
        "journal_damaged": Cause("A damaged journal was set aside whole; a new one began.", MAINTENANCE, alerts=True),
        "records_aside": Cause(
            "Undelivered records lie in damaged journals and could not be taken over yet.", MAINTENANCE, alerts=True
        ),
        "outbox_filling": Cause("Unsent messages have nearly filled journal or disk.", MAINTENANCE, alerts=True),
        "windows_thinned": Cause("Unsent window messages were thinned to save space.", MAINTENANCE),
        "evidence_lost": Cause("Evidence pictures cannot be kept.", MAINTENANCE),
        "clock_not_synced": Cause(
            "The clock is not synchronised; times may be wrong.", OUT_OF_SPECIFICATION, withholds=True
        ),
        "part_restarted": Cause("A part of the station failed and was started again.", MAINTENANCE),
    }
)

BLIND = frozenset(name for name, cause in CAUSES.items() if cause.blinds)
"""Causes under which the station cannot see: evidence taken meanwhile is not used."""


def sentence(cause: str) -> str:
    """The sentence for ``cause``; a name that is not registered is a bug (``ValueError``)."""
    try:
        return CAUSES[cause].sentence
    except KeyError:
        raise ValueError(f"{cause!r}: no such cause") from None
