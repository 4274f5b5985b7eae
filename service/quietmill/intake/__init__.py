"""From MQTT messages to readings: the broker, topics to characteristics, payload formats, screening."""
