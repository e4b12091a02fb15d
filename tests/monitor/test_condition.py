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


def test_withholding_is_not_blindness() -> None:
    """Without a synchronised clock the station sees, and no bar conforms."""
    complaints = Complaints()
    complaints.raise_("clock_not_synced")
    assert (complaints.blinding, complaints.withholding) == ((), ("clock_not_synced",))
    assert complaints.condition == "out_of_specification"
    complaints.raise_("stalled")
    assert (complaints.blinding, complaints.withholding) == (("stalled",), ("stalled", "clock_not_synced"))


def test_a_tolerated_cause_is_named_and_no_more() -> None:
    """It makes maintenance required, and does not go before a worse one."""
    complaints = Complaints(tolerated=("clock_not_synced",))
    complaints.raise_("clock_not_synced")
    assert (complaints.causes, complaints.withholding) == (("clock_not_synced",), ())
    assert complaints.condition == complaints.word("clock_not_synced") == "maintenance_required"
    complaints.raise_("saturated")
    assert complaints.causes == ("saturated", "clock_not_synced")
    assert complaints.condition == "out_of_specification"


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
        assert cause.condition or not (cause.blinds or cause.withholds), name
        assert not (cause.blinds and cause.withholds), name
        assert len(cause.sentence) > 10, name
