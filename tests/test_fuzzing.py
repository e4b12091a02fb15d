"""Every fuzz target, briefly; ``tests/bench/bench_fuzz.py`` is the long form."""

from __future__ import annotations

import pytest

from tests.fuzzing import Target, fuzz, targets

TARGETS = targets()


@pytest.mark.parametrize("name", TARGETS)
def test_altered_input_raises_nothing_undocumented(name: str):
    """A thousand inputs a fast target, fewer for those that write files; seeded."""
    target = TARGETS[name]
    found = fuzz(target, max(30, int(1000 * target.share)), seed=7)
    assert found.broke == []
    assert found.inputs >= 30


def test_the_fuzzer_finds_what_breaks_a_target():
    """A reader that trips over one byte after another is broken, and guided there by the lines it reaches."""

    def brittle(data: bytes) -> None:
        if data[:2] == b"\xff\xff":
            raise IndexError("beyond the end")

    assert fuzz(Target(run=brittle, seeds=(b"abcd",)), 20_000, seed=1).broke
