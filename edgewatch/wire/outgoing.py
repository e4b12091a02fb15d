"""A recorded message on its way: what the outbox hands to the sender. Both sides know it and not each other."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Outgoing:
    """One message waiting in the outbox; ``payload`` is what goes on the wire."""

    seq: int
    kind: str
    payload: bytes
    reply_topic: str = ""
    correlation: bytes = b""
