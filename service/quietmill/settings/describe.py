"""What would run under some settings, for a person to read."""

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from quietmill.model import COUNTS, NELSON, Detector, Rule
from quietmill.settings.characteristic import Characteristic
from quietmill.settings.plant import Settings

__all__ = ["SAFETY", "describe"]

SAFETY = (
    "quietmill informs people. It is no safety function: no interlock, trip or machine guard may depend on it, and "
    "before anyone touches a machine because of a signal, lock-out/tag-out and the site's own procedures come first."
)
DAYS = 86_400


def rules_in_short(detector: Detector) -> str:
    """Return all that may signal, as short as the settings would say it."""
    parts: list[str] = []
    if len(detector.rules) == len(NELSON) and all(
        number == COUNTS[rule][0] for rule, number in detector.rules.items() if rule in COUNTS
    ):
        parts.append("nelson")
    else:
        for rule, number in detector.rules.items():
            parts.append(f"{rule.label} {number:g}" if rule in COUNTS else rule.label)
    if detector.ewma is not None:
        parts.append(f"ewma {detector.ewma.lam:g}/{detector.ewma.width:g}")
    if detector.cusum is not None:
        parts.append(f"cusum {detector.cusum.k:g}/{detector.cusum.h:g}")
    if detector.spread_signals:
        parts.append(Rule.SPREAD.label)
    if detector.side != "both":
        parts.append(f"{detector.side} side only")
    return ", ".join(parts)


def line_of(characteristic: Characteristic) -> tuple[str, ...]:
    """Return the cells of a characteristic's line."""
    detector = characteristic.detector
    reach = detector.width * detector.sigma
    lower, upper = detector.centre - reach, detector.centre + reach
    unit = characteristic.unit or ""
    limits = f"{lower:.6g} … {detector.centre:.6g} … {upper:.6g}"
    return characteristic.id, f"{limits} {unit}".rstrip(), rules_in_short(detector), characteristic.topic


def describe(settings: Settings) -> RenderableType:
    """Return what would run: the connections, then a line a characteristic, then how many there are.

    Limits are control limits, at the multiple of `beyond_limits` or else at 3 sigma, about the centre.
    """
    broker, web = settings.broker, settings.web
    expiry = broker.session_expiry_seconds / DAYS
    topics = len({characteristic.topic for characteristic in settings.characteristics})
    secure = "" if broker.scheme in {"mqtts", "wss"} else ", not encrypted"
    user = f" as user {broker.user}" if broker.user else ""
    kept = f"{settings.record}, but nothing is kept yet" if settings.record else "none; nothing is kept"
    head = Table.grid(padding=(0, 2))
    head.add_row("broker", f"{broker.host}:{broker.port} (MQTT {broker.version}{secure}){user}")
    head.add_row("session", f"{broker.client_id}, kept by the broker for {expiry:g} days without us")
    head.add_row("record", kept)
    head.add_row("web", f"http://{web.listen}/metrics")
    head.add_row(
        "publishes", f"{settings.publish.prefix}/signals, /status and /service, as source {settings.publish.source}"
    )
    table = Table(box=None, padding=(0, 2, 0, 0), pad_edge=False, header_style="bold")
    table.add_column("characteristic", overflow="fold", no_wrap=False)
    table.add_column("lower limit … centre … upper limit", overflow="fold")
    table.add_column("may signal", overflow="fold")
    table.add_column("topic", overflow="fold")
    for characteristic in settings.characteristics:
        table.add_row(*(Text(cell) for cell in line_of(characteristic)))
    count = len(settings.characteristics)
    total = Text(
        f"{count} characteristic{'s' * (count != 1)} on {topics} topic{'s' * (topics != 1)}: the settings are good."
    )
    return Group(head, Text(), table, Text(), total, Text(SAFETY, style="dim"))
