"""A pressing line in miniature: characteristics, and messages as a broker would deliver them."""

from quietmill.intake.message import Message
from quietmill.intake.routes import Decoded
from quietmill.settings import Baseline, Characteristic, Payload

TOPIC = "tiles/press/1/force"
ARRIVAL = 1_772_439_270_000_000  # 2026-03-02T08:14:30Z
JSON = {"value": "/force", "time": "/at"}


def characteristic(
    id: str = "press1.force",  # noqa: A002 (the settings' own word)
    topic: str = TOPIC,
    *,
    retained: str = "skip",
    centre: float = 240.0,
    sigma: float = 2.0,
    **keys: object,
) -> Characteristic:
    """A characteristic whose payload is the number itself, unless `keys` of `payload` say otherwise."""
    return Characteristic(
        id=id,
        topic=topic,
        payload=Payload(**keys) if keys else None,
        baseline=Baseline(centre=centre, sigma=sigma),
        retained=retained,
    )


def message(content: bytes | str, topic: str = TOPIC, *, arrival: int = ARRIVAL, retain: bool = False) -> Message:
    """A message of QoS 1 on the first connection."""
    data = content.encode() if isinstance(content, str) else content
    return Message(topic, data, qos=1, retain=retain, dup=False, mid=1, arrival=arrival, epoch=1)


def refused(decoded: Decoded) -> dict[str, int]:
    """What was refused, in the words of metrics and logs."""
    return {outcome.label: count for outcome, count in decoded.refused.items()}
