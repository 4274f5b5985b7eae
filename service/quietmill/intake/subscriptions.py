"""The topics that the service asked for, and what the broker said to each."""

from collections.abc import Iterable, Sequence
from typing import Final

import structlog
from paho.mqtt.reasoncodes import ReasonCode

__all__ = ["Subscriptions"]

log = structlog.get_logger("quietmill.broker")

SHOWN: Final = 3


class Subscriptions:
    """What was asked and granted on the present connection."""

    def __init__(self, topics: Sequence[str]) -> None:
        self.topics = tuple(topics)
        self.wanted = frozenset(topics)
        self._asked: dict[int, Sequence[str]] = {}
        self._refused: dict[str, str] = {}
        self._said = ""
        self._dropped: set[str] = set()

    def begin(self, asked: Iterable[tuple[int, Sequence[str]]]) -> None:
        """Note what a new connection was asked for: numbers of packets, and their topics."""
        self._asked = dict(asked)
        self._refused = {}
        self._dropped = set()

    def answered(self, number: int, reasons: Sequence[ReasonCode]) -> None:
        """Take the broker's answer to a packet; log refusals, all of them in one line."""
        topics = self._asked.pop(number, ())
        for topic, reason in zip(topics, reasons, strict=False):
            if reason.is_failure:
                self._refused[topic] = reason.getName()
        if self._asked:
            return
        trouble = self.trouble
        if trouble and trouble != self._said:
            log.error("the broker refused subscriptions", reason=trouble, do="check the broker's access rules")
        self._said = trouble

    def dispensable(self, topic: str) -> bool:
        """Whether to unsubscribe from a topic that the session still brings; true once on each connection."""
        if topic in self.wanted or topic in self._dropped:
            return False
        if not self._dropped:
            log.info("unsubscribing from topics that are no longer in the settings", first=topic)
        self._dropped.add(topic)
        return True

    @property
    def trouble(self) -> str:
        """What is wrong, in plain words; empty when everything is granted."""
        if self._asked:
            return "the broker has not yet granted the subscriptions"
        if not self._refused:
            return ""
        shown = ", ".join(f"{topic} ({reason})" for topic, reason in list(self._refused.items())[:SHOWN])
        return f"the broker refused {len(self._refused)} of {len(self.topics)} subscriptions: {shown}" + (
            ", …" if len(self._refused) > SHOWN else ""
        )
