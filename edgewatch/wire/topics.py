"""Topics of one station: ``{root}/{site}/{line}/{station}/…``, and the way back from a topic to a message kind."""

from __future__ import annotations

from dataclasses import dataclass

from edgewatch.settings import StationSettings
from edgewatch.wire.kinds import KINDS

MAX_TOPIC_BYTES = 65535
"""MQTT 5 and 3.1.1, section 4.7.3: a topic is a UTF-8 string with a length of two bytes."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Topics:
    """The topics of one station. ``base``: ``{root}/{site}/{line}/{station}``."""

    base: str

    def __post_init__(self) -> None:
        levels = self.base.split("/")
        if len(levels) != 4 or not all(levels) or any(mark in self.base for mark in "+#\0"):
            raise ValueError(f"base = {self.base!r}: four topic levels without wildcards are needed")

    @classmethod
    def of(cls, station: StationSettings) -> Topics:
        """Topics of the station named in the settings."""
        return cls(base=f"{station.root}/{station.site}/{station.line}/{station.name}")

    def topic(self, kind: str) -> str:
        """Return the topic that a message of ``kind`` (a key of ``KINDS``) goes to. Raises ``ValueError``."""
        if kind not in KINDS:
            raise ValueError(f"kind = {kind!r}: known are {', '.join(KINDS)}")
        return f"{self.base}/{KINDS[kind].leaf}"

    def order(self, name: str) -> str:
        """Return the topic that takes the order ``name``."""
        return f"{self.base}/order/{name}"

    @property
    def orders(self) -> str:
        """Filter that matches every order to this station, known or not."""
        return f"{self.base}/order/#"

    def order_name(self, topic: str) -> str | None:
        """Return the name of the order that ``topic`` carries; ``None`` when it is no order to this station."""
        head = f"{self.base}/order/"
        return topic[len(head) :] if topic.startswith(head) else None

    def may_answer_on(self, topic: str) -> bool:
        """Whether a reply may be published on ``topic``, which whoever sent the order has named.

        Refused: wildcards, NUL, the broker's own ``$`` topics, anything of ours except ``reply`` and what lies below
        it, and every station's ``order`` topics (an order must not make one station give orders to another).
        """
        if not topic or topic[0] == "$" or any(mark in topic for mark in "+#\0"):
            return False
        if len(topic.encode("utf-8", "surrogatepass")) > MAX_TOPIC_BYTES or "/order/" in f"{topic}/":
            return False
        ours = topic == self.base or topic.startswith(f"{self.base}/")
        return not ours or topic == f"{self.base}/reply" or topic.startswith(f"{self.base}/reply/")
