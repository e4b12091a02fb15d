"""Causes make the condition; the worst word counts."""

import pytest

from edgewatch.judge.causes import CAUSES, CONDITIONS
from edgewatch.monitor.condition import Complaints


def test_no_cause_is_good() -> None:
    """Nothing to complain about."""
    assert Complaints().condition == "good"
    assert Complaints().causes == ()


def test_worst_word_counts_and_comes_first() -> None:
    """Failure before function check before out of specification before maintenance."""
    complaints = Complaints()
    for cause, word in (
        ("drift_reach", "maintenance_required"),
        ("saturated", "out_of_specification"),
        ("teaching", "function_check"),
        ("stalled", "failure"),
    ):
        assert complaints.raise_(cause)
        assert complaints.condition == word
        assert complaints.causes[0] == cause
    assert complaints.blinding == ("stalled", "saturated")


def test_repeats_change_nothing() -> None:
    """Raising or clearing twice is no news."""
    complaints = Complaints()
    assert complaints.set("stalled", True, "silent for 3 s")
    assert not complaints.set("stalled", True, "silent for 4 s")
    assert complaints.detail("stalled") == "silent for 3 s"
    assert complaints.set("stalled", False)
    assert not complaints.set("stalled", False)


def test_unknown_cause_is_a_bug() -> None:
    """Causes are declared once; a misspelt one must not pass."""
    with pytest.raises(ValueError, match="'stalld' is not declared as the station's"):
        Complaints().raise_("stalld")
    with pytest.raises(ValueError, match="'evidence_short' is not declared"):
        Complaints().raise_("evidence_short")


def test_every_cause_has_a_word_and_a_sentence() -> None:
    """The table is complete."""
    for name, cause in CAUSES.items():
        assert cause.condition in ("", *CONDITIONS[1:]), name
        assert cause.condition or not cause.blinds, name
        assert len(cause.sentence) > 10, name
