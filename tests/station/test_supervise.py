"""A part that dies is started again; the waits grow and stay bounded."""

import random
import threading

from edgewatch.station.supervise import BackOff, Part


def test_a_dying_part_is_started_again_and_said() -> None:
    """Two faults, then it runs; each fault is told with its name."""
    runs: list[int] = []
    faults: list[str] = []
    steady = threading.Event()

    def work(stop: threading.Event) -> None:
        runs.append(1)
        if len(runs) < 3:
            raise RuntimeError(f"fault {len(runs)}")
        steady.set()
        stop.wait()

    part = Part(
        "reader",
        work,
        on_fault=lambda name, error: faults.append(f"{name}: {error}"),
        back_off=BackOff(first_s=0.001, longest_s=0.001),
    )
    part.start()
    assert steady.wait(5.0)
    assert part.alive
    assert part.stop(5.0)
    assert faults == ["reader: fault 1", "reader: fault 2"]


def test_a_part_that_returns_has_ended() -> None:
    """A clip that is over is no fault."""
    faults: list[str] = []
    part = Part("clip", lambda stop: None, on_fault=lambda name, error: faults.append(name))
    part.start()
    assert part.stop(5.0)
    assert not faults


def test_waits_double_within_jitter_and_stay_bounded() -> None:
    """Each wait lies between half and whole of 0.5, 1, 2 … 60 s; a reset begins anew."""
    back_off = BackOff(rng=random.Random(5))
    for whole in (0.5, 1, 2, 4, 8, 16, 32, 60, 60, 60):
        assert whole / 2 <= back_off.wait_s() <= whole
    back_off.reset()
    assert back_off.wait_s() <= 0.5
