"""How batches pass from the socket to the outbox: held, journaled, acknowledged, judged, said, in this order.

The order and what it promises stand in `record/record.py`. Without a record a batch is judged at once.
"""

import time
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from typing import Final, NamedTuple

import structlog

from quietmill.intake.message import Message
from quietmill.intake.redelivery import Redelivery
from quietmill.intake.routes import Decoded, Routes
from quietmill.judging import Judging, Said
from quietmill.model import Outcome, Records
from quietmill.outlets.publisher import Letter, Publisher
from quietmill.record.entries import ReadingsEntry
from quietmill.record.record import Letter as Outgoing
from quietmill.record.record import Record, RecordBusyError, RecordLostError
from quietmill.recovery import recover, text_of
from quietmill.settings import Characteristic, Settings
from quietmill.signals.event import Event

__all__ = ["Passage"]

log = structlog.get_logger("quietmill")

HELD_MESSAGES: Final = 100_000
HELD_BYTES: Final = 64 * 1024 * 1024
"""With more held that cannot be committed, the service hangs up and lets the broker queue."""
RETRY_SECONDS: Final = 0.5
"""How long to wait before a failed commit is tried again."""
SNAPSHOT_READINGS: Final = 500_000
SNAPSHOT_ENTRIES: Final = 20_000
"""A snapshot is due after so many readings or journal entries, so that a start has no long tail to judge again."""


class Held(NamedTuple):
    """A batch between the socket and the record."""

    messages: Sequence[Message]
    decoded: Decoded
    forget: bool
    seen: dict[int, int]


Judged = Callable[[Records, Mapping[Outcome, int], Said], None]
"""Told of each batch that was judged: its readings, refusals by outcome, what it says."""


class Passage:
    """The batches on their way, with the record behind them and the judging half at the end.

    `acknowledge` is called with the messages of a batch once the broker may forget them, `judged` once it was judged.
    What had been judged but not said before a stop goes to the publisher at once. Raises `RecordError` and
    `RecordBusyError`.
    """

    def __init__(
        self,
        settings: Settings,
        record: Record | None,
        publisher: Publisher,
        acknowledge: Callable[[Sequence[Message]], None],
        judged: Judged,
    ) -> None:
        self.at: Callable[[str], None] = lambda _step: None
        """A seam for tests: called with the name of each step of a batch when it is done."""
        self.record = record
        self.routes = Routes(settings.characteristics)
        self.trouble = ""
        """Why nothing can be committed, in plain words."""
        self._publisher = publisher
        self._acknowledge = acknowledge
        self._judged = judged
        self._held: deque[Held] = deque()
        self._unsaid: tuple[int, list[Outgoing]] | None = None
        self._forget = False
        self._next_commit = 0.0
        self._entries = self._readings = 0
        seen: dict[int, int] = {}
        self._messages = 0
        if record is None:
            self.judging = Judging(settings.characteristics, settings.publish.source)
        else:
            publisher.on_delivered = record.delivered
            source = settings.publish.source
            self.judging, seen, self._messages, count = recover(
                record, settings.characteristics, source, self._letters, self._event_letters
            )
            self._publish(record.letters())
            if count:
                log.info("state recovered", journal_entries=count, waiting_to_be_said=publisher.outstanding)
        self._redelivery = Redelivery(seen)

    @property
    def idle(self) -> bool:
        """Whether nothing is on its way."""
        return not self._held and self._unsaid is None

    @property
    def too_much(self) -> bool:
        """Whether more is held than should be."""
        size = sum(len(message.payload) for held in self._held for message in held.messages)
        return size > HELD_BYTES or sum(len(held.messages) for held in self._held) > HELD_MESSAGES

    def forget(self) -> None:
        """Take note of a broker that knew no session: its packet ids begin anew."""
        self._redelivery.forget()
        self._forget = True

    def hold(self, batch: Sequence[Message]) -> Decoded:
        """Decode a batch and put it behind those that wait; messages sent again are not looked at twice."""
        fresh, seen = self._redelivery.sift(batch)
        decoded = self.routes.decode(fresh, self._messages)
        self._messages = decoded.messages
        self._held.append(Held(batch, decoded, self._forget, seen))
        self._forget = False
        self.at("decoded")
        return decoded

    def work_off(self) -> None:
        """Take the batches that are held, in order, as far as the record lets it. Raises `RecordLostError`."""
        if self.trouble and time.monotonic() < self._next_commit:
            return
        try:
            if self._unsaid is not None:
                self._say(*self._unsaid)
            while self._held:
                self._pass(self._held[0])
        except RecordBusyError as error:
            if not self.trouble:
                log.error(
                    "the record cannot be written", reason=str(error), meaning="readings are held and tried again"
                )
            self.trouble = f"the record {error}"
            self._next_commit = time.monotonic() + RETRY_SECONDS
            return
        if self.trouble:
            log.info("the record can be written again")
            self.trouble = ""

    def _pass(self, held: Held) -> None:
        """Take one batch from the journal to the outbox."""
        readings, number = held.decoded.readings, 0
        if self.record is not None:
            number = self.record.number
            if len(readings) or held.seen or held.forget:
                entry = ReadingsEntry(readings.tobytes(), held.forget, held.seen, held.decoded.messages)
                number = self.record.commit_batch(entry)
            self.at("journaled")
        self._held.popleft()
        self._acknowledge(held.messages)
        self.at("acknowledged")
        said = self.judging.judge(readings)
        self.at("judged")
        self._judged(readings, held.decoded.refused, said)
        self._entries += 1
        self._readings += len(readings)
        self._say(number, self._letters(self.judging, said))

    def _say(self, number: int, letters: list[Outgoing]) -> None:
        """Commit what a batch says, and hand it to the publisher; a batch that says nothing goes with the next one."""
        if self.record is None:
            self._publish([(*letter, 0) for letter in letters])
            return
        due = self._entries >= SNAPSHOT_ENTRIES or self._readings >= SNAPSHOT_READINGS
        if not letters and not due:
            self.record.judged = number
            return
        self._unsaid = (number, letters)
        snapshot = self.judging.snapshot(self._redelivery.seen, self._messages) if due and not self._held else None
        posted = self.record.commit_judged(number, letters, snapshot)
        self._unsaid = None
        if snapshot is not None:
            self._entries = self._readings = 0
        self.at("said")
        self._publish(posted)

    def _publish(self, posted: Sequence[tuple[str, bytes, bool, str | None, int]]) -> None:
        for letter in posted:
            self._publisher.put(Letter(*letter))

    def _letters(self, judging: Judging, said: Said) -> list[Outgoing]:
        """Return what a batch says, in order, and how things stand after it."""
        letters = self._event_letters(said.events)
        for row in dict.fromkeys(said.changed):
            letters.append(self._publisher.status_letter(judging.characteristics[row].id, judging.status(row))[:4])
        return letters

    def _event_letters(self, events: Sequence[Event]) -> list[Outgoing]:
        return [self._publisher.event_letter(event.characteristic, event.document)[:4] for event in events]

    def tell_all_status(self) -> None:
        """Say how every characteristic stands: after a start, and to a broker that has forgotten."""
        for row, characteristic in enumerate(self.judging.characteristics):
            self._publisher.put(self._publisher.status_letter(characteristic.id, self.judging.status(row)))

    def take_over(self, characteristics: Sequence[Characteristic]) -> tuple[int, int]:
        """Go on under other settings; return how many signals ended by it, and how many characteristics are gone.

        For when nothing is on its way. Raises `RecordBusyError`, and then nothing has changed.
        """
        judging, events = self.judging.under(characteristics)
        gone = {one.id for one in self.judging.characteristics} - {one.id for one in characteristics}
        letters = self._event_letters(events)
        letters += [self._publisher.status_letter(name, b"")[:4] for name in sorted(gone)]
        posted = [(*letter, 0) for letter in letters]
        if self.record is not None:
            snapshot = judging.snapshot(self._redelivery.seen, self._messages)
            posted = self.record.commit_settings(text_of(characteristics), letters, snapshot)
            self._entries = self._readings = 0
        self._publish(posted)
        self.judging, self.routes = judging, Routes(characteristics)
        return len(events), len(gone)

    def close(self) -> None:
        """Commit what is left, with a snapshot, so that the next start has nothing to judge again."""
        if self.record is None:
            return
        try:
            if self.idle:
                snapshot = self.judging.snapshot(self._redelivery.seen, self._messages)
                self.record.commit_judged(self.record.judged, [], snapshot)
        except (RecordBusyError, RecordLostError) as error:
            log.warning("the last state could not be kept", reason=str(error), meaning="the next start judges again")
        self.record.close()
