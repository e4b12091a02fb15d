"""Every fault once, in a whole station: it is named, the rest goes on, all comes back, and no bar is lost."""

from __future__ import annotations

import itertools
import threading
from collections.abc import Iterator
from typing import Any

import pytest

from edgewatch.record.journal import Journal
from tests.station.faults import FAULTS, Rig

pytestmark = pytest.mark.slow

SAID = {
    "journal's thread dies": {"part_restarted"},
    "pictures' thread dies": {"part_restarted"},
    "relay's thread dies": {"part_restarted"},
    "session's thread dies": {"part_restarted", "broker_lost"},
    "seeing fails": {"part_restarted"},
    "camera's reader dies": {"camera_lost"},
    "camera unplugged": {"camera_lost"},
    "broker killed": {"broker_lost"},
    "broker restarted": {"broker_lost"},
    "broker refuses password": {"broker_refuses"},
    "certificate expired": {"broker_untrusted"},
    "relay port gone": {"relay_lost"},
    "disk full": {"journal_lost"},
    "journal locked": {"journal_lost"},
    "clock a day ahead": set(),
    "clock two days back": set(),
    "record refused": {"part_restarted", "records_refused"},
    "journal damaged": {"journal_damaged"},
}
"""What must be said of each, at least."""
BLIND = {"camera's reader dies", "camera unplugged"}
"""Faults during which nothing can be judged."""
NO_RELAY = {*BLIND, "relay's thread dies", "relay port gone"}


@pytest.fixture(scope="module")
def rig(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Rig]:
    """One station for all faults, as in the field; nothing may be lost in the end."""
    made = Rig(tmp_path_factory.mktemp("rig"))
    yield made
    made.close()
    assert made.missing() == []
    assert made.received().most_common(1)[0][1] == 1  # no bar under two numbers
    bars = [line["bar"] for line in made.told]
    assert bars == list(range(1, len(bars) + 1))
    raised = {one["bar"] for one in made.on("alert") if one["alert"].startswith("nonconforming_bar")}
    assert raised == {line["bar"] for line in made.told if line["verdict"] == "nonconforming"}
    seqs = sorted(set(made.reader.seqs()))
    gaps = [(one, two) for one, two in itertools.pairwise(seqs) if two != one + 1]
    assert len(gaps) <= 1  # where the damaged journal was replaced, numbers jump ahead


def test_a_journal_that_hangs_holds_up_no_frame(rig: Rig, monkeypatch: pytest.MonkeyPatch) -> None:
    """A card that does not answer: judging and relay go on."""
    answers = threading.Event()

    def hanging(method: Any) -> Any:
        def waits(*words: Any, **named: Any) -> Any:
            answers.wait()
            return method(*words, **named)

        return waits

    for name in ("append", "status"):
        monkeypatch.setattr(Journal, name, hanging(getattr(Journal, name)))
    try:
        switches = rig.switches
        rig.await_bars(4)
        rig.await_(lambda: rig.switches >= switches + 4, "the relay to follow")
    finally:
        answers.set()
    rig.await_(lambda: not rig.missing(), "the bars to arrive")


def test_every_fault_has_its_expectation() -> None:
    """The list of faults and what is expected of them do not drift apart."""
    assert set(SAID) == set(FAULTS)


@pytest.mark.parametrize("name", FAULTS)
def test_fault(rig: Rig, name: str) -> None:
    """Named, the rest goes on, all comes back."""
    row = rig.put_in(name)
    assert row.recovered, rig.troubles
    assert set(row.said) >= SAID[name]
    assert row.missing == 0
    if name not in BLIND:
        assert row.bars >= 1
    if name not in NO_RELAY:
        assert row.switches >= 1
