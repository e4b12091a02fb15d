"""What goes out next, and what is proven delivered: the outbox's side of one connection. No socket in here."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

from edgewatch.wire.kinds import KINDS
from edgewatch.wire.outgoing import Outgoing

AHEAD = 200
"""Messages read ahead from the outbox (about 200 kB): a read costs about 1 ms."""
IN_FLIGHT = 20
"""QoS 1 messages of the outbox on the way at once: the default limit of common brokers."""
LOOSE = 200
"""QoS 0 messages on the way at once; a barrier follows when half of them are out."""
BARRIER_S = 0.5
"""QoS 0 messages wait at most this long for proof before a barrier is sent for them."""
FLUSH_COUNT = 100
FLUSH_S = 0.5
"""Delivered messages leave the outbox in groups, so that a week's backlog costs few transactions."""


class Outbox(Protocol):
    """The part of the journal that the sender uses."""

    def pending(self, limit: int, *, after: int = 0) -> list[Outgoing]:
        """Messages in the order of ``seq``."""

    def delivered(self, seqs: Sequence[int]) -> None:
        """Take messages out."""

    def latest(self, kind: str) -> tuple[int, bytes] | None:
        """Newest record of a state kind."""

    def newest(self) -> int:
        """The highest ``seq`` recorded, 0 when there is none."""


@dataclass(frozen=True, slots=True)
class _Sent:
    place: int
    seq: int | None
    at_s: float


class Sender:
    """Order and proof of delivery over one connection after another. Times are handed in (monotonic, s).

    QoS 1: delivered when acknowledged. QoS 0: bytes stay in order on one connection and a broker works them off in
    that order, so a window is proven delivered when anything sent after it was answered: a later PUBACK, or the
    answer to a *barrier* (a request that changes nothing). What is not proven when a connection ends is sent again.

    *Late* windows, those that could not be sent when they were recorded, go at QoS 1: after an outage a subscriber may
    come back later than the station, and a broker keeps nothing at QoS 0 for who is away.
    """

    def __init__(self, outbox: Outbox, *, in_flight: int = IN_FLIGHT) -> None:
        self._outbox = outbox
        self._limit = in_flight
        self._done: list[int] = []
        self._done_since_s = 0.0
        self._dirty = True
        self.begin()

    def begin(self, in_flight: int | None = None, *, late: int = 0) -> None:
        """Start over on a new connection, from the oldest message that is not proven delivered; those up to the
        number ``late`` are late.
        """
        self._limit = in_flight or self._limit
        self._late = late
        self._ahead: deque[Outgoing] = deque()
        self._after = 0
        self._place = 0
        self._tight: dict[int, _Sent] = {}
        self._loose: deque[_Sent] = deque()
        self._outbox_in_flight = 0
        self._dirty = True

    def wake(self) -> None:
        """Look into the outbox again: something was recorded."""
        self._dirty = True

    @property
    def idle(self) -> bool:
        """Nothing waits, nothing is on its way, nothing proven is still to be taken out."""
        return not (self._ahead or self._dirty or self._tight or self._loose or self._done)

    @property
    def unanswered(self) -> frozenset[int]:
        """Packet identifiers on their way."""
        return frozenset(self._tight)

    @property
    def oldest_unanswered_s(self) -> float | None:
        """When the oldest unanswered message was sent."""
        return min((sent.at_s for sent in self._tight.values()), default=None)

    def next(self) -> Outgoing | None:
        """Return the next message to send, ``None`` when there is none or enough is on its way. Raises DeviceError."""
        if not self._ahead and self._dirty:
            if self._after == 0:
                self._flush()  # or what is proven would be read, and sent, again
            self._dirty = False  # before reading: what is recorded meanwhile sets it again
            try:
                self._ahead.extend(self._outbox.pending(AHEAD, after=self._after))
            except BaseException:
                self._dirty = True
                raise
            if len(self._ahead) == AHEAD:
                self._dirty = True
            if self._ahead:
                self._after = self._ahead[-1].seq
        if not self._ahead:
            return None
        item = self._ahead[0]
        full = len(self._loose) >= LOOSE if self.qos(item) == 0 else self._outbox_in_flight >= self._limit
        return None if full else item

    def qos(self, item: Outgoing) -> int:
        """Quality of service at which ``item`` goes out on this connection."""
        return 1 if item.seq <= self._late else KINDS[item.kind].qos

    def sent(self, item: Outgoing, mid: int, now_s: float) -> None:
        """``item``, the one that ``next`` returned, went out with packet identifier ``mid``."""
        self._ahead.popleft()
        self._place += 1
        if self.qos(item) == 0:
            self._loose.append(_Sent(self._place, item.seq, now_s))
        else:
            self._tight[mid] = _Sent(self._place, item.seq, now_s)
            self._outbox_in_flight += 1

    def sent_other(self, mid: int, now_s: float) -> None:
        """Something that will be answered and is not of the outbox went out: a live message, a barrier."""
        self._place += 1
        self._tight[mid] = _Sent(self._place, None, now_s)

    def answered(self, mid: int, now_s: float) -> bool:
        """The broker answered ``mid``: it and every QoS 0 message before it are delivered. False: unknown ``mid``."""
        sent = self._tight.pop(mid, None)
        if sent is None:
            return False
        if not self._done:
            self._done_since_s = now_s
        if sent.seq is not None:
            self._done.append(sent.seq)
            self._outbox_in_flight -= 1
        while self._loose and self._loose[0].place < sent.place:
            seq = self._loose.popleft().seq
            if seq is not None:
                self._done.append(seq)
        return True

    def barrier_due(self, now_s: float) -> bool:
        """Whether QoS 0 messages wait for a proof that nothing on its way will bring."""
        if not self._loose or any(sent.place > self._loose[-1].place for sent in self._tight.values()):
            return False
        return len(self._loose) >= LOOSE // 2 or now_s - self._loose[0].at_s >= BARRIER_S

    def flush(self, now_s: float, *, all_of_it: bool = False) -> None:
        """Take what is proven out of the outbox, in groups unless ``all_of_it``. Raises ``DeviceError``: try later."""
        if all_of_it or len(self._done) >= FLUSH_COUNT or now_s - self._done_since_s >= FLUSH_S:
            self._flush()

    def _flush(self) -> None:
        if self._done:
            self._outbox.delivered(self._done)
            self._done = []
