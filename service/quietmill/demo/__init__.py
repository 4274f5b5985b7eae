"""A simulated tile works with planted faults: broker, plant and the real service, in one command."""
