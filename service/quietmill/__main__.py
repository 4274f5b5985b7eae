"""The command `quietmill`, also as `python -m quietmill`."""

import signal

__all__ = ["main"]


def main() -> None:
    """Run the command; Ctrl-C while it is still being loaded ends it without a traceback."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)
    from quietmill.cli import main as command  # noqa: PLC0415  the loading is what may be interrupted

    signal.signal(signal.SIGINT, signal.default_int_handler)
    command()


if __name__ == "__main__":
    main()
