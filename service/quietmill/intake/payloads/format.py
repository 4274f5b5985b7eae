"""What a payload format has to offer, and the words in which it answers."""

from collections.abc import Sequence
from typing import NamedTuple, Protocol

from quietmill.model import Outcome

__all__ = ["Reader", "Refusal", "Sample"]

Sample = tuple[float, int, int]
"""One reading as its message tells it: the value before scale and offset (perhaps not finite), its own time in
microseconds UTC and its sequence, each `model.NO_TIME` where the settings name none."""


class Refusal(NamedTuple):
    """Why there is no reading; `expected` says what should have stood there, to finish "expected ..."."""

    outcome: Outcome
    expected: str


class Reader(Protocol):
    """Finds the readings of one characteristic in the messages of its topic.

    Neither step raises, whatever the bytes are.
    """

    @staticmethod
    def parse(payload: bytes) -> object:
        """Return the document in a payload, or the `Refusal` of a payload that nobody can read.

        It is called once a message for all characteristics of a topic that have this format, and its refusal counts
        once a message too.
        """
        ...

    def read(self, document: object, payload: bytes) -> Sequence[Sample | Refusal]:
        """Return the readings in a document that `parse` made of `payload`, in their order."""
        ...
