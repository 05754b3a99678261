"""Structured events: one JSON object a line in a pipe, readable on a terminal."""

import logging
import sys
from typing import TextIO

import structlog


def configure(stream: TextIO | None = None) -> None:
    """Send the log to *stream* (standard error), as JSON unless that is a terminal. Times are UTC."""
    out = sys.stderr if stream is None else stream
    renderer: structlog.typing.Processor = (
        structlog.dev.ConsoleRenderer() if out.isatty() else structlog.processors.JSONRenderer(sort_keys=False)
    )
    chain: list[structlog.typing.Processor] = [
        structlog.contextvars.merge_contextvars,
        structlog.processors.add_log_level,
        structlog.processors.TimeStamper(fmt="iso", utc=True),
    ]
    if not out.isatty():
        chain.append(structlog.processors.dict_tracebacks)
    structlog.configure(
        processors=[*chain, renderer],
        wrapper_class=structlog.make_filtering_bound_logger(logging.INFO),
        logger_factory=structlog.PrintLoggerFactory(out),
        cache_logger_on_first_use=False,
    )
