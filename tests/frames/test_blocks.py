"""Blocks from a pipe: cuts, time-outs, ends, and a reader that is let go (``test_pipe`` runs it under frames)."""

from __future__ import annotations

import os
import threading

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.frames.blocks import Blocks


@given(size=st.integers(1, 9), cuts=st.lists(st.integers(1, 7), max_size=12))
def test_any_cut_of_the_bytes_gives_the_same_blocks(size: int, cuts: list[int]) -> None:
    """Whole blocks in order, the bytes of the next counted, what is left over at the end said once."""
    reading, writing = os.pipe()
    blocks = Blocks(reading, size)
    content = bytes(range(sum(cuts)))
    seen, sent = b"", 0
    for cut in cuts:
        os.write(writing, content[sent : sent + cut])
        sent += cut
        while len(seen) + size <= sent:
            block = blocks.read(1.0)
            assert block is not None
            seen += block.tobytes()
        with pytest.raises(TimeoutError):
            blocks.read(0.0)
        assert blocks.filled == sent - len(seen)
    os.close(writing)
    if left := sent % size:
        with pytest.raises(EOFError, match=f"^{left} of {size} bytes$"):
            blocks.read(1.0)
    assert blocks.read(1.0) is None
    assert seen == content[: len(seen)]
    blocks.close()


def test_a_block_is_an_array_of_its_own() -> None:
    """What was handed on is not written over by the next."""
    reading, writing = os.pipe()
    blocks = Blocks(reading, 3)
    os.write(writing, b"abcdef")
    first, second = blocks.read(1.0), blocks.read(1.0)
    assert first is not None and second is not None
    assert (first.tobytes(), second.tobytes()) == (b"abc", b"def")
    assert not np.shares_memory(first, second)
    os.close(writing)
    blocks.close()


def test_wait_tells_of_bytes_and_of_the_end() -> None:
    """Nothing, something, and a writer that has gone."""
    reading, writing = os.pipe()
    blocks = Blocks(reading, 3)
    assert not blocks.wait(0.0)
    os.write(writing, b"a")
    assert blocks.wait(1.0)
    os.close(writing)
    assert blocks.wait(1.0)
    blocks.close()
    assert not blocks.wait(1.0)


def test_close_lets_a_waiting_reader_go() -> None:
    """The reader gets the end, the descriptor is closed, a second ``close`` does nothing."""
    reading, writing = os.pipe()
    blocks = Blocks(reading, 3)
    got: list[object] = []
    reader = threading.Thread(target=lambda: got.append(blocks.read(30.0)))
    reader.start()
    blocks.close()
    blocks.close()
    reader.join(10.0)
    assert got == [None] and blocks.closed
    with pytest.raises(BrokenPipeError):
        os.write(writing, b"x")
    os.close(writing)
