"""The one loop that joins the stations: from the broker's socket to signals, metrics and back to the broker.

What happens to a batch, in this order:

1. drain: `Connection.take` returns what came until the socket ran dry or the batch was full; it never waits for more.
   Messages that the broker sends again are told from new ones.
2. decode and screen: payloads become readings; refusals are counted.
3. journal: the batch is committed to the record. While that fails it is held, and the next ones behind it.
4. acknowledge: only now does the broker learn that it may forget the messages, in the order of their arrival. While the
   outbox is full they wait, so that the broker holds further ones back.
5. judge: one compiled walk over the readings, in the order of arrival.
6. speak: events and status are committed to the outbox, in order, and go from there to the broker.
7. copies for the web thread are made, if it asks.

Without a record, a batch is acknowledged after it was judged. One thread, no locks. Nothing in the judging path reads
the clock: time comes with the data.
"""

import contextlib
import signal
import sys
import time
from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from errno import EADDRINUSE
from functools import partial
from typing import Final, NamedTuple

import numpy as np
import structlog

from quietmill.charts.bank import Bank
from quietmill.charts.compiler import CACHE_FOLDER, COMPILED
from quietmill.instant import format_time
from quietmill.intake.broker import Connection, Will
from quietmill.intake.message import Message
from quietmill.intake.redelivery import Redelivery
from quietmill.intake.routes import Decoded, Note, Routes
from quietmill.judging import Judging, Said
from quietmill.model import READING, Outcome
from quietmill.outlets.metrics import Copies, Tally, Writer, shown
from quietmill.outlets.publisher import OUTBOX_LIMIT, Letter, Publisher, state_document
from quietmill.outlets.web import Handover, Health, WebServer
from quietmill.record.entries import ReadingsEntry
from quietmill.record.record import Letter as Outgoing
from quietmill.record.record import Record, RecordBusyError, RecordError, RecordLostError
from quietmill.recovery import Recovered, recover, text_of
from quietmill.settings import Settings, SettingsError, load
from quietmill.signals.event import Event

__all__ = ["Monitor", "ServiceError", "StartError", "run_service"]

log = structlog.get_logger("quietmill")

IDLE_SECONDS: Final = 0.5
"""How long the loop waits at most before it looks after keepalive and connection."""
FAREWELL_SECONDS: Final = 3.0
"""How long a stop waits for the broker to acknowledge what was said."""
SWITCH_SECONDS: Final = 0.0005
"""How long a thread may keep the interpreter: a scrape must not hold up a batch."""
MOST_NOTES: Final = 1000
"""So many kinds of bad input are logged, each once; all are counted."""


RESTARTING: Final = ("broker", "record", "web", "publish")
"""Parts of the settings that a reload cannot change."""
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


class StartError(Exception):
    """The service could not start, for a reason that its user can mend."""


class ServiceError(Exception):
    """The service cannot go on, for a reason that its user can mend."""


class Monitor:
    """The service: everything built in one place, and taken down in reverse order by `close`.

    Raises `StartError`.
    """

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        characteristics, publish = settings.characteristics, settings.publish
        self.at: Callable[[str], None] = lambda _step: None
        """A seam for tests: called with the name of each step of a batch when it is done."""
        self.stopping = False
        self.reloaded = True
        self._reload_asked = False
        self.tally = Tally(len(characteristics))
        self.routes = Routes(characteristics)
        self.writer = Writer(characteristics)
        self._held: deque[Held] = deque()
        self._unsaid: tuple[int, list[Outgoing]] | None = None
        self._unacknowledged: list[Message] = []
        self._noted: set[tuple[Outcome, str]] = set()
        self._sessions_lost = self._sessions_begun = 0
        self._forget = False
        self._record_trouble = ""
        self._next_commit = 0.0
        self._since_snapshot = [0, 0]
        will = Will(f"{publish.prefix}/service/{settings.broker.client_id}", state_document("offline"))
        with contextlib.ExitStack() as undo:
            self.record = self._open_record(undo)
            try:
                self.connection = Connection(settings.broker, self.routes.topics, will)
            except ValueError as error:
                raise StartError(str(error)) from None
            undo.callback(self.connection.close)
            self.publisher = Publisher(self.connection, publish.prefix, settings.broker.client_id)
            recovered = self._recover()
            self.judging = recovered.judging
            self.redelivery = Redelivery(recovered.seen)
            self._messages = recovered.messages
            self.health = Health()
            self.handover = Handover(self.connection.wake)
            web = settings.web
            try:
                self.web = WebServer(web.host, web.port, self.handover, self.health)
            except OSError as error:
                reason = error.strerror or str(error)
                question = "; is another service there?" if error.errno == EADDRINUSE else ""
                raise StartError(f"web.listen {web.listen} cannot be served: {reason}{question}") from None
            undo.pop_all()

    def _open_record(self, undo: contextlib.ExitStack) -> Record | None:
        """Open the record where the settings name one."""
        settings = self.settings
        if settings.record is None:
            return None
        path = settings.path.parent / settings.record.removeprefix("sqlite:")
        try:
            record = Record(path, {"source": settings.publish.source, "prefix": settings.publish.prefix})
        except RecordError as error:
            raise StartError(str(error)) from None
        undo.callback(record.close)
        return record

    def _recover(self) -> Recovered:
        """Go on where the record says, or begin."""
        characteristics, source = self.settings.characteristics, self.settings.publish.source
        if self.record is None:
            return Recovered(Judging(characteristics, source), {}, 0, 0)
        self.publisher.on_delivered = self.record.delivered
        try:
            recovered = recover(self.record, characteristics, source, self._letters, self._event_letters)
        except (RecordError, RecordBusyError) as error:
            raise StartError(f"record {self.settings.record}: {error}") from None
        for letter in self.record.letters():
            self.publisher.put(Letter(*letter))
        if recovered.entries:
            log.info(
                "state recovered", journal_entries=recovered.entries, waiting_to_be_said=self.publisher.outstanding
            )
        return recovered

    def start(self) -> None:
        """Compile the bank, then open the doors."""
        Bank([self.settings.characteristics[0].detector]).judge(np.zeros(1, READING))
        self.web.start()
        host, port = self.web.address
        log.info(
            "service started",
            characteristics=len(self.settings.characteristics),
            topics=len(self.routes.topics),
            web=f"http://{host}:{port}",
        )
        if not COMPILED:
            log.warning("running uncompiled", meaning="NUMBA_DISABLE_JIT is set; judging is a hundred times slower")
        elif CACHE_FOLDER is None:
            log.warning("compiled code cannot be kept", do="give the service a CACHE_DIRECTORY it can write")

    def turn(self, timeout_seconds: float = IDLE_SECONDS) -> None:
        """Take what came through all stations."""
        batch = self.connection.take(timeout_seconds)
        if self.connection.sessions_begun != self._sessions_begun:
            self._sessions_begun = self.connection.sessions_begun
            self.redelivery.forget()
            self._forget = True
        if self.connection.sessions_lost != self._sessions_lost:
            self._sessions_lost = self.connection.sessions_lost
            self.tell_all_status()
        if batch:
            self._hold(batch)
        if self._held or self._unsaid:
            self._work_off()
        if self._reload_asked and not (self._held or self._unsaid):
            self._reload_asked = False
            self.reload()
        self.publisher.turn()
        self._acknowledge()
        self.connection.send()
        self.handover.serve(self.exposition)
        self.health.turn(tuple(self.troubles()))

    def _hold(self, batch: Sequence[Message]) -> None:
        """Decode a batch and put it behind those that wait for the record."""
        fresh, seen = self.redelivery.sift(batch)
        decoded = self.routes.decode(fresh, self._messages)
        self._messages = decoded.messages
        for note in decoded.notes:
            self._note(note)
        self._held.append(Held(batch, decoded, self._forget, seen))
        self._forget = False
        self.at("decoded")

    def _work_off(self) -> None:
        """Take the batches that are held, in order, as far as the record lets it."""
        if self._record_trouble and time.monotonic() < self._next_commit:
            return
        try:
            if self._unsaid is not None:
                self._post(*self._unsaid)
            while self._held:
                self._pass(self._held[0])
        except RecordBusyError as error:
            self._wait_for_record(str(error))
            return
        if self._record_trouble:
            log.info("the record can be written again", held_batches=len(self._held))
            self._record_trouble = ""
            self.connection.resume()

    def _wait_for_record(self, reason: str) -> None:
        """Hold on to what could not be committed; hang up when it grows too large."""
        if not self._record_trouble:
            log.error("the record cannot be written", reason=reason, meaning="readings are held and tried again")
        self._record_trouble = f"the record {reason}"
        self._next_commit = time.monotonic() + RETRY_SECONDS
        messages = sum(len(held.messages) for held in self._held)
        size = sum(len(message.payload) for held in self._held for message in held.messages)
        if messages > HELD_MESSAGES or size > HELD_BYTES:
            self.connection.suspend()

    def _pass(self, held: Held) -> None:
        """Take one batch from the journal to the outbox."""
        readings, number = held.decoded.readings, self.record.number if self.record else 0
        if self.record is not None and (len(readings) or held.seen or held.forget):
            entry = ReadingsEntry(readings.tobytes(), held.forget, held.seen, held.decoded.messages)
            number = self.record.commit_batch(entry)
            self.at("journaled")
        self._held.popleft()
        self._unacknowledged += [message for message in held.messages if message.qos]
        if self.record is not None:
            self._acknowledge()
            self.connection.send()
            self.at("acknowledged")
        said = self.judging.judge(readings)
        self.at("judged")
        self._count(readings, held.decoded.refused, said)
        self._post(number, self._letters(self.judging, said))

    def _post(self, number: int, letters: list[Outgoing]) -> None:
        """Commit what a batch says, and hand it to the publisher; a batch that says nothing goes with the next one."""
        if self.record is None:
            for letter in letters:
                self.publisher.put(Letter(*letter))
            return
        self._since_snapshot[0] += 1
        due = self._since_snapshot[0] >= SNAPSHOT_ENTRIES or self._since_snapshot[1] >= SNAPSHOT_READINGS
        if not letters and not due:
            self.record.judged = number
            return
        self._unsaid = (number, letters)
        snapshot = self.judging.snapshot(self.redelivery.seen, self._messages) if due and not self._held else None
        posted = self.record.commit_judged(number, letters, snapshot)
        self._unsaid = None
        if snapshot is not None:
            self._since_snapshot = [0, 0]
        self.at("said")
        for letter in posted:
            self.publisher.put(Letter(*letter))

    def _letters(self, judging: Judging, said: Said) -> list[Outgoing]:
        """Return what a batch says, in order; each change of status behind its event."""
        letters = self._event_letters(said.events)
        for row in dict.fromkeys(said.changed):
            name = judging.characteristics[row].id
            letters.append(self.publisher.status_letter(name, judging.status(row))[:4])
        return letters

    def _event_letters(self, events: Sequence[Event]) -> list[Outgoing]:
        """Return the letters of events that end what is no longer watched as it was."""
        return [self.publisher.event_letter(event.characteristic, event.document)[:4] for event in events]

    def tell_all_status(self) -> None:
        """Say how every characteristic stands: after a start, and to a broker that has forgotten."""
        for row, characteristic in enumerate(self.settings.characteristics):
            self.publisher.put(self.publisher.status_letter(characteristic.id, self.judging.status(row)))

    def _count(self, readings: np.ndarray, refused: Mapping[Outcome, int], said: Said) -> None:
        tally, verdicts = self.tally, said.verdicts
        self._since_snapshot[1] += len(readings)
        for event in said.events:
            for rule in event.started:
                tally.signals[event.row, rule] += 1
        for index in verdicts.set_back.tolist():
            name = self.settings.characteristics[int(readings["row"][index])].id
            log.warning("clock set back", characteristic=name, now=format_time(int(readings["time"][index])))
        for outcome, count in refused.items():
            tally.outcomes[outcome] += count
        if not len(readings):
            return
        tally.outcomes += np.bincount(verdicts.outcomes, minlength=len(Outcome))
        tally.batch.observe(np.array([len(readings)], np.float64))
        tally.decision.observe((time.time_ns() // 1000 - readings["arrival"]) / 1e6)

    def _note(self, note: Note) -> None:
        """Log the first bad input of each kind and topic."""
        key = (note.outcome, note.topic)
        if key not in self._noted and len(self._noted) < MOST_NOTES:
            self._noted.add(key)
            log.warning("reading refused", outcome=note.outcome.label, topic=note.topic, reason=note.text)

    def _acknowledge(self) -> None:
        if self._unacknowledged and not self.publisher.full:
            self.connection.acknowledge(self._unacknowledged)
            self._unacknowledged = []

    def troubles(self) -> Iterator[str]:
        """Yield why the service may not be ready, in plain words."""
        if self.connection.trouble:
            yield self.connection.trouble
        if self._record_trouble:
            yield self._record_trouble
        if self.publisher.full:
            yield f"more than {OUTBOX_LIMIT:,} events wait for the broker; no readings are acknowledged meanwhile"

    def exposition(self) -> Callable[[], bytes]:
        """Return what writes a scrape from copies made now, in whichever thread."""
        return partial(self.writer.write, self.copies())

    def copies(self) -> Copies:
        """Return what a scrape shows."""
        tally = self.tally
        return Copies(
            rows=self.judging.bank.rows,
            state=shown(self.judging.bank.state),
            signals=tally.signals.copy(),
            outcomes=tally.outcomes.copy(),
            decision=tally.decision.copy(),
            batch=tally.batch.copy(),
            messages_qos0=self.connection.messages_qos0,
            connected=self.connection.connected,
            outbox=self.publisher.outstanding,
            record_bytes=self.record.bytes if self.record is not None else 0,
            reloaded=self.reloaded,
        )

    def ask_reload(self) -> None:
        """Read the settings file again after this turn; for signal handlers and other threads."""
        self._reload_asked = True
        self.connection.wake()

    def reload(self) -> None:
        """Take the settings file over as it is now: whole, or not at all.

        A characteristic that is judged alike keeps its state bit for bit; another starts afresh, its number going on.
        """
        before, self.reloaded = self.settings, False
        try:
            after = load(before.path)
        except SettingsError as error:
            log.error("settings not reloaded", problems=[str(problem) for problem in error.problems])
            return
        changed = [part for part in RESTARTING if getattr(after, part) != getattr(before, part)]
        if changed:
            log.error(
                "settings not reloaded", reason=f"{', '.join(changed)} changed, which needs a restart of the service"
            )
            return
        judging, events = self.judging.under(after.characteristics)
        letters = self._event_letters(events)
        gone = {one.id for one in before.characteristics} - {one.id for one in after.characteristics}
        letters += [self.publisher.status_letter(name, b"")[:4] for name in sorted(gone)]
        if self.record is not None:
            snapshot = judging.snapshot(self.redelivery.seen, self._messages)
            try:
                posted = self.record.commit_settings(text_of(after.characteristics), letters, snapshot)
            except RecordBusyError as error:
                log.error("settings not reloaded", reason=f"the record {error}")
                return
            self._since_snapshot = [0, 0]
        else:
            posted = [(*letter, 0) for letter in letters]
        for letter in posted:
            self.publisher.put(Letter(*letter))
        self._count_on(before, after)
        self.settings, self.judging = after, judging
        self.routes, self.writer = Routes(after.characteristics), Writer(after.characteristics)
        self.connection.listen_to(self.routes.topics)
        self.tell_all_status()
        self.reloaded = True
        log.info(
            "settings reloaded", characteristics=len(after.characteristics), signals_ended=len(events), gone=len(gone)
        )

    def _count_on(self, before: Settings, after: Settings) -> None:
        """Keep the counts of signals with their characteristics, wherever these stand now."""
        places = {one.id: row for row, one in enumerate(before.characteristics)}
        signals = Tally(len(after.characteristics)).signals
        for row, one in enumerate(after.characteristics):
            if one.id in places:
                signals[row] = self.tally.signals[places[one.id]]
        self.tally.signals = signals

    def stop(self) -> None:
        """End the loop after its turn; for signal handlers and other threads."""
        self.stopping = True
        self.connection.wake()

    def close(self) -> None:
        """Say goodbye, in the reverse order of the start.

        What still comes in is neither judged nor acknowledged: the broker keeps it for the next start.
        """
        self.handover.close()
        self.publisher.service("offline")
        end = time.monotonic() + FAREWELL_SECONDS
        while self.connection.connected and self.publisher.outstanding and time.monotonic() < end:
            self.publisher.turn()
            self.connection.take(0.05)
        self.connection.close()
        if self.record is not None:
            self._leave(self.record)
        self.web.stop()
        log.info("service stopped")

    def _leave(self, record: Record) -> None:
        """Commit what is left, with a snapshot, so that the next start has nothing to judge again."""
        try:
            if not self._held and self._unsaid is None:
                record.commit_judged(record.judged, [], self.judging.snapshot(self.redelivery.seen, self._messages))
        except (RecordBusyError, RecordLostError) as error:
            log.warning("the last state could not be kept", reason=str(error), meaning="the next start judges again")
        record.close()


@contextlib.contextmanager
def stopped_by_signals(monitor: Monitor) -> Iterator[None]:
    """Let SIGTERM and SIGINT end the loop of a monitor, and SIGHUP read its settings again."""
    before = {number: signal.signal(number, lambda *_: monitor.stop()) for number in (signal.SIGTERM, signal.SIGINT)}
    before[signal.SIGHUP] = signal.signal(signal.SIGHUP, lambda *_: monitor.ask_reload())
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def run_service(settings: Settings) -> None:
    """Run the service until SIGTERM or SIGINT. Raises `StartError`, and `ServiceError` when it cannot go on."""
    sys.setswitchinterval(SWITCH_SECONDS)
    monitor = Monitor(settings)
    with stopped_by_signals(monitor):
        monitor.start()
        try:
            while not monitor.stopping:
                monitor.turn()
        except RecordLostError as error:
            raise ServiceError(f"{error}; it stops rather than write into the void") from None
        monitor.close()
