"""`python -m quietmill` is the command `quietmill`."""

from quietmill.cli import main

main()
