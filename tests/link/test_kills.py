"""SIGKILL at random moments: the short form of ``tests/bench/bench_faults.py``."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.link.kills import SITUATIONS, campaign


@pytest.mark.slow
def test_killing_the_process_loses_nothing_and_sends_no_gap(tmp_path: Path):
    """Broker up, down, going and coming: journal and subscriber agree number by number, byte by byte."""
    outcome = campaign(tmp_path, kills=8, seed=11)
    assert outcome.clean, outcome
    assert set(outcome.kills) == set(SITUATIONS)
    assert outcome.recorded > 200
