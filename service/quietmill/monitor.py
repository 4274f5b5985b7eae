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
from collections.abc import Callable, Iterator, Mapping, Sequence
from errno import EADDRINUSE
from functools import partial
from typing import Final

import numpy as np
import structlog

from quietmill.charts.bank import Bank
from quietmill.charts.compiler import CACHE_FOLDER, COMPILED
from quietmill.instant import format_time
from quietmill.intake.broker import Connection, Will
from quietmill.intake.message import Message
from quietmill.intake.routes import Note
from quietmill.judging import Said
from quietmill.model import READING, Outcome
from quietmill.outlets.metrics import Copies, Tally, Writer, shown
from quietmill.outlets.publisher import OUTBOX_LIMIT, Publisher, state_document
from quietmill.outlets.web import Handover, Health, WebServer
from quietmill.passage import Passage
from quietmill.record.record import Record, RecordBusyError, RecordError, RecordLostError
from quietmill.settings import Settings, SettingsError, load

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
        self.stopping = False
        self.reloaded = True
        self._reload_asked = False
        self.tally = Tally(len(characteristics))
        self.writer = Writer(characteristics)
        self._unacknowledged: list[Message] = []
        self._noted: set[tuple[Outcome, str]] = set()
        self._sessions_lost = self._sessions_begun = 0
        will = Will(f"{publish.prefix}/service/{settings.broker.client_id}", state_document("offline"))
        with contextlib.ExitStack() as undo:
            record = open_record(settings)
            if record is not None:
                undo.callback(record.close)
            try:
                topics = tuple(dict.fromkeys(characteristic.topic for characteristic in characteristics))
                self.connection = Connection(settings.broker, topics, will)
            except ValueError as error:
                raise StartError(str(error)) from None
            undo.callback(self.connection.close)
            self.publisher = Publisher(self.connection, publish.prefix, settings.broker.client_id)
            try:
                self.passage = Passage(settings, record, self.publisher, self._may_forget, self._count)
            except (RecordError, RecordBusyError) as error:
                raise StartError(str(error)) from None
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

    def start(self) -> None:
        """Compile the bank, then open the doors."""
        Bank([self.settings.characteristics[0].detector]).judge(np.zeros(1, READING))
        self.web.start()
        host, port = self.web.address
        log.info(
            "service started",
            characteristics=len(self.settings.characteristics),
            topics=len(self.passage.routes.topics),
            web=f"http://{host}:{port}",
        )
        if not COMPILED:
            log.warning("running uncompiled", meaning="NUMBA_DISABLE_JIT is set; judging is a hundred times slower")
        elif CACHE_FOLDER is None:
            log.warning("compiled code cannot be kept", do="give the service a CACHE_DIRECTORY it can write")

    def turn(self, timeout_seconds: float = IDLE_SECONDS) -> None:
        """Take what came through all stations."""
        batch = self.connection.take(timeout_seconds)
        passage = self.passage
        if self.connection.sessions_begun != self._sessions_begun:
            self._sessions_begun = self.connection.sessions_begun
            passage.forget()
        if self.connection.sessions_lost != self._sessions_lost:
            self._sessions_lost = self.connection.sessions_lost
            passage.tell_all_status()
        if batch:
            for note in passage.hold(batch).notes:
                self._note(note)
        if not passage.idle:
            self._work_off()
        if self._reload_asked and passage.idle:
            self._reload_asked = False
            self.reload()
        self.publisher.turn()
        self._acknowledge()
        self.connection.send()
        self.handover.serve(self.exposition)
        self.health.turn(tuple(self.troubles()))

    def _work_off(self) -> None:
        """Let the batches pass; hang up when too many are held, and come back when they are not."""
        self.passage.work_off()
        if not self.passage.trouble:
            self.connection.resume()
        elif self.passage.too_much:
            self.connection.suspend()

    def _may_forget(self, messages: Sequence[Message]) -> None:
        """Acknowledge a batch, now or when the outbox has room again."""
        self._unacknowledged += [message for message in messages if message.qos]
        if self.passage.record is not None:
            self._acknowledge()
            self.connection.send()

    def _count(self, readings: np.ndarray, refused: Mapping[Outcome, int], said: Said) -> None:
        tally, verdicts = self.tally, said.verdicts
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
        if self.passage.trouble:
            yield self.passage.trouble
        if self.publisher.full:
            yield f"more than {OUTBOX_LIMIT:,} events wait for the broker; no readings are acknowledged meanwhile"

    def exposition(self) -> Callable[[], bytes]:
        """Return what writes a scrape from copies made now, in whichever thread."""
        return partial(self.writer.write, self.copies())

    def copies(self) -> Copies:
        """Return what a scrape shows."""
        tally = self.tally
        return Copies(
            rows=self.passage.judging.bank.rows,
            state=shown(self.passage.judging.bank.state),
            signals=tally.signals.copy(),
            outcomes=tally.outcomes.copy(),
            decision=tally.decision.copy(),
            batch=tally.batch.copy(),
            messages_qos0=self.connection.messages_qos0,
            connected=self.connection.connected,
            outbox=self.publisher.outstanding,
            record_bytes=self.passage.record.bytes if self.passage.record is not None else 0,
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
        try:
            ended, gone = self.passage.take_over(after.characteristics)
        except RecordBusyError as error:
            log.error("settings not reloaded", reason=f"the record {error}")
            return
        self._count_on(before, after)
        self.settings, self.writer = after, Writer(after.characteristics)
        self.connection.listen_to(self.passage.routes.topics)
        self.passage.tell_all_status()
        self.reloaded = True
        log.info("settings reloaded", characteristics=len(after.characteristics), signals_ended=ended, gone=gone)

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
        self.passage.close()
        self.web.stop()
        log.info("service stopped")


def open_record(settings: Settings) -> Record | None:
    """Open the record where the settings name one. Raises `StartError`."""
    if settings.record is None:
        return None
    path = settings.path.parent / settings.record.removeprefix("sqlite:")
    try:
        return Record(path, {"source": settings.publish.source, "prefix": settings.publish.prefix})
    except RecordError as error:
        raise StartError(str(error)) from None


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
