"""The one loop that joins the stations: from the broker's socket to signals, metrics and back to the broker.

What happens to a batch, in this order:

1. drain: `Connection.take` returns what came until the socket ran dry or the batch was full; it never waits for more.
2. decode and screen: payloads become readings; refusals are counted.
3. judge: one compiled walk over the readings, in the order of arrival.
4. speak: events and status go to the outbox, in order, and from there to the broker.
5. acknowledge: only now does the broker learn that it may forget the messages, in the order of their arrival. While the
   outbox is full they wait, so that the broker holds further ones back.
6. copies for the web thread are made, if it asks.

One thread, no locks. Nothing in the judging path reads the clock: time comes with the data.
"""

import contextlib
import signal
import sys
import time
from collections.abc import Iterator, Mapping, Sequence
from errno import EADDRINUSE
from typing import Final

import numpy as np
import structlog

from quietmill.charts.bank import Bank
from quietmill.charts.compiler import CACHE_FOLDER, COMPILED
from quietmill.instant import format_time
from quietmill.intake.broker import Connection, Will
from quietmill.intake.message import Message
from quietmill.intake.routes import Note, Routes
from quietmill.model import NO_TIME, READING, Notice, Outcome, Verdicts
from quietmill.outlets.metrics import Copies, Tally, Writer, shown
from quietmill.outlets.publisher import OUTBOX_LIMIT, Publisher, state_document
from quietmill.outlets.web import Handover, Health, WebServer
from quietmill.settings import Settings
from quietmill.signals.event import Event, Herald
from quietmill.signals.status import status_document

__all__ = ["Monitor", "StartError", "run_service"]

log = structlog.get_logger("quietmill")

IDLE_SECONDS: Final = 0.5
"""How long the loop waits at most before it looks after keepalive and connection."""
FAREWELL_SECONDS: Final = 3.0
"""How long a stop waits for the broker to acknowledge what was said."""
SWITCH_SECONDS: Final = 0.0005
"""How long a thread may keep the interpreter: a scrape must not hold up a batch."""
MOST_NOTES: Final = 1000
"""So many kinds of bad input are logged, each once; all are counted."""


class StartError(Exception):
    """The service could not start, for a reason that its user can mend."""


class Monitor:
    """The service: everything built in one place, and taken down in reverse order by `close`.

    Raises `StartError`.
    """

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        characteristics = settings.characteristics
        self.bank = Bank([characteristic.detector for characteristic in characteristics])
        self.routes = Routes(characteristics)
        self.herald = Herald(characteristics, settings.publish.source)
        self.tally = Tally(len(characteristics))
        self.stopping = False
        self._messages = 0
        self._unacknowledged: list[Message] = []
        self._noted: set[tuple[Outcome, str]] = set()
        self._sessions_lost = 0
        self._open: dict[int, Event] = {}
        self._since: dict[int, int] = {}
        prefix, client_id = settings.publish.prefix, settings.broker.client_id
        will = Will(f"{prefix}/service/{client_id}", state_document("offline"))
        try:
            self.connection = Connection(settings.broker, self.routes.topics, will)
        except ValueError as error:
            raise StartError(str(error)) from None
        self.publisher = Publisher(self.connection, prefix, client_id)
        self.health = Health()
        self.handover = Handover(self.connection.wake)
        web = settings.web
        try:
            self.web = WebServer(web.host, web.port, Writer(characteristics), self.handover, self.health)
        except OSError as error:
            self.connection.close()
            reason = error.strerror or str(error)
            question = "; is another service there?" if error.errno == EADDRINUSE else ""
            raise StartError(f"web.listen {web.listen} cannot be served: {reason}{question}") from None

    def start(self) -> None:
        """Compile the bank, then open the doors."""
        self.bank.judge(np.zeros(0, READING))
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
        """Take one batch through all stations."""
        batch = self.connection.take(timeout_seconds)
        if self.connection.sessions_lost != self._sessions_lost:
            self._sessions_lost = self.connection.sessions_lost
            self.tell_all_status()
        if batch:
            self.judge(batch)
        self.publisher.turn()
        self._acknowledge()
        self.connection.send()
        self.handover.serve(self.copies)
        self.health.turn(tuple(self.troubles()))

    def judge(self, batch: Sequence[Message]) -> Verdicts:
        """Take a batch of messages from decoding to the outbox."""
        decoded = self.routes.decode(batch, self._messages)
        self._messages = decoded.messages
        verdicts = self.bank.judge(decoded.readings)
        for event in self.herald.events(verdicts):
            self._speak(event)
        self._unacknowledged += [message for message in batch if message.qos]
        self._count(decoded.readings, decoded.refused, verdicts)
        for note in decoded.notes:
            self._note(note)
        for index in verdicts.set_back.tolist():
            reading = decoded.readings[index]
            name = self.settings.characteristics[int(reading["row"])].id
            log.warning("clock set back", characteristic=name, now=format_time(int(reading["time"])))
        return verdicts

    def _speak(self, event: Event) -> None:
        self.publisher.event(event.characteristic, event.document)
        for rule in event.started:
            self.tally.signals[event.row, rule] += 1
        if event.notice is Notice.RAISED:
            self._open[event.row] = event
        elif event.notice is Notice.RETURNED:
            self._open.pop(event.row, None)
            self._since[event.row] = event.time
        if event.notice is not Notice.JOINED:
            self.tell_status(event.row)

    def tell_status(self, row: int) -> None:
        """Say how a characteristic stands."""
        event = self._open.get(row)
        if event is not None:
            document = status_document("signal", event.time, event.signal)
        else:
            document = status_document("in_control", self._since.get(row, NO_TIME), None)
        self.publisher.status(self.settings.characteristics[row].id, document)

    def tell_all_status(self) -> None:
        """Say how every characteristic stands: after a start, and to a broker that has forgotten."""
        for row in range(len(self.settings.characteristics)):
            self.tell_status(row)

    def _count(self, readings: np.ndarray, refused: Mapping[Outcome, int], verdicts: Verdicts) -> None:
        tally = self.tally
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
        if self.publisher.full:
            yield f"more than {OUTBOX_LIMIT:,} events wait for the broker; no readings are acknowledged meanwhile"

    def copies(self) -> Copies:
        """Return what a scrape shows."""
        tally = self.tally
        return Copies(
            rows=self.bank.rows,
            state=shown(self.bank.state),
            signals=tally.signals.copy(),
            outcomes=tally.outcomes.copy(),
            decision=tally.decision.copy(),
            batch=tally.batch.copy(),
            messages_qos0=self.connection.messages_qos0,
            connected=self.connection.connected,
            outbox=self.publisher.outstanding,
        )

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
        self.web.stop()
        log.info("service stopped")


@contextlib.contextmanager
def stopped_by_signals(monitor: Monitor) -> Iterator[None]:
    """Let SIGTERM and SIGINT end the loop of a monitor."""
    before = {number: signal.signal(number, lambda *_: monitor.stop()) for number in (signal.SIGTERM, signal.SIGINT)}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def run_service(settings: Settings) -> None:
    """Run the service until SIGTERM or SIGINT. Raises `StartError`."""
    sys.setswitchinterval(SWITCH_SECONDS)
    monitor = Monitor(settings)
    with stopped_by_signals(monitor):
        monitor.start()
        while not monitor.stopping:
            monitor.turn()
        monitor.close()
