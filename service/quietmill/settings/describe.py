"""What would run under some settings, for a person to read: on a terminal of any width, in a file, in a pipe."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from math import floor, log10
from typing import Final, NamedTuple

from rich.cells import cell_len
from rich.console import Console, ConsoleOptions, RenderResult
from rich.text import Text

from quietmill.model import COUNTS, NELSON, Detector, Rule
from quietmill.settings.characteristic import Characteristic
from quietmill.settings.plant import Broker, Settings

__all__ = ["SAFETY", "Description", "describe"]

NO_RECORD: Final = "none: each start begins afresh"
SAFETY: Final = (
    "quietmill informs people. It is no safety function: no interlock, trip or machine guard may depend on it, and "
    "before anyone touches a machine because of a signal, lock-out/tag-out and the site's own procedures come first."
)
UNITS_OF_TIME: Final = (("d", 86_400), ("h", 3_600), ("m", 60), ("s", 1))
GAP: Final = "  "
NARROWEST: Final = 20
"""Columns that the last column of a line needs; with fewer, what belongs there goes to a line of its own."""


class Line(NamedTuple):
    """A characteristic in cells."""

    name: str
    lower: str
    centre: str
    upper: str
    unit: str
    signals: str
    topic: str


TITLES: Final = Line("characteristic", "lower", "centre", "upper", "", "may signal", "topic")


def printable(text: str) -> str:
    return "".join(character if character.isprintable() else "\N{REPLACEMENT CHARACTER}" for character in text)


def duration(seconds: int) -> str:
    """Return a duration as the settings write it.

    >>> [duration(seconds) for seconds in (604_800, 90, 3_600)]
    ['7d', '90s', '1h']
    """
    return next(f"{seconds // size}{unit}" for unit, size in UNITS_OF_TIME if seconds % size == 0)


def number(value: float, sigma: float) -> str:
    """Return a value with the digits that matter beside its sigma.

    >>> number(8.38, 0.08), number(1460.0, 4.0), number(0.1 + 0.2, 0.01), number(1e-7, 1e-8)
    ('8.38', '1460', '0.3', '1e-07')
    """
    decimals = 2 - floor(log10(sigma))
    rounded = round(value, decimals)
    if rounded != 0 and not 1e-4 <= abs(rounded) < 1e12:
        return f"{rounded:.6g}"
    text = f"{rounded:.{max(decimals, 0)}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return "0" if text == "-0" else text


def signals_of(detector: Detector) -> str:
    """Return all that may signal, as short as the settings would say it."""
    names = {Rule.BEYOND_LIMITS: "beyond {:g}\N{GREEK SMALL LETTER SIGMA}"}
    parts = [names.get(rule, rule.label + " {:g}" * (rule in COUNTS)).format(n) for rule, n in detector.rules.items()]
    if detector.rules == {rule: COUNTS[rule][0] if rule in COUNTS else 0 for rule in NELSON}:
        parts = ["nelson"]
    if detector.ewma is not None:
        parts.append(f"ewma {detector.ewma.lam:g}/{detector.ewma.width:g}")
    if detector.cusum is not None:
        parts.append(f"cusum {detector.cusum.k:g}/{detector.cusum.h:g}")
    if detector.spread_signals:
        parts.append(Rule.SPREAD.label)
    if detector.side != "both":
        parts.append(f"{detector.side} side only")
    return ", ".join(parts)


def line_of(characteristic: Characteristic) -> Line:
    """Return a characteristic's line."""
    detector = characteristic.detector
    reach = detector.width * detector.sigma
    lower, centre, upper = (
        number(value, detector.sigma) for value in (detector.centre - reach, detector.centre, detector.centre + reach)
    )
    unit, topic = printable(characteristic.unit or ""), printable(characteristic.topic)
    return Line(characteristic.id, lower, centre, upper, unit, signals_of(detector), topic)


def session_of(broker: Broker) -> str:
    if broker.version == "3.1.1":
        return f"{broker.client_id}, kept by the broker for as long as it is set to (MQTT 3.1.1)"
    return f"{broker.client_id}, kept by the broker for {duration(broker.session_expiry_seconds)} without the service"


def connections(settings: Settings) -> Iterator[tuple[str, str]]:
    """Yield what the service is joined to: a word, and what of it."""
    broker, prefix = settings.broker, settings.publish.prefix
    secure = "encrypted" if broker.scheme in {"mqtts", "wss"} else "not encrypted"
    path = broker.path if broker.scheme in {"ws", "wss"} else ""
    user = f"user {printable(broker.user)}" if broker.user else "no user"
    host = f"[{broker.host}]" if ":" in broker.host else broker.host
    yield "broker", f"{broker.scheme}://{host}:{broker.port}{path}, MQTT {broker.version}, {secure}, {user}"
    yield "session", session_of(broker)
    yield (
        "record",
        f"{printable(settings.record)}: state and what is to be said; no history yet" if settings.record else NO_RECORD,
    )
    yield "web", f"http://{settings.web.listen}/metrics, /healthz, /readyz"
    yield "publishes", f"below {prefix}/: signals, status, service; as source {settings.publish.source}"


def wrapped(text: str, width: int | None, separator: str = " ") -> list[str]:
    """Return a text in lines of at most a width, cut only where it has the separator.

    >>> wrapped("beyond_limits 4, same_side 9, cusum 0.5/8", 20, ", ")
    ['beyond_limits 4,', 'same_side 9,', 'cusum 0.5/8']
    """
    lines: list[str] = []
    for part in text.split(separator):
        if lines and (width is None or cell_len(lines[-1]) + len(separator) + cell_len(part) < width):
            lines[-1] += separator + part
        else:
            lines[-1:] = [lines[-1] + separator.rstrip(), part] if lines else [part]
    return lines


def padded(text: str, width: int, right: bool = False) -> str:
    space = " " * (width - cell_len(text))
    return space + text if right else text + space


@dataclass(frozen=True, slots=True)
class Table:
    """Lines of characteristics, with the widths of their columns (0: none has anything there)."""

    lines: Sequence[Line]
    widths: Sequence[int]

    def text(self, line: Line, width: int | None, name_width: int, indent: str = "", topic: bool = True) -> Text:
        """Return one line; what may signal is cut at commas and goes on below, where it does not fit."""
        style = "dim" if line is TITLES else ""
        text = Text(indent)
        if cell_len(line.name) > name_width:
            text.append(line.name, style or "bold").append("\n" + indent + " " * name_width)
        else:
            text.append(padded(line.name, name_width), style or "bold")
        for column in (1, 2, 3):
            text.append(GAP + padded(line[column], self.widths[column], right=True), style)
        if self.widths[4]:
            text.append(" " + padded(line.unit, self.widths[4]), "dim")
        at = (
            len(indent)
            + name_width
            + sum(self.widths[1:4])
            + 3 * len(GAP)
            + (self.widths[4] + 1) * bool(self.widths[4])
        )
        room = None if width is None else width - at - len(GAP)
        if room is not None and room < NARROWEST:
            at, room = len(indent) + len(GAP), max(NARROWEST, (width or 0) - len(indent) - 2 * len(GAP))
            text.append("\n" + " " * at)
        first, *rest = wrapped(line.signals, room, ", ")
        text.append(GAP + (padded(first, self.widths[5]) if topic else first), style)
        if topic:
            text.append(GAP + line.topic, "dim")
        for more in rest:
            text.append("\n" + " " * at + GAP + more, style)
        return text

    def render(self, width: int | None) -> Iterator[Text]:
        """Yield a line a characteristic; where these are too wide, below a line for each topic."""
        whole = sum(self.widths) + 5 * len(GAP) + bool(self.widths[4])
        if width is None or whole <= width:
            yield self.text(TITLES, None, self.widths[0])
            for line in self.lines:
                yield self.text(line, None, self.widths[0])
            return
        by_topic: dict[str, list[Line]] = {}
        for line in self.lines:
            by_topic.setdefault(line.topic, []).append(line)
        name_width = min(self.widths[0], max(width // 3, len(TITLES.name)))
        yield self.text(TITLES, width, name_width, GAP, topic=False)
        for topic, lines in by_topic.items():
            yield Text(topic, "dim")
            for line in lines:
                yield self.text(line, width, name_width, GAP, topic=False)


@dataclass(frozen=True, slots=True)
class Description:
    """What would run, laid out for the console that prints it: its width, or any with `soft_wrap=True`."""

    settings: Settings

    def parts(self, width: int | None) -> Iterator[Text]:
        """Yield all lines for a width; None is as wide as it takes."""
        settings = self.settings
        for word, what in connections(settings):
            lines = wrapped(what, None if width is None else max(width - 11, NARROWEST))
            yield Text.assemble((f"{word:<11}", "dim"), ("\n" + " " * 11).join(lines))
        yield Text()
        lines = [line_of(characteristic) for characteristic in settings.characteristics]
        widths = [max(map(cell_len, column)) for column in zip(TITLES, *lines, strict=True)]
        yield from Table(lines, widths).render(width)
        yield Text()
        for sentence in (self.count(), *self.notes()):
            yield Text("\n".join(wrapped(sentence, width)))
        yield Text("\n" + "\n".join(wrapped(SAFETY, width)), "dim")

    def count(self) -> str:
        """Return how much would run."""
        characteristics = self.settings.characteristics
        count, topics = len(characteristics), len({characteristic.topic for characteristic in characteristics})
        what = "characteristic" if count == 1 else "characteristics"
        where = "topic" if topics == 1 else "topics"
        return f"The settings are good: {count:,} {what} on {topics:,} {where}."

    def notes(self) -> Iterator[str]:
        """Yield what one may not expect."""
        timeless = [one.id for one in self.settings.characteristics if not one.detector.timed]
        if timeless:
            which = timeless[0] if len(timeless) == 1 else f"{len(timeless):,}, {timeless[0]} the first of them,"
            verb = "takes its" if len(timeless) == 1 else "take their"
            yield f"Without payload.time, {which} {verb} time from the arrival of the message."

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        for text in self.parts(None if options.no_wrap else options.max_width):
            for line in text.split("\n", allow_blank=True):
                line.rstrip()
                line.no_wrap, line.overflow = True, "ignore"
                yield line


def describe(settings: Settings) -> Description:
    """Return what would run: the connections, then a line a characteristic, then how many there are.

    Limits are control limits, at the multiple of `beyond_limits` or else at 3 sigma, about the centre. Print it with
    `soft_wrap=True` where lines may be as long as they are, such as in a pipe.
    """
    return Description(settings)
