"""Log lines: coloured on a terminal, JSON elsewhere, always on standard error."""

import logging
import sys

import structlog

__all__ = ["set_up_logs"]


def set_up_logs() -> None:
    """Send every log line, those of libraries included, to standard error in one form."""
    shared: list[structlog.typing.Processor] = [
        structlog.contextvars.merge_contextvars,
        structlog.processors.add_log_level,
        structlog.processors.TimeStamper(fmt="iso", utc=True),
    ]
    on_terminal = sys.stderr.isatty()
    last: list[structlog.typing.Processor] = (
        [structlog.dev.ConsoleRenderer(colors=True, pad_event_to=0)]
        if on_terminal
        else [structlog.processors.format_exc_info, structlog.processors.JSONRenderer(ensure_ascii=False)]
    )
    structlog.configure(
        processors=[*shared, *last],
        logger_factory=structlog.PrintLoggerFactory(sys.stderr),
        wrapper_class=structlog.make_filtering_bound_logger(logging.INFO),
        cache_logger_on_first_use=True,
    )
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(
        structlog.stdlib.ProcessorFormatter(
            foreign_pre_chain=shared, processors=[structlog.stdlib.ProcessorFormatter.remove_processors_meta, *last]
        )
    )
    logging.basicConfig(handlers=[handler], level=logging.WARNING, force=True)
