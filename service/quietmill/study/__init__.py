"""History: what would have been said, by the engine that judges live readings."""
