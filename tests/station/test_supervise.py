"""A part that dies is started again."""

import threading

from edgewatch.backoff import Backoff
from edgewatch.station.supervise import Part


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
        backoff=Backoff(lambda: 0.5, first_s=0.001, most_s=0.001),
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
