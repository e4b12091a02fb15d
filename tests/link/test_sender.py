"""Order and proof of delivery, without a socket."""

from __future__ import annotations

import contextlib
from collections.abc import Sequence

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from edgewatch.errors import DeviceError
from edgewatch.link.sender import AHEAD, BARRIER_S, FLUSH_COUNT, FLUSH_S, IN_FLIGHT, LOOSE, Sender
from edgewatch.wire.outgoing import Outgoing


class Box:
    """An outbox in memory; ``broken`` makes it fail as a locked journal does."""

    def __init__(self, kinds: Sequence[str]) -> None:
        self.waiting = {seq: Outgoing(seq=seq, kind=kind, payload=b"{}") for seq, kind in enumerate(kinds, start=1)}
        self.broken = False
        self.calls = 0

    def pending(self, limit: int, *, after: int = 0) -> list[Outgoing]:
        """As the journal does."""
        self._check()
        return [self.waiting[seq] for seq in sorted(self.waiting) if seq > after][:limit]

    def delivered(self, seqs: Sequence[int]) -> None:
        """As the journal does."""
        self._check()
        self.calls += 1
        for seq in seqs:
            self.waiting.pop(seq, None)

    def latest(self, kind: str) -> tuple[int, bytes] | None:
        """Not used by the sender."""
        return None

    def newest(self) -> int:
        """As the journal does."""
        return max(self.waiting, default=0)

    def _check(self) -> None:
        if self.broken:
            raise DeviceError("locked")


def _send_all(sender: Sender, mid: int = 0, now_s: float = 0.0) -> list[tuple[int, Outgoing]]:
    """Send what may be sent; packet identifiers rise from ``mid``."""
    out = []
    while (item := sender.next()) is not None:
        mid += 1
        sender.sent(item, mid, now_s)
        out.append((mid, item))
    return out


def test_qos_1_goes_out_in_order_and_within_the_limit():
    """No more than the limit is on its way; each answer lets one more go."""
    box = Box(["bar"] * 30)
    sender = Sender(box)
    out = _send_all(sender)
    assert [item.seq for _, item in out] == list(range(1, IN_FLIGHT + 1))
    sender.answered(out[0][0], 0.0)
    assert [item.seq for _, item in _send_all(sender, 100)] == [IN_FLIGHT + 1]
    assert 1 in box.waiting  # proven, and taken out in a group
    sender.flush(0.1)
    assert 1 in box.waiting
    sender.flush(FLUSH_S)
    assert 1 not in box.waiting


def test_windows_are_proven_by_a_later_answer_only():
    """A PUBACK proves the windows sent before it, not those after."""
    box = Box(["window", "window", "bar", "window"])
    sender = Sender(box)
    out = _send_all(sender)
    sender.answered(out[2][0], 0.0)
    sender.flush(0.0, all_of_it=True)
    assert sorted(box.waiting) == [4]


def test_a_barrier_proves_windows_when_nothing_else_will():
    """It is due after a while, or when many wait; not while an answer is on its way that will do."""
    box = Box(["window"] * 3)
    sender = Sender(box)
    _send_all(sender, now_s=10.0)
    assert not sender.barrier_due(10.0)
    assert sender.barrier_due(10.0 + BARRIER_S)
    sender.sent_other(99, 10.5)
    assert not sender.barrier_due(20.0)
    assert sender.oldest_unanswered_s == 10.5
    sender.answered(99, 10.6)
    sender.flush(10.6, all_of_it=True)
    assert box.waiting == {}
    assert sender.idle or sender.next() is None
    assert sender.idle


def test_windows_on_their_way_are_bounded():
    """A fast backlog waits for its barriers."""
    sender = Sender(Box(["window"] * 1000))
    assert len(_send_all(sender)) == LOOSE
    assert sender.barrier_due(0.0)


def test_what_was_not_proven_goes_out_again_on_the_next_connection():
    """From the oldest on, in order, with the same numbers; what was proven does not."""
    box = Box(["window", "bar", "window", "bar"])
    sender = Sender(box)
    out = _send_all(sender)
    sender.answered(out[1][0], 0.0)
    sender.begin()
    assert [item.seq for _, item in _send_all(sender)] == [3, 4]
    assert sorted(box.waiting) == [3, 4]


def test_late_windows_go_at_qos_1():
    """Those that wait since before the connection are proven one by one; newer ones go as promised, at QoS 0."""
    box = Box(["window"] * 4)
    sender = Sender(box)
    sender.begin(late=2)
    out = _send_all(sender)
    assert [sender.qos(item) for _, item in out] == [1, 1, 0, 0]
    for mid, _ in out[:2]:
        sender.answered(mid, 0.0)
    sender.flush(0.0, all_of_it=True)
    assert sorted(box.waiting) == [3, 4]


def test_an_answer_from_nowhere_is_harmless():
    """Unknown packet identifiers prove nothing."""
    sender = Sender(Box(["bar"]))
    assert sender.answered(5, 0.0) is False


def test_a_broken_outbox_is_tried_again():
    """A locked journal raises and loses nothing: neither when reading nor when taking out."""
    box = Box(["bar", "bar"])
    sender = Sender(box)
    box.broken = True
    with pytest.raises(DeviceError):
        sender.next()
    box.broken = False
    out = _send_all(sender)
    sender.answered(out[0][0], 0.0)
    box.broken = True
    with pytest.raises(DeviceError):
        sender.flush(9.0)
    box.broken = False
    sender.flush(9.0)
    assert sorted(box.waiting) == [2]


def test_a_long_backlog_leaves_in_groups():
    """Few transactions for many messages."""
    box = Box(["bar"] * 1000)
    sender = Sender(box)
    mid = 0
    while not sender.idle:
        for number, _ in _send_all(sender, mid):
            mid = number
            sender.answered(number, 0.0)
        sender.flush(0.0, all_of_it=len(box.waiting) <= FLUSH_COUNT)
    assert box.waiting == {}
    assert box.calls <= 1000 / FLUSH_COUNT + AHEAD / FLUSH_COUNT + 2


@settings(max_examples=200, deadline=None)
@given(
    kinds=st.lists(st.sampled_from(["window", "window", "bar", "condition"]), max_size=60),
    plan=st.lists(
        st.tuples(st.sampled_from(["send", "answer", "lose", "flush", "barrier", "break"]), st.integers(0, 9))
    ),
)
def test_nothing_is_lost_and_first_arrivals_are_in_order(kinds: list[str], plan: list[tuple[str, int]]):
    """Any course of sending, answering and losing connections: the broker's first sight of each number is in order
    without a gap, and a number leaves the outbox only after the broker had it.
    """
    box = Box(kinds)
    sender = Sender(box, in_flight=3)
    wire: list[tuple[int, int | None]] = []  # sent on this connection and not yet taken by the broker
    arrived: list[int] = []
    taken: list[int] = []  # packet identifiers that the broker has taken and not answered yet
    mid = 0

    def broker_takes(count: int) -> None:
        for number, seq in wire[:count]:
            if seq is not None:
                arrived.append(seq)
            taken.append(number)
        del wire[:count]

    for step, amount in plan:
        if step == "send":
            for _ in range(amount):
                if (item := sender.next()) is None:
                    break
                mid += 1
                sender.sent(item, mid, float(mid))
                wire.append((mid, item.seq))
        elif step == "answer":
            broker_takes(amount)
            for number in taken:
                sender.answered(number, float(mid))
            taken.clear()
        elif step == "lose":
            broker_takes(amount)
            wire.clear()
            taken.clear()
            sender.begin(late=amount)
        elif step == "flush":
            sender.flush(float(mid), all_of_it=amount > 4)
        elif step == "barrier" and sender.barrier_due(float(mid) + 1):
            mid += 1
            sender.sent_other(mid, float(mid))
            wire.append((mid, None))
        elif step == "break":
            box.broken = True
            with contextlib.suppress(DeviceError):
                sender.flush(float(mid), all_of_it=True)
            box.broken = False
        assert set(range(1, len(kinds) + 1)) - set(box.waiting) <= set(arrived)
        firsts = list(dict.fromkeys(arrived))
        assert firsts == list(range(1, len(firsts) + 1))
