"""A pressing line in miniature: characteristics, and messages as a broker would deliver them."""

from quietmill.intake.message import Message
from quietmill.intake.routes import Decoded
from quietmill.model import Detector
from quietmill.settings import Baseline, Characteristic, Payload

TOPIC = "tiles/press/1/force"
ARRIVAL = 1_772_439_270_000_000  # 2026-03-02T08:14:30Z
JSON = {"value": "/force", "time": "/at"}


def payload(**keys: object) -> Payload:
    """What a characteristic's `payload` says, and nothing where it says nothing."""
    silent = {
        "value": None,
        "time": None,
        "sequence": None,
        "array": None,
        "time_unit": None,
        "sequence_size": None,
        "parse_strings": False,
        "scale": 1.0,
        "offset": 0.0,
    }
    return Payload(**(silent | keys))


def characteristic(
    id: str = "press1.force",  # noqa: A002 (the settings' own word)
    topic: str = TOPIC,
    *,
    retained: str = "skip",
    centre: float = 240.0,
    sigma: float = 2.0,
    **keys: object,
) -> Characteristic:
    """A characteristic whose payload is the number itself, unless `keys` say where in JSON things stand."""
    return Characteristic(
        id=id,
        topic=topic,
        payload=payload(**keys) if keys else None,
        unit="kN",
        kind="individuals",
        baseline=Baseline(centre=centre, sigma=sigma, version="00000000"),
        detector=Detector(centre=centre, sigma=sigma),
        favourable="none",
        specification=None,
        reaction=None,
        labels={},
        retained=retained,
    )


def message(content: bytes | str, topic: str = TOPIC, *, arrival: int = ARRIVAL, retain: bool = False) -> Message:
    """A message of QoS 1 on the first connection."""
    data = content.encode() if isinstance(content, str) else content
    return Message(topic, data, qos=1, retain=retain, dup=False, mid=1, arrival=arrival, epoch=1)


def refused(decoded: Decoded) -> dict[str, int]:
    """What was refused, in the words of metrics and logs."""
    return {outcome.label: count for outcome, count in decoded.refused.items()}
