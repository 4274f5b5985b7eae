"""What the service tells others: MQTT, metrics, health."""
