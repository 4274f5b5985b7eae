"""quietmill listens to plant sensors over MQTT and speaks only when a process has really changed."""

__all__ = ["__version__"]

__version__ = "0.1.0"
