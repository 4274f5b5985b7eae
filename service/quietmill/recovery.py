"""What a start makes of the record: the arrays as they were, and what was judged but not yet said."""

from collections.abc import Callable, Sequence
from typing import NamedTuple

import msgspec
import numpy as np

from quietmill.judging import Judging, Said, written
from quietmill.model import READING
from quietmill.record.entries import SETTINGS, ReadingsEntry, unpack
from quietmill.record.record import Letter, Record
from quietmill.settings import Characteristic
from quietmill.signals.event import Event

__all__ = ["Recovered", "recover", "text_of"]


class Recovered(NamedTuple):
    """Where the service goes on."""

    judging: Judging
    seen: dict[int, int]
    messages: int
    entries: int
    """How many journal entries were judged again, for the log."""


def recover(
    record: Record,
    characteristics: Sequence[Characteristic],
    source: str,
    letters_of: Callable[[Judging, Said], list[Letter]],
    ending: Callable[[Sequence[Event]], list[Letter]],
) -> Recovered:
    """Bring the record's arrays to where the service stopped, however it stopped.

    The tail of the journal is judged under the settings that it was judged with; what had been judged before says
    nothing again. Settings that differ are then taken over as one journal entry. Raises `RecordError` and
    `RecordBusyError`.
    """
    found = record.snapshot()
    if found is None:
        judging = Judging(characteristics, source)
        record.commit_settings(text_of(characteristics), [], judging.snapshot({}, 0))
        return Recovered(judging, {}, 0, 0)
    number, snapshot = found
    judging = Judging.recovered(snapshot, source)
    seen, messages, count = dict(snapshot.seen), snapshot.messages, 0
    for entry in record.entries(number):
        count += 1
        if entry.kind == SETTINGS:
            texts = msgspec.json.decode(entry.body, type=list[str])
            judging, _ = judging.under([Characteristic.model_validate_json(text) for text in texts])
            continue
        batch = unpack(entry.body, ReadingsEntry)
        if batch.forget:
            seen.clear()
        seen.update(batch.seen)
        messages = batch.messages
        said = judging.judge(np.frombuffer(batch.readings, READING).copy())
        if entry.number > record.judged:
            record.commit_judged(entry.number, letters_of(judging, said))
    if text_of(judging.characteristics) != text_of(characteristics):
        after, events = judging.under(characteristics)
        record.commit_settings(text_of(characteristics), ending(events), after.snapshot(seen, messages))
        judging = after
    return Recovered(judging, seen, messages, count)


def text_of(characteristics: Sequence[Characteristic]) -> bytes:
    """Return resolved settings as a journal entry holds them."""
    return msgspec.json.encode([written(characteristic) for characteristic in characteristics])
