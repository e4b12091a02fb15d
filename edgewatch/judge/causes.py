"""Why a bar was not judged, or why the station asks for attention: name -> one sentence. The only registry."""

from __future__ import annotations

CAUSES: dict[str, str] = {
    # of a bar: nothing to judge by
    "no_expected": "No grade is expected, so nothing is judged.",
    "no_band": "No band is taught for the expected grade.",
    "band_misfit_scale": "The band was taught at another scale (mm per px).",
    "band_misfit_exposure": "The band was taught at another exposure.",
    "band_misfit_rate": "The band was taught at another frame rate.",
    "too_few_streaks": "The contact shows too few streaks to be judged.",
    "evidence_short": "The contact is too short or too weak to tell a foreign bar from a good one.",
    "resembles_other": "The bar cannot be told from another taught grade.",
    "reach_truncated": "The frame edge cuts the stream off, and the band holds a reach.",
    "figures_refused": "Figures of the bar were not finite or were negative, and were left out.",
    # of a bar and of the station: it cannot see
    "no_light": "No light reaches the camera: lens cap, dead sensor, or a picture without noise.",
    "saturated": "Large parts of the picture are at full scale.",
    "out_of_focus": "Streaks are much wider than they should be: focus or soiled optics.",
    "crowded": "Streaks overlap so much that counts are not trusted.",
    "stray_light": "The background is too bright or too uneven.",
    "stalled": "The camera has stopped delivering pictures.",
    "dropping": "Too many pictures were not looked at.",
    # of the station: drift
    "drift_rate": "Burst-rate of conforming bars has shifted slowly.",
    "drift_reach": "Reach of conforming bars has shifted slowly: wheel wear, soiled optics or another wheel.",
}
"""Every cause that a bar or the station can be given."""

BLIND = frozenset({"no_light", "saturated", "out_of_focus", "crowded", "stray_light", "stalled", "dropping"})
"""Causes under which the station cannot see: evidence taken meanwhile is not used."""


def sentence(cause: str) -> str:
    """The sentence for ``cause``; a name that is not registered is a bug (``ValueError``)."""
    try:
        return CAUSES[cause]
    except KeyError:
        raise ValueError(f"{cause!r}: no such cause") from None
