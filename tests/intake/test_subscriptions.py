from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.reasoncodes import ReasonCode
from structlog.testing import capture_logs

from quietmill.intake.subscriptions import Subscriptions

GRANTED = ReasonCode(PacketTypes.SUBACK, "Granted QoS 1")
REFUSED = ReasonCode(PacketTypes.SUBACK, "Not authorized")
TOPICS = tuple(f"tiles/press/{number}" for number in range(6))


def test_until_every_packet_is_answered_the_service_is_not_ready() -> None:
    subscriptions = Subscriptions(TOPICS)
    subscriptions.begin([(1, TOPICS[:3]), (2, TOPICS[3:])])
    subscriptions.answered(1, [GRANTED] * 3)
    assert subscriptions.trouble == "the broker has not yet granted the subscriptions"
    subscriptions.answered(2, [GRANTED] * 3)
    assert subscriptions.trouble == ""


def test_many_refusals_are_one_line_that_names_a_few() -> None:
    subscriptions = Subscriptions(TOPICS)
    subscriptions.begin([(1, TOPICS)])
    subscriptions.answered(1, [GRANTED] + [REFUSED] * 5)
    assert subscriptions.trouble == (
        "the broker refused 5 of 6 subscriptions: tiles/press/1 (Not authorized), tiles/press/2 (Not authorized), "
        "tiles/press/3 (Not authorized), …"
    )


def test_the_same_refusal_on_a_later_connection_is_not_said_again() -> None:
    subscriptions = Subscriptions(TOPICS[:1])
    with capture_logs() as logs:
        for answer in (REFUSED, REFUSED, GRANTED, REFUSED):
            subscriptions.begin([(1, TOPICS[:1])])
            subscriptions.answered(1, [answer])
    assert len(logs) == 2


def test_only_topics_that_nobody_wants_are_given_up_and_each_once() -> None:
    subscriptions = Subscriptions(TOPICS[:1])
    asked = [subscriptions.dispensable(topic) for topic in (TOPICS[0], TOPICS[1], TOPICS[1], TOPICS[2])]
    assert asked == [False, True, False, True]
