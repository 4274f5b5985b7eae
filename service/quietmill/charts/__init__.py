"""The judging core: readings in, verdicts out, pure and compiled."""
